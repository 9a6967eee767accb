"""The plan of a dump: which patches of which images go into which part.

Parts follow from the sources and the settings alone, not from the number of workers, so that a run
may be resumed with another number of them and gives the same table.
"""

import itertools
from collections import Counter
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
from joblib import Parallel, delayed
from sklearn.base import clone
from tqdm import tqdm

from mfeat.entries import CARRIED, Sources
from mfeat.images import ImageInfo, UnreadableImage, scan
from mfeat.options import DumpSettings, uniform_pitch
from mfeat.plan import VectorPlan
from mfeat.schema import table_schema, table_settings
from mfeat.settings import resolve

#: Compressed images of up to this many pixels are decoded whole, so that damage anywhere in one
#: rejects the file and not a part of it; larger ones are read in strips where the format allows.
WHOLE_PIXELS = 1 << 24

# Cost of a part in pixels: those of its patches and those of the images it decodes. Parts grow with
# the job between these, so that small jobs are shared well and large ones make few files.
_PART_COSTS = (1 << 23, 1 << 27)
_PARTS_WANTED = 256
_COST_OF_FILE = 20_000
_COST_OF_REJECT = 1_000

_SCANNED_AT_ONCE = 64

_SIZED = ("part", "patches", "rows", "cols")


class Item(NamedTuple):
    """Some patches of one image: rows of its grid, or one region; or the reason why none.

    Attributes
    ----------
    entry : int
        Row of the sources.
    page : int
        Page of the file.
    rows, cols : int
        Size of the image.
    row, col, height, width : int
        Region to cut: the image itself if the sources name none.
    first, stop : int
        Rows of the grid of patches in the region; 0 and 0 where the region is one patch.
    split : bool
        Whether other items have the rest of the image.
    patches : int
        Number of patches.
    reason : str or None
        Why the image is rejected.
    """

    entry: int
    page: int
    rows: int
    cols: int
    row: int
    col: int
    height: int
    width: int
    first: int
    stop: int
    split: bool
    patches: int
    reason: str | None


_ITEM_SCHEMA = pa.schema(
    [(name, pa.int32()) for name in Item._fields[:10]]
    + [("split", pa.bool_()), ("patches", pa.int64()), ("reason", pa.string())]
    + [("part", pa.int32())]
)


@dataclass(frozen=True)
class Plan:
    """What a dump is going to write.

    Attributes
    ----------
    sources : Sources
    settings : DumpSettings
        With the pitch of the manifest, if that is the same for all images.
    schema : pyarrow.Schema
        Of the table.
    items : pyarrow.Table
        Columns as in `Item`, and `part`, ascending.
    notes : dict of str to int
        Remarks on images and how many images each concerns.
    """

    sources: Sources
    settings: DumpSettings
    schema: pa.Schema
    items: pa.Table
    notes: dict[str, int]


def part_sizes(items: pa.Table, size: tuple[int, int]) -> tuple[np.ndarray, np.ndarray]:
    """Return the number of patches of each part, and its cost in pixels."""
    columns = (items[name].to_numpy().astype(np.int64) for name in _SIZED)
    part, patches, rows, cols = columns
    patches_of = np.bincount(part, patches).astype(np.int64)
    return patches_of, np.bincount(part, patches * (size[0] * size[1]) + rows * cols)


class PitchedPlans:
    """The plan of the vector for each pitch of the images."""

    def __init__(self, settings: DumpSettings):
        self._settings = settings
        self._of_pitch = lru_cache(64)(self._make)
        self._own = settings.transformer._plan(learned=True)

    def of(self, pitch: tuple[float, float] | None) -> VectorPlan:
        """Return the plan for a pitch (rows, columns); None is that of the transformer."""
        if pitch is None or pitch == self._own.pitch:
            return self._own
        return self._of_pitch(pitch)

    def _make(self, pitch: tuple[float, float]) -> VectorPlan:
        return resolve(clone(self._settings.transformer).set_params(pitch=pitch))


def pitch_of(entry: dict[str, Any]) -> tuple[float, float] | None:
    """Return the pitch (rows, columns) of an entry of the sources, None where it has none."""
    if entry["pitch_x"] is None:
        return None
    return (entry["pitch_y"], entry["pitch_x"])


