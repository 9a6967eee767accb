"""`dump`: folders of images to a feature table, in parts that survive any interruption.

A run is planned, its parts are written by workers into a hidden folder beside the table, and the
table appears in one step when all parts are complete. What a killed run has finished is kept; the
same call goes on from there.
"""

import contextlib
import json
import logging
import time
import uuid
from collections.abc import Iterator
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass, field
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq
from joblib import Parallel, delayed, parallel_config
from tqdm import tqdm

from mfeat import __version__, _checks, storage
from mfeat.images import MAX_PIXELS
from mfeat.options import DumpSettings, dump_settings
from mfeat.parts import (
    CANCELLED,
    is_planned,
    load_entries,
    load_run,
    part_name,
    rejects_name,
    run_folder,
    save_run,
    write_part,
)
from mfeat.planning import make_plan
from mfeat.sources import Sources, list_sources
from mfeat.table import (
    INPUTS,
    MANIFEST,
    REJECTS,
    REJECTS_SCHEMA,
    TABLE_VERSION,
    UNFINISHED,
    about,
    differences,
)

_log = logging.getLogger("mfeat")

BACKENDS = ("threading", "loky")


class OutputRefused(ValueError):
    """The output holds something that this run would have to change; the message says what."""


class RejectsFound(RuntimeError):
    """Under ``strict``: the table is complete, but something was rejected.

    Attributes
    ----------
    summary : DumpSummary
    """

    def __init__(self, summary: "DumpSummary"):
        super().__init__(f"{summary.rejects} rejects are listed in {REJECTS}")
        self.summary = summary


@dataclass(frozen=True)
class DumpSummary:
    """What a run has written.

    Attributes
    ----------
    out : str
        The table.
    patches, features, images : int
        Rows, numbers a row, and images or regions listed.
    parts : int
        Files of the table.
    rejects, rejected_images : int
        Rows of ``rejects.parquet``, and how many of them are whole images.
    notes : dict of str to int
        Remarks on images, and how many images each concerns.
    fingerprint : str
        Of the settings.
    kept_parts : int
        Parts that an earlier run had finished.
    seconds : float
        Time taken.
    """

    out: str
    patches: int
    features: int
    images: int
    parts: int
    rejects: int
    rejected_images: int
    notes: dict[str, int]
    fingerprint: str
    kept_parts: int = 0
    seconds: float = field(default=0.0, compare=False)

    def __str__(self) -> str:
        lines = [
            f"{self.patches} patches of {self.images} images, {self.features} numbers each, in "
            f"{self.parts} parts: {self.out}"
        ]
        if self.kept_parts == self.parts:
            lines.append("the table was complete already; nothing was done")
        elif self.kept_parts:
            lines.append(f"{self.kept_parts} parts were kept from an interrupted run")
        if self.seconds and self.kept_parts < self.parts:
            lines[0] += f", {self.seconds:.1f} s"
        if self.rejects:
            lines.append(
                f"{self.rejects} rejects ({self.rejected_images} whole images) are listed with "
                f"their reasons in {REJECTS}"
            )
        lines += [f"{count} images: {note}" for note, count in sorted(self.notes.items())]
        return "\n".join(lines)


