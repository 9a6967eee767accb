"""Writing one part of a table: what a worker does, wherever it runs.

A worker is told the output, the run and the number of the part, and reads the rest from the plan
that lies beside the parts. It decodes images, cuts patches, computes their vectors and writes the
rows and the rejects itself, so neither pixels nor features travel between processes.
"""

import json
import os
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from mfeat import __version__, locations, stacks, storage
from mfeat._pages import OutOfResources, UnreadableImage
from mfeat.cutting import BAND_PIXELS, Cut, OpenFiles, cuts
from mfeat.entries import CARRIED, stamp_of_entry
from mfeat.options import DumpSettings, dump_settings
from mfeat.patches import Patches
from mfeat.plan import VectorPlan
from mfeat.planning import Item, PitchedPlans, Plan, part_sizes, pitch_of
from mfeat.schema import (
    INPUTS,
    REJECTS_SCHEMA,
    UNFINISHED,
    PartWriter,
    restored,
    transformer_record,
)
from mfeat.vector import groups_of, refusal, rows_of

# Patches that are computed at once; small images are gathered up to this many.
_BATCH = 256

# What is known of each waiting patch, in this order.
_OF_PATCHES = (
    *("entry", "page", "row", "col", "height", "width"),
    *("valid_fraction", "label", "label_fraction"),
)

#: Runs of this process that were interrupted: their threads stop at the next image.
CANCELLED: set[str] = set()

_PLAN = "plan.arrow"


class InputChanged(RuntimeError):
    """An input is not what it was when the run was planned."""


class Cancelled(RuntimeError):
    """The run was interrupted."""


class PartDone(NamedTuple):
    """What a worker reports: the part's number, rows and rejects."""

    part: int
    rows: int
    rejects: int


class Reject(NamedTuple):
    """Something that is not in the table, and why; row and col are None for a whole image."""

    item: int
    source: str
    row: int | None
    col: int | None
    reason: str