def with_pitch(settings: DumpSettings, sources: Sources) -> tuple[DumpSettings, bool]:
    """Return settings with the pitch of the sources if all share one, and whether they differ."""
    columns = [sources.entries[name] for name in ("pitch_y", "pitch_x")]
    if columns[0].null_count:
        return settings, False
    pitch = uniform_pitch(settings, np.stack([column.to_numpy() for column in columns], axis=1))
    if pitch is None:
        return settings, True
    transformer = settings.transformer
    if pitch != transformer._plan().pitch:
        transformer = clone(transformer).set_params(pitch=pitch)
        if transformer.level_rule == "fitted":
            raise ValueError(
                f"the levels were learned at pitch {settings.transformer.pitch}, the manifest has "
                f"{pitch}; fit the transformer with that pitch"
            )
    return replace(settings, transformer=transformer), False


def make_plan(
    sources: Sources, settings: DumpSettings, parallel: Parallel | None = None, quiet: bool = True
) -> Plan:
    """Read the headers of all images and decide what goes into which part.

    Raises
    ------
    ValueError
        If the settings cannot go with the sources: pitch, column names, patches too small for the
        scales of the fields.
    """
    settings, per_image = with_pitch(settings, sources)
    if not per_image:
        _check_grid(sources, settings)
    units = sources.entries["unit"].unique().to_pylist()
    about = table_settings(
        settings.transformer, per_image, settings.channel, units[0] if len(units) == 1 else None
    )
    label = sources.entries["label"].type
    carried = [
        pa.field(name, sources.entries.schema.field(CARRIED + name).type)
        for name in sources.carried
    ]
    schema = table_schema(
        settings.transformer,
        about,
        per_image,
        pa.int64() if settings.label_from == "truth" else label,
        carried,
    )
    notes: Counter[str] = Counter()
    items = list(_items(sources, settings, parallel, quiet, notes))
    return Plan(sources, settings, schema, _in_parts(items, settings, sources), dict(notes))


def _items(
    sources: Sources,
    settings: DumpSettings,
    parallel: Parallel | None,
    quiet: bool,
    notes: Counter[str],
) -> Iterator[tuple[Item, bool]]:
    """Yield one item an image or region, and whether it may be cut into several."""
    plans = PitchedPlans(settings)
    entries = sources.entries
    needed = ["location", "row", "col", "height", "width", "pitch_x", "pitch_y"]
    known: dict[str, list[ImageInfo] | str] = {}
    regions = entries["row"].null_count < len(entries)
    progress = tqdm(total=len(entries), desc="headers", unit="image", disable=quiet)
    for start in range(0, len(entries), 64 * _SCANNED_AT_ONCE):
        some = entries.select(needed).slice(start, 64 * _SCANNED_AT_ONCE).to_pylist()
        if not regions:
            known.clear()  # nothing is listed twice
        wanted = list(dict.fromkeys(e["location"] for e in some if e["location"] not in known))
        known |= zip(wanted, _scan_all(wanted, settings, parallel), strict=True)
        for k, entry in enumerate(some, start):
            found = known[entry["location"]]
            if isinstance(found, str):
                yield _rejected(k, found, entry), False
                continue
            for info in found:
                notes.update(note for note in info.notes.split("; ") if note)
                yield _item(k, entry, info, settings, plans)
        progress.update(len(some))
    progress.close()


def _scan_all(
    locations: list[str], settings: DumpSettings, parallel: Parallel | None
) -> Iterable[list[ImageInfo] | str]:
    how = (settings.max_pixels, settings.channel)
    if parallel is None or len(locations) <= _SCANNED_AT_ONCE:
        return _scan_some(locations, *how)
    parts = (
        locations[k : k + _SCANNED_AT_ONCE] for k in range(0, len(locations), _SCANNED_AT_ONCE)
    )
    done = parallel(delayed(_scan_some)(part, *how) for part in parts)
    return [found for some in done for found in some]


def _scan_some(
    locations: list[str], max_pixels: int, channel: str | int
) -> list[list[ImageInfo] | str]:
    """Return what the headers of files say, or the reason why they cannot be read."""
    found: list[list[ImageInfo] | str] = []
    for location in locations:
        try:
            found.append(scan(location, max_pixels, channel))
        except UnreadableImage as error:
            found.append(str(error))
    return found


def _rejected(entry: int, reason: str, about: dict[str, Any], info: ImageInfo | None = None):
    region = [about[name] if about["row"] is not None else -1 for name in ("row", "col")]
    page = 0 if info is None else info.page
    return Item(entry, page, 0, 0, *region, 0, 0, 0, 0, False, 0, reason)