def dump(
    source: Any,
    out: Any,
    transformer: Any = None,
    *,
    size: Any = 64,
    stride: Any = None,
    edge: str = "drop",
    regions: str = "patch",
    label_from: str | None = None,
    truth_rule: str = "majority",
    channel: str | int = "luminance",
    missing_value: float | None = None,
    max_pixels: int = MAX_PIXELS,
    jobs: int = -1,
    backend: str | None = None,
    cluster: str | None = None,
    strict: bool = False,
    fresh: bool = False,
    progress: bool | None = None,
) -> DumpSummary:
    """Turn image files into a feature table of Parquet parts.

    Parameters
    ----------
    source : path-like or str
        A folder (all its files but hidden ones, in natural order), a pattern such as
        ``"scans/**/*.tif"``, one image, or a manifest: a CSV or Parquet file with a column `path`
        and, where wanted, `label`, `group`, `mask` (an image, 0 where a pixel is missing), `row`,
        `col`, `height`, `width` (a region), `pitch_x`, `pitch_y`, `unit`, `truth` (an image of
        labels), and further columns, which go into the table. Paths are relative to the manifest.
    out : path-like or str
        Folder of the table; new, empty, or one that an interrupted call was writing.
    transformer : MinkowskiCurves, optional
        What to compute; default ``MinkowskiCurves()``. Patches below its `min_valid` are rejected.
        The pitch of a manifest takes the place of its `pitch`.
    size : int or (int, int), default 64
        Rows and columns of a patch.
    stride : int or (int, int), optional
        Step from patch to patch; default `size`.
    edge : {"drop", "shift"}, default "drop"
        What happens where the grid does not reach the border; see `PatchGrid`.
    regions : {"patch", "grid"}, default "patch"
        Whether a region of a manifest is one patch, or has a grid of patches inside.
    label_from : {"manifest", "folder", "truth"}, optional
        Where labels come from: the manifest's column `label` (taken anyway if it is there), the
        name of an image's folder, or the manifest's images of labels.
    truth_rule : {"majority", "any"}, default "majority"
        How a patch gets its label from an image of labels; see `Patches.label`.
    channel : {"luminance", "red", "green", "blue"} or int, default "luminance"
        What becomes of colours; see `mfeat.images.read_image`. Alpha is ignored, with a note.
    missing_value : float, optional
        Pixels of this value are missing, as NaN always are.
    max_pixels : int, default 268435456
        Images that would need more pixels to be decoded at once are rejected.
    jobs : int, default -1
        Number of workers; -1 all processors. It does not change a value.
    backend : {"threading", "loky"}, optional
        Threads or processes; default the joblib backend in force, threads if none is.
    cluster : str, optional
        Address of a Dask scheduler whose workers see the same files.
    strict : bool, default False
        Whether rejects raise `RejectsFound`, after the table is complete.
    fresh : bool, default False
        Whether to start anew, in place of a table or an interrupted run. The old table stays until
        the new one is complete.
    progress : bool, optional
        Whether to show a progress bar; default where stderr is a terminal.

    Returns
    -------
    DumpSummary

    Raises
    ------
    FileNotFoundError
        If the source does not exist or has nothing in it.
    OutputRefused
        If the output holds other files, or a table or interrupted run of other settings or inputs;
        the differences are shown.
    mfeat.storage.OutputInUse
        If another run writes there.
    mfeat.parts.InputChanged
        If a file changes during the run.
    ValueError, TypeError
        For parameters that cannot be used.

    Notes
    -----
    Memory: some 150 MB for the process, 120 MB a worker beyond the images that it decodes whole
    (`max_pixels` bounds those; uncompressed and large tiled ones are read in bands), and 1 kB an
    image for the plan.

    Examples
    --------
    >>> import tempfile, numpy as np
    >>> from mfeat import dump
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     for k in range(2):
    ...         noise = np.random.default_rng(k).normal(size=(128, 192))
    ...         np.save(f"{folder}/noise{k}.npy", noise)
    ...     summary = dump(f"{folder}/*.npy", f"{folder}/table", size=64, jobs=1)
    >>> summary.patches, summary.features, summary.rejects
    (12, 395, 0)
    """
    started = time.monotonic()
    settings = dump_settings(
        transformer, size=size, stride=stride, edge=edge, regions=regions, label_from=label_from,
        truth_rule=truth_rule, channel=channel, missing_value=missing_value, max_pixels=max_pixels,
    )  # fmt: skip
    place = storage.absolute(storage.as_location(out, "out"))
    sources = list_sources(source, label_from=label_from, leave_out=place)
    for remark in sources.remarks:
        _log.warning("%s", remark)
    store = storage.output(place)
    _check_output(store)
    quiet = None if progress is None else not progress
    with workers(jobs, backend, cluster) as how, store.lock(f"{UNFINISHED}/lock"):
        job = _Job(store, place, settings, sources, how, quiet)
        summary = job.run(fresh, started)
    if strict and summary.rejects:
        raise RejectsFound(summary)
    return summary


