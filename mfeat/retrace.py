"""From a feature table back to the images that it was made of, and how they were read."""

from typing import Any

import pyarrow.parquet as pq

from mfeat import locations, storage
from mfeat.entries import Sources, changed_inputs, with_stamps
from mfeat.options import DumpSettings, dump_settings
from mfeat.parts import InputChanged, load_entries
from mfeat.publishing import manifest_of
from mfeat.schema import MANIFEST, about, per_image_pitch, restored


def is_table(source: Any) -> bool:
    """Tell whether a source is the folder of a complete feature table."""
    try:
        place = locations.as_location(source, "source")
    except (TypeError, ValueError):
        return False  # the reason is told where it is read
    return locations.exists(place) and storage.output(place).exists(MANIFEST)


def table_inputs(source: Any) -> tuple[Sources, DumpSettings]:
    """Return the images of a table, with their labels, and the settings it was made with.

    Raises
    ------
    InputChanged
        If an image is not what it was; it is named.
    ValueError
        If the images had pitches of their own.
    """
    place = locations.as_location(source, "source")
    store = storage.output(place)
    manifest = manifest_of(store)
    with store.open(manifest["parts"][0]["name"]) as stream:
        made = about(pq.read_schema(stream))
    if per_image_pitch(made["transformer"]):
        raise ValueError(
            f"the images of {place} have pitches of their own, but patches are compared at one "
            "pitch; name the manifest instead, with a transformer of the pitch that is meant"
        )
    record = manifest["record"]
    keywords = {name: record[name] for name in dump_settings().keywords()}
    entries = load_entries(store, "")
    now = with_stamps(entries.drop_columns(["stamp"]))
    if found := changed_inputs(entries, now):
        lines = "\n  ".join(found)
        raise InputChanged(f"the images of {place} have changed since it was made:\n  {lines}")
    settings = dump_settings(restored(made["transformer"]), **keywords)
    return Sources(entries, ()), settings