@dataclass(frozen=True, eq=False)
class Run:
    """A planned run as workers see it."""

    store: Any
    name: str
    settings: DumpSettings
    entries: pa.Table
    items: pa.Table
    schema: pa.Schema
    plans: PitchedPlans
    notes: dict[str, int]

    @property
    def n_parts(self) -> int:
        """Number of parts."""
        return int(self.items["part"][-1].as_py()) + 1

    def patches_and_costs(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the patches and the cost of each part."""
        return part_sizes(self.items, self.settings.grid.size)

    def items_of(self, part: int) -> list[Item]:
        """Return the items of a part."""
        first, stop = np.searchsorted(self.items["part"].to_numpy(), [part, part + 1])
        rows = self.items.slice(first, stop - first).select(Item._fields).to_pylist()
        return [Item(**row) for row in rows]


def run_folder(run: str) -> str:
    """Return where the files of a run lie until it is complete."""
    return f"{UNFINISHED}/{run}"


def part_name(part: int) -> str:
    """Return the file name of a part."""
    return f"part-{part:05d}.parquet"


def rejects_name(part: int) -> str:
    """Return the file name of the rejects of a part; there is no file where there are none."""
    return f"rejects-{part:05d}.parquet"


def save_run(store: Any, run: str, plan: Plan) -> None:
    """Write a plan where workers find it; the run exists once its last file does."""
    how = {
        "transformer": transformer_record(plan.settings.transformer, False),
        "settings": plan.settings.keywords(),
        "notes": plan.notes,
    }
    metadata = {b"how": json.dumps(how).encode(), b"schema": plan.schema.serialize().to_pybytes()}
    store.make(run_folder(run))
    _write_arrow(store, f"{run_folder(run)}/{INPUTS}", plan.sources.entries)
    items = plan.items.replace_schema_metadata(metadata)
    _write_arrow(store, f"{run_folder(run)}/{_PLAN}", items)


def _write_arrow(store: Any, name: str, table: pa.Table) -> None:
    with store.writing(name) as stream, pa.ipc.new_file(stream, table.schema) as writer:
        writer.write_table(table, max_chunksize=1 << 16)


def _read_arrow(store: Any, name: str) -> pa.Table:
    path = locations.local_path(store.location)
    if path is not None and os.name != "nt":  # mapped: workers on one machine share it
        return pa.ipc.open_file(pa.memory_map(f"{path}/{name}")).read_all()
    with store.open(name) as stream:
        return pa.ipc.open_file(stream.read()).read_all()


def load_entries(store: Any, folder: str) -> pa.Table:
    """Return the entries of the sources of a run or a complete table."""
    return _read_arrow(store, f"{folder}/{INPUTS}" if folder else INPUTS)


def is_planned(store: Any, run: str) -> bool:
    """Tell whether the plan of a run was written completely."""
    return store.exists(f"{run_folder(run)}/{_PLAN}")


def drop_plan(store: Any, run: str) -> None:
    """Delete the plan of a run: what is left of its folder is no run any more."""
    store.remove(f"{run_folder(run)}/{_PLAN}")
    store.settle(run_folder(run))


@lru_cache(2)
def load_run(location: str, run: str) -> Run:
    """Return a planned run; each process reads it once."""
    store = storage.output(location)
    items = _read_arrow(store, f"{run_folder(run)}/{_PLAN}")
    how = json.loads(items.schema.metadata[b"how"])
    settings = dump_settings(restored(how["transformer"]), **how["settings"])
    return Run(
        store=store,
        name=run,
        settings=settings,
        entries=load_entries(store, run_folder(run)),
        items=items,
        schema=pa.ipc.read_schema(pa.py_buffer(items.schema.metadata[b"schema"])),
        plans=PitchedPlans(settings),
        notes=how["notes"],
    )


def write_part(location: str, run: str, part: int, version: str) -> PartDone:
    """Write one part of a run, and its rejects; what is there already is replaced by the same.

    Parameters
    ----------
    location : str
        The output.
    run, part : str, int
        Which part of which run.
    version : str
        The version of mfeat that planned the run.
    """
    if version != __version__:
        raise RuntimeError(
            f"the run was planned by mfeat {version}, this worker has {__version__}; install the "
            "same version on every machine"
        )
    try:
        planned = load_run(location, run)
    except FileNotFoundError:
        raise RuntimeError(
            f"a worker cannot see {location}: workers need storage that all of them reach (one of "
            "memory:// is seen by its own process only)"
        ) from None
    return _PartRun(planned, part).write()


class _PartRun:
    """One part while it is written: patches waiting for their vectors, and rejects."""

    def __init__(self, run: Run, part: int):
        self._run, self._part = run, part
        self._items = run.items_of(part)
        first, last = self._items[0].entry, self._items[-1].entry
        self._entries = run.entries.slice(first, last - first + 1).combine_chunks()
        self._rows = self._entries.select(
            [name for name in self._entries.column_names if not name.startswith(CARRIED)]
        ).to_pylist()
        self._first = first
        self._min_valid = float(run.settings.transformer.min_valid)
        self._rejects: list[Reject] = []
        self._writer: PartWriter | None = None
        self._plan: VectorPlan | None = None
        self._pixels = 0
        self._patches: list[np.ndarray] = []
        self._numbers: list[int] = []  # of the items that the waiting patches belong to
        self._columns: dict[str, list] = {name: [] for name in _OF_PATCHES}

    def write(self) -> PartDone:
        run, folder = self._run, run_folder(self._run.name)
        with run.store.writing(f"{folder}/{part_name(self._part)}") as stream:
            with (
                PartWriter(stream, run.schema) as self._writer,
                OpenFiles(run.settings) as self._files,
            ):
                for number, item in enumerate(self._items):
                    if run.name in CANCELLED:
                        raise Cancelled("interrupted")
                    self._take(number, item)
                self._compute()
                for k in dict.fromkeys(item.entry for item in self._items if item.reason is None):
                    _check_unchanged(self._rows[k - self._first])  # while it was read
            if self._rejects:  # before the part, whose name says that both are complete
                self._write_rejects(f"{folder}/{rejects_name(self._part)}")
        return PartDone(self._part, self._writer.rows, len(self._rejects))

    def _write_rejects(self, name: str) -> None:
        ordered = sorted(self._rejects, key=lambda reject: reject.item)
        columns = list(zip(*ordered, strict=True))[1:]
        arrays = [pa.array(c, f.type) for c, f in zip(columns, REJECTS_SCHEMA, strict=True)]
        with self._run.store.writing(name) as stream:
            table = pa.Table.from_arrays(arrays, schema=REJECTS_SCHEMA)
            pq.write_table(table, stream, compression="zstd")

    def _reject(self, number: int, entry: dict[str, Any], place: tuple, reason: str) -> None:
        page, planned = self._items[number].page, self._items[number].reason
        if page and planned is None:
            reason = f"page {page}: {reason}"
        self._rejects.append(Reject(number, entry["source"], *place, reason))

    def _take(self, number: int, item: Item) -> None:
        """Cut the patches of an item; they are computed when there are enough."""
        entry = self._rows[item.entry - self._first]
        region = (None, None) if entry["row"] is None else (entry["row"], entry["col"])
        if item.reason is not None:
            self._reject(number, entry, region, item.reason)
            return
        _check_unchanged(entry)
        plan = self._run.plans.of(pitch_of(entry))
        if plan is not self._plan:
            self._compute()
        self._plan = plan
        try:
            for cut in cuts(self._run.settings, entry, item, self._files):
                self._keep(number, item, entry, cut)
        except UnreadableImage as error:
            self._reject(number, entry, region, str(error))

    def _keep(self, number: int, item: Item, entry: dict[str, Any], cut: Cut) -> None:
        """Reject patches with too little valid data; the others wait to be computed."""
        if self._run.name in CANCELLED:  # asked here too, for images of many bands
            raise Cancelled("interrupted")
        places = (cut.positions + np.array([cut.top, cut.left])).tolist()
        good = np.ones(len(places), dtype=bool)
        for k, fraction in enumerate(cut.fractions.tolist()):
            reason = cut.damage or cut.infinite(k) or refusal(fraction, self._min_valid)
            if reason is not None:
                self._reject(number, entry, places[k], reason)
                good[k] = False
        if not good.any():
            return
        kept = cut.chosen(good)
        labels, label_fractions = self._labels(entry, kept, cut)
        self._pixels += cut.pixels.size
        for k, place in enumerate(np.flatnonzero(good)):
            self._patches.append(kept[k])
            self._numbers.append(number)
            own = (
                *(item.entry - self._first, item.page, *places[place], *cut.size),
                *(kept.valid_fractions[k], labels[k], label_fractions[k]),
            )
            for column, value in zip(self._columns.values(), own, strict=True):
                column.append(value)
            if len(self._patches) >= _BATCH:
                self._compute()
        if self._pixels > BAND_PIXELS:  # waiting patches are views that keep their band alive
            self._compute()

    def _labels(self, entry: dict[str, Any], kept: Patches, cut: Cut) -> tuple[list, list]:
        if cut.truth is not None:
            found = kept.label(cut.truth, self._run.settings.truth_rule)
            return found.labels.astype(np.int64).tolist(), found.fractions.tolist()
        label = entry["label"]
        return [label] * len(kept), [None if label is None else 1.0] * len(kept)

    def _compute(self) -> None:
        """Compute the vectors of the waiting patches and write them."""
        if not self._patches:
            return
        rows, reasons = vectors_or_reasons(self._plan, self._patches, self._min_valid)
        own = self._columns
        for k, reason in sorted(reasons.items()):
            entry = self._rows[own["entry"][k]]
            self._reject(self._numbers[k], entry, (own["row"][k], own["col"][k]), reason)
        kept = [k for k in range(len(rows)) if k not in reasons]
        if kept:
            own = {name: [column[k] for k in kept] for name, column in own.items()}
            entries = self._entries.take(pa.array(own.pop("entry")))
            own |= {name: entries[name] for name in ("source", "group")}
            own |= {name.removeprefix(CARRIED): entries[name] for name in entries.column_names
                    if name.startswith(CARRIED)}  # fmt: skip
            self._writer.add(own, rows[kept])
        for waiting in (self._patches, self._numbers, *self._columns.values()):
            waiting.clear()
        self._pixels = 0


def _check_unchanged(entry: dict[str, Any]) -> None:
    if stamp_of_entry(entry) != entry["stamp"]:
        raise InputChanged(
            f"{entry['source']} has changed since the run was planned; start anew with fresh"
        )


def vectors_or_reasons(
    plan: VectorPlan, patches: list[np.ndarray], min_valid: float
) -> tuple[np.ndarray, dict[int, str]]:
    """Return the rows of patches, and by place the reason why one has none."""
    try:
        return _vectors(plan, patches, min_valid)
    except MemoryError:
        raise OutOfResources("out of memory while vectors were computed; use fewer jobs") from None
    except ValueError as error:
        if len(patches) == 1:
            rows = np.full((1, plan.length), np.nan, dtype=plan.dtype)
            return rows, {0: str(error).replace("X[0]", "the patch")}
    # A patch whose pixels cannot be used is found by taking each for itself; the values are the
    # same in any company.
    rows, reasons = np.empty((len(patches), plan.length), dtype=plan.dtype), {}
    for k, patch in enumerate(patches):
        rows[k : k + 1], found = vectors_or_reasons(plan, [patch], min_valid)
        if found:
            reasons[k] = found[0]
    return rows, reasons


def _vectors(
    plan: VectorPlan, patches: list[np.ndarray], min_valid: float
) -> tuple[np.ndarray, dict[int, str]]:
    rows, reasons = np.empty((len(patches), plan.length), dtype=plan.dtype), {}
    for group in groups_of(plan, stacks.collect(patches, None)):
        found, refused = rows_of(plan, group, min_valid)
        rows[group.positions] = found
        reasons |= {group.positions[place]: reason for place, reason in refused.items()}
    return rows, reasons