@contextlib.contextmanager
def workers(jobs: int, backend: str | None, cluster: str | None) -> Iterator[dict[str, Any]]:
    """Give the arguments of `joblib.Parallel` for a number of workers of a kind."""
    if _checks.integer("jobs", jobs, minimum=-(2**31)) == 0:
        raise ValueError("jobs must be >= 1, or <= -1 to count from all processors; got 0")
    how = {"n_jobs": jobs, "batch_size": 1}
    if cluster is not None:
        if backend is not None:
            raise ValueError(f"backend {backend!r} and a cluster were given; choose one")
        with _dask_client(cluster), parallel_config(backend="dask"):
            yield how | {"n_jobs": -1}
    elif backend is not None:
        with parallel_config(backend=_checks.choice("backend", backend, BACKENDS)):
            yield how
    else:
        yield how | {"prefer": "threads"}


def _dask_client(address: str) -> Any:
    try:
        from dask.distributed import Client
    except ImportError:
        raise ImportError(
            "a cluster needs Dask: python -m pip install 'mfeat[cluster]', here and on every worker"
        ) from None
    if not isinstance(address, str) or not address:
        raise TypeError(f"cluster must be the address of a Dask scheduler; got {address!r}")
    try:
        return Client(address, timeout=20, set_as_default=True)
    except (OSError, ValueError, TimeoutError) as error:
        raise ValueError(f"no Dask scheduler answers at {address}: {error}") from None


def _check_output(store: Any) -> None:
    """Refuse an output that is neither empty nor a table of ours."""
    if isinstance(store, storage.LocalStorage):
        folder = store.root
        if any(one.exists() and not one.is_dir() for one in (folder, *folder.parents)):
            raise OutputRefused(f"out {folder} is a file, or lies below one; name a folder")
    names = set(store.names()) - {UNFINISHED}
    if names and not store.exists(UNFINISHED) and _manifest(store) is None:
        raise OutputRefused(
            f"out {store.location} holds other files, e.g. {min(names)}; name a new or empty folder"
        )


def _manifest(store: Any, folder: str = "") -> dict[str, Any] | None:
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


