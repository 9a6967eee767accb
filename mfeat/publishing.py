"""From the folder of a complete run to a table that others see, in steps that can be repeated."""

import json
import logging
from typing import Any

from mfeat.parts import drop_plan, run_folder
from mfeat.schema import INPUTS, MANIFEST, REJECTS

_log = logging.getLogger("mfeat")


class OutputRefused(ValueError):
    """The output holds something that this run would have to change; the message says what."""


def manifest_of(store: Any, folder: str = "") -> dict[str, Any] | None:
    """Return the manifest of a complete table, or None where there is none."""
    name = f"{folder}/{MANIFEST}" if folder else MANIFEST
    try:
        with store.open(name) as stream:
            found = json.loads(stream.read())
    except FileNotFoundError:
        return None
    except ValueError:
        raise OutputRefused(f"{store.location}/{name} is no manifest of a feature table") from None
    if not isinstance(found, dict) or "table_version" not in found:
        raise OutputRefused(f"{store.location}/{name} is no manifest of a feature table")
    return found


def publish(store: Any, run: str) -> None:
    """Let the table of a complete run take its place; can be repeated from wherever it stopped.

    The run's own manifest says that it is complete. The old table goes first, the new manifest
    comes last, and the plan goes before it, so that no half state looks like another.
    """
    folder = run_folder(run)
    manifest = manifest_of(store, folder)
    store.remove(MANIFEST)
    store.settle()  # else it might be back after a power cut, beside new parts
    there = set(store.names(folder))
    wanted = [part["name"] for part in manifest["parts"]]
    for name in (*wanted, REJECTS, INPUTS):
        if name in there:
            store.move(f"{folder}/{name}", name)
    for name in set(store.names()) - set(wanted):
        if name.startswith("part-") and name.endswith(".parquet"):
            store.remove(name)
    drop_plan(store, run)
    store.settle()
    store.move(f"{folder}/{MANIFEST}", MANIFEST)
    store.settle()
    remove_leftovers(store, run)


def remove_leftovers(store: Any, run: str) -> None:
    """Delete the folder of a run that nobody needs any more.

    On network file systems files that some worker still maps cannot be deleted; the next call does.
    """
    try:
        store.remove_tree(run_folder(run))
    except OSError as error:
        _log.warning("%s; it is not needed any more", error)