def _item(
    entry: int, about: dict[str, Any], info: ImageInfo, settings: DumpSettings, plans: PitchedPlans
) -> tuple[Item, bool]:
    rows, cols = info.shape
    page = f"page {info.page}: " if info.page else ""
    region = (0, 0, rows, cols)
    if about["row"] is not None:
        region = tuple(about[name] for name in ("row", "col", "height", "width"))
        if region[0] + region[2] > rows or region[1] + region[3] > cols:
            reason = (
                f"{page}region of {region[2]}x{region[3]} pixels at row {region[0]}, column "
                f"{region[1]} reaches outside the image of {rows}x{cols}"
            )
            return _rejected(entry, reason, about, info), False
    single = about["row"] is not None and settings.regions == "patch"
    size = region[2:] if single else settings.grid.size
    plan = plans.of(pitch_of(about))
    wide = size[1] if info.mapped else cols
    if size[0] * wide > settings.max_pixels:
        reason = (
            f"{page}too large: {size[0]} rows of {wide} pixels have to be held at once, the limit "
            f"max_pixels is {settings.max_pixels}"
        )
        return _rejected(entry, reason, about, info), False
    try:
        plan.check_scales(size)
        starts = None if single else settings.grid.starts(region[2:])
    except ValueError as error:
        return _rejected(entry, f"{page}{error}", about, info), False
    if starts is None:
        return Item(entry, info.page, rows, cols, *region, 0, 0, False, 1, None), False
    count = len(starts[0]) * len(starts[1])
    item = Item(entry, info.page, rows, cols, *region, 0, len(starts[0]), False, count, None)
    return item, info.mapped or (info.in_strips and rows * cols > WHOLE_PIXELS)


def _check_grid(sources: Sources, settings: DumpSettings) -> None:
    """Refuse settings under which no patch of the grid is large enough for the fields."""
    entries = sources.entries
    if settings.regions == "grid" or entries["row"].null_count:
        plan = settings.transformer._plan()
        plan.check_scales(settings.grid.size)


def _in_parts(items: list[tuple[Item, bool]], settings: DumpSettings, sources: Sources) -> pa.Table:
    """Cut items where they may be cut and give each a part, in order."""
    pixels = settings.grid.size[0] * settings.grid.size[1]
    locations = sources.entries["location"].combine_chunks().dictionary_encode().indices.to_numpy()

    def image_of(item: Item) -> tuple[int, int]:
        return int(locations[item.entry]), item.page

    def cost(item: Item, decoded: bool) -> int:
        if item.reason is not None:
            return _COST_OF_REJECT
        own = pixels if item.stop else item.height * item.width
        image = 0 if decoded else item.rows * item.cols + _COST_OF_FILE
        return item.patches * own + image

    before = itertools.chain([None], (image_of(item) for item, _ in items))
    costs = [
        cost(item, image_of(item) == last) for (item, _), last in zip(items, before, strict=False)
    ]
    total = sum(costs)
    target = min(max(total // _PARTS_WANTED, _PART_COSTS[0]), _PART_COSTS[1])
    columns: list[list] = [[] for _ in Item._fields]
    parts, part, filled = [], 0, 0
    for (item, divisible), own in zip(items, costs, strict=True):
        for piece in _pieces(item, target, own) if divisible else (item,):
            if filled >= target:
                part, filled = part + 1, 0
                own = cost(item, False)  # the image of the item before is decoded elsewhere
            filled += own if not piece.split else own * piece.patches // item.patches
            for column, value in zip(columns, piece, strict=True):
                column.append(value)
            parts.append(part)
    return pa.Table.from_arrays(
        [pa.array(c, f.type) for c, f in zip([*columns, parts], _ITEM_SCHEMA, strict=True)],
        schema=_ITEM_SCHEMA,
    )


def _pieces(item: Item, target: int, cost: int) -> Iterator[Item]:
    """Cut an item at rows of its grid into pieces of about equal cost, none above the target."""
    count = min(-(-cost // target), item.stop)
    if count <= 1:
        yield item
        return
    across = item.patches // item.stop
    bounds = [item.stop * k // count for k in range(count + 1)]
    for first, stop in itertools.pairwise(bounds):
        yield item._replace(first=first, stop=stop, split=True, patches=(stop - first) * across)