class _Job:
    """One call of `dump`, while it holds the output."""

    def __init__(
        self, store: Any, place: str, settings: DumpSettings, sources: Sources, how: dict, quiet
    ):
        self._store, self._place = store, place
        self._settings, self._sources = settings, sources
        self._how, self._quiet = how, quiet
        self._record = {"mfeat_version": __version__} | settings.record()

    def run(self, fresh: bool, started: float) -> DumpSummary:
        """Resume, start, or find the table complete; returns what is there in the end."""
        self._clean_up()
        run = None if fresh else self._unfinished()
        if fresh:
            for name in self._runs():
                self._store.remove_tree(run_folder(name))
        elif run is not None:
            kept = json.loads(self._store_read(f"{run_folder(run)}/record.json"))
            self._refuse_differences(kept, run_folder(run), "an interrupted run")
        elif (manifest := _manifest(self._store)) is not None:
            self._refuse_differences(manifest["record"], "", "a complete table")
            return self._summary(manifest, kept_parts=len(manifest["parts"]))
        if run is None:
            run = self._plan()
        kept = self._write_parts(run)
        manifest = self._complete(run)
        publish(self._store, run)
        return self._summary(manifest, kept, time.monotonic() - started)

    def _store_read(self, name: str) -> bytes:
        with self._store.open(name) as stream:
            return stream.read()

    def _runs(self) -> list[str]:
        return [name for name in self._store.names(UNFINISHED) if name != "lock"]

    def _clean_up(self) -> None:
        """Finish what was about to appear, and delete plans that were never finished."""
        for run in self._runs():
            if self._store.exists(f"{run_folder(run)}/{MANIFEST}"):
                publish(self._store, run)
            elif not is_planned(self._store, run):
                self._store.remove_tree(run_folder(run))

    def _unfinished(self) -> str | None:
        runs = self._runs()
        return runs[0] if runs else None

    def _refuse_differences(self, record: dict[str, Any], folder: str, what: str) -> None:
        """Refuse to go on with other settings or inputs than those of what is there."""
        found = differences(record, self._record)
        found += changed_inputs(load_entries(self._store, folder), self._sources.entries)
        if found:
            lines = "\n  ".join(found)
            raise OutputRefused(
                f"out {self._place} holds {what} of other settings or inputs (there -> now):\n"
                f"  {lines}\nname another output, or start anew with fresh (--fresh)"
            )

    def _plan(self) -> str:
        with Parallel(**self._how) as parallel:
            plan = make_plan(self._sources, self._settings, parallel, self._quiet)
        run = uuid.uuid4().hex[:12]
        self._store.make(run_folder(run))
        with self._store.writing(f"{run_folder(run)}/record.json") as stream:
            stream.write(json.dumps(self._record).encode())
        save_run(self._store, run, plan)
        return run

    def _write_parts(self, run: str) -> int:
        """Write the parts that are missing; returns how many were there."""
        folder = run_folder(run)
        planned = load_run(self._place, run)
        patches, costs = planned.patches_and_costs()
        self._sweep(folder)
        missing = self._missing(folder, len(patches))
        kept = len(patches) - len(missing)
        done = int(patches.sum() - patches[missing].sum())
        CANCELLED.discard(run)
        with tqdm(
            total=int(patches.sum()), initial=done, unit="patch", unit_scale=True,
            desc="patches", disable=self._quiet,
        ) as progress:  # fmt: skip
            while missing:
                before = len(missing)
                # The dearest first, so that no worker is left alone with a large one at the end.
                missing.sort(key=lambda part: -costs[part])
                try:
                    for part in self._written(run, missing):
                        progress.update(int(patches[part]))
                    missing = []
                except BrokenProcessPool as error:
                    missing = self._missing(folder, len(patches))
                    if len(missing) == before:
                        raise RuntimeError(
                            "a worker process died before it could finish a part: out of memory, "
                            "or killed. What was finished is kept; run the same again, with fewer "
                            f"jobs if memory is short ({error})"
                        ) from error
                    _log.warning("a worker process died; its parts are done again")
        return kept

    def _written(self, run: str, parts: list[int]) -> Iterator[int]:
        """Yield parts as they are complete."""
        tasks = (delayed(write_part)(self._place, run, part, __version__) for part in parts)
        results = Parallel(return_as="generator_unordered", **self._how)(tasks)
        try:
            for done in results:
                yield done.part
        except BaseException:
            CANCELLED.add(run)  # threads cannot be stopped from outside
            with contextlib.suppress(Exception):
                results.close()
            self._sweep(run_folder(run))
            raise

    def _sweep(self, folder: str) -> None:
        """Delete what a killed worker left half written."""
        for name in self._store.names(folder):
            if name.endswith(storage.TEMPORARY):
                self._store.remove(f"{folder}/{name}")

    def _missing(self, folder: str, count: int) -> list[int]:
        """Return the parts of which there is no readable file."""
        names = set(self._store.names(folder))
        return [
            part
            for part in range(count)
            if part_name(part) not in names or self._rows_of(f"{folder}/{part_name(part)}") is None
        ]

    def _rows_of(self, name: str) -> int | None:
        try:
            with self._store.open(name) as stream:
                return pq.read_metadata(stream).num_rows
        except (pa.ArrowInvalid, OSError):
            return None

    def _complete(self, run: str) -> dict[str, Any]:
        """Write the rejects and the manifest of a run whose parts are all there."""
        folder, planned = run_folder(run), load_run(self._place, run)
        count = planned.n_parts
        total = images = 0
        names = set(self._store.names(folder))
        with (
            self._store.writing(f"{folder}/{REJECTS}") as stream,
            pq.ParquetWriter(stream, REJECTS_SCHEMA, compression="zstd") as writer,
        ):
            for part in range(count):
                if rejects_name(part) not in names:
                    continue
                with self._store.open(f"{folder}/{rejects_name(part)}") as rejects:
                    table = pq.read_table(rejects)
                writer.write_table(table)
                total += len(table)
                images += table["row"].null_count
        parts = [
            {"name": part_name(k), "rows": self._rows_of(f"{folder}/{part_name(k)}")}
            for k in range(count)
        ]
        made = about(planned.schema)
        manifest = {
            "format": "mfeat feature table",
            "table_version": TABLE_VERSION,
            "mfeat_version": __version__,
            "fingerprint": made["fingerprint"],
            "rows": sum(part["rows"] for part in parts),
            "features": len(made["features"]),
            "images": planned.entries.num_rows,
            "rejects": {"all": total, "images": images},
            "notes": planned.notes,
            "parts": parts,
            "record": self._record,
        }
        with self._store.writing(f"{folder}/{MANIFEST}") as stream:
            stream.write(json.dumps(manifest, indent=1, ensure_ascii=False).encode())
        return manifest

    def _summary(
        self, manifest: dict[str, Any], kept_parts: int, seconds: float = 0.0
    ) -> DumpSummary:
        return DumpSummary(
            out=self._place,
            patches=manifest["rows"],
            features=manifest["features"],
            images=manifest["images"],
            parts=len(manifest["parts"]),
            rejects=manifest["rejects"]["all"],
            rejected_images=manifest["rejects"]["images"],
            notes=manifest["notes"],
            fingerprint=manifest["fingerprint"],
            kept_parts=kept_parts,
            seconds=seconds,
        )


def publish(store: Any, run: str) -> None:
    """Let the table of a complete run take its place; can be repeated from wherever it stopped.

    The run's own manifest says that it is complete. The old table goes first, the new manifest
    comes last, and the plan goes before it, so that no half state looks like another.
    """
    folder = run_folder(run)
    manifest = _manifest(store, folder)
    store.remove(MANIFEST)
    there = set(store.names(folder))
    wanted = [part["name"] for part in manifest["parts"]]
    for name in (*wanted, REJECTS, INPUTS):
        if name in there:
            store.move(f"{folder}/{name}", name)
    for name in set(store.names()) - set(wanted):
        if name.startswith("part-") and name.endswith(".parquet"):
            store.remove(name)
    store.remove(f"{folder}/plan.arrow")
    store.settle()
    store.move(f"{folder}/{MANIFEST}", MANIFEST)
    store.settle()
    store.remove_tree(folder)


def changed_inputs(before: pa.Table, now: pa.Table) -> list[str]:
    """Return how two lists of inputs differ, a line each; where the files lie does not matter."""
    before, now = before.drop_columns(["location"]), now.drop_columns(["location"])
    if before.equals(now):
        return []
    added_columns = set(now.column_names) ^ set(before.column_names)
    if added_columns:
        return [f"columns of the manifest: {sorted(added_columns)} on one side only"]
    key = ("source", "row", "col", "height", "width")
    rows = [
        {tuple(row[name] for name in key): row for row in table.to_pylist()}
        for table in (before, now)
    ]
    removed = [k[0] for k in rows[0] if k not in rows[1]]
    added = [k[0] for k in rows[1] if k not in rows[0]]
    changed = []
    for k in rows[0].keys() & rows[1].keys():
        one, other = rows[0][k], rows[1][k]
        what = [name for name in one if one[name] != other[name] and one[name] == one[name]]
        if what:
            names = {"stamp": "size or time"}
            changed.append(f"{k[0]} ({', '.join(names.get(name, name) for name in what)})")
    lines = []
    for what, found in (("removed", removed), ("added", added), ("changed", sorted(changed))):
        if found:
            more = f", ... ({len(found)})" if len(found) > 5 else ""
            lines.append(f"inputs {what}: {', '.join(found[:5])}{more}")
    return lines or ["inputs: their order"]
