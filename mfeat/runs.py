"""From a plan to a complete table: start or resume a run, write its parts, let the table appear.

Parts are written by workers into a hidden folder beside the table, and the table appears when all
are complete. What a killed run has finished is kept; the same call goes on from there.
"""

import contextlib
import json
import logging
import re
import time
import uuid
from collections import Counter
from collections.abc import Callable, Iterator
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass, field
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq
from joblib import Parallel, delayed
from tqdm import tqdm

from mfeat import __version__, storage
from mfeat._checks import number
from mfeat.entries import Sources, changed_inputs
from mfeat.options import DumpSettings
from mfeat.parts import (
    CANCELLED,
    drop_plan,
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
from mfeat.publishing import OutputRefused, manifest_of, publish, remove_leftovers
from mfeat.schema import (
    INPUTS,
    MANIFEST,
    REJECTS,
    REJECTS_SCHEMA,
    TABLE_VERSION,
    UNFINISHED,
    about,
    differences,
)

#: Columns of entries that say where files lie.
WHERE = ["location", "mask_location", "truth_location"]

_log = logging.getLogger("mfeat")

# Reasons of rejects that a summary shows, and of those that it counts: many name a position.
_SHOWN, _KNOWN_REASONS = 5, 1000


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
    reasons : list of (str, int, str)
        The most frequent reasons of rejects, how often each stands there, and one source.
    notes : dict of str to int
        Remarks on images (pages of files), and how many each concerns.
    fingerprint : str
        Of the settings.
    kept_parts : int
        Parts that an earlier run had finished.
    seconds : float
        Time taken; 0 where the table was complete already.
    """

    out: str
    patches: int
    features: int
    images: int
    parts: int
    rejects: int
    rejected_images: int
    reasons: list[tuple[str, int, str]]
    notes: dict[str, int]
    fingerprint: str
    kept_parts: int = 0
    seconds: float = field(default=0.0, compare=False)

    def __str__(self) -> str:
        lines = [
            f"{number(self.patches, 'patch', 'patches')} of {number(self.images, 'image')}, "
            f"{number(self.features, 'number')} each, in {number(self.parts, 'part')}: {self.out}"
        ]
        if not self.seconds:
            lines.append("the table was complete already; nothing was done")
        else:
            lines[0] += f", {self.seconds:.1f} s"
        if self.seconds and self.kept_parts:
            lines.append(f"{number(self.kept_parts, 'part')} kept from an interrupted run")
        if self.rejects:
            lines.append(
                f"{number(self.rejects, 'reject')} ({number(self.rejected_images, 'whole image')}"
                f") listed with reasons in {REJECTS}:"
            )
            lines += [f"  {count} x {why}, e.g. {where}" for why, count, where in self.reasons]
        if not self.patches:
            lines.append("the table has no row")
        notes = sorted(self.notes.items())
        return "\n".join(lines + [f"{number(count, 'image')}: {note}" for note, count in notes])


def check_output(store: Any) -> None:
    """Refuse an output that is neither empty nor a table of ours."""
    if isinstance(store, storage.LocalStorage):
        folder = store.root
        if any(one.exists() and not one.is_dir() for one in (folder, *folder.parents)):
            raise OutputRefused(f"out {folder} is a file, or lies below one; name a folder")
    names = set(store.names()) - {UNFINISHED}
    if names and not store.exists(UNFINISHED) and manifest_of(store) is None:
        raise OutputRefused(
            f"out {store.location} holds other files, e.g. {min(names)}; name a new or empty folder"
        )


class TableRun:
    """One call of `dump`, while it holds the output."""

    def __init__(
        self,
        store: Any,
        settings: DumpSettings,
        sources: Sources,
        how: dict[str, Any],
        quiet: bool | None,
        held: Callable[[], None],
    ):
        self._store, self._place = store, store.location
        self._settings, self._sources = settings, sources
        self._how, self._quiet, self._held = how, quiet, held
        self._record = {"mfeat_version": __version__} | settings.record()

    def complete(self, fresh: bool, started: float) -> DumpSummary:
        """Resume, start, or find the table complete; returns what is there in the end."""
        self._clean_up()
        run = None if fresh else self._unfinished()
        if fresh:
            for name in self._runs():
                drop_plan(self._store, name)
                remove_leftovers(self._store, name)
        elif run is not None:
            kept = json.loads(self._store_read(f"{run_folder(run)}/record.json"))
            self._refuse_differences(kept, run_folder(run), "an interrupted run")
        elif (manifest := manifest_of(self._store)) is not None:
            self._check_whole(manifest)
            self._refuse_differences(manifest["record"], "", "a complete table")
            return self._summary(manifest, kept_parts=len(manifest["parts"]))
        if run is None:
            run = self._plan()
        kept = self._write_parts(run)
        manifest = self._finish(run)
        load_run.cache_clear()  # lets go of the plan, which is about to be deleted
        self._held()
        publish(self._store, run)
        return self._summary(manifest, kept, time.monotonic() - started)

    def _store_read(self, name: str) -> bytes:
        with self._store.open(name) as stream:
            return stream.read()

    def _runs(self) -> list[str]:
        names = self._store.names(UNFINISHED)
        return [name for name in names if re.fullmatch("[0-9a-f]{12}", name)]

    def _clean_up(self) -> None:
        """Finish what was about to appear, and delete plans that were never finished."""
        for run in self._runs():
            if self._store.exists(f"{run_folder(run)}/{MANIFEST}"):
                publish(self._store, run)
            elif not is_planned(self._store, run):
                remove_leftovers(self._store, run)

    def _unfinished(self) -> str | None:
        runs = self._runs()
        return runs[0] if runs else None

    def _check_whole(self, manifest: dict[str, Any]) -> None:
        """Refuse to call a table complete that has lost a file since."""
        listed = {*(part["name"] for part in manifest["parts"]), REJECTS, INPUTS}
        if lost := sorted(listed - set(self._store.names())):
            raise OutputRefused(
                f"out {self._place} lacks {', '.join(lost[:5])}, which belong to its table; start "
                "anew with fresh (--fresh)"
            )

    def _refuse_differences(self, record: dict[str, Any], folder: str, what: str) -> None:
        """Refuse to go on with other settings or inputs than those of what is there."""
        found = differences(record, self._record)
        before, now = load_entries(self._store, folder), self._sources.entries
        if not folder:  # a complete table reads no file again, wherever it lies now
            before, now = (entries.drop_columns(WHERE) for entries in (before, now))
        found += changed_inputs(before, now)
        if found:
            lines = "\n  ".join(found)
            raise OutputRefused(
                f"out {self._place} holds {what} of other settings or inputs (there -> now):\n"
                f"  {lines}\nname another output, or start anew with fresh (--fresh)"
            )

    def _plan(self) -> str:
        try:
            with Parallel(**self._how) as parallel:
                plan = make_plan(self._sources, self._settings, parallel, self._quiet)
        except BrokenProcessPool as error:
            raise RuntimeError(f"a worker process died while it read headers: {error}") from error
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

    def _finish(self, run: str) -> dict[str, Any]:
        """Write the rejects and the manifest of a run whose parts are all there."""
        folder, planned = run_folder(run), load_run(self._place, run)
        count = planned.n_parts
        total = images = 0
        reasons: Counter[str] = Counter()
        examples: dict[str, str] = {}
        names = set(self._store.names(folder))
        with (
            self._store.writing(f"{folder}/{REJECTS}") as stream,
            pq.ParquetWriter(stream, REJECTS_SCHEMA, compression="zstd") as writer,
        ):
            for part in range(count):
                if rejects_name(part) not in names:
                    continue
                with self._store.open(f"{folder}/{rejects_name(part)}") as rejects:
                    table = storage.read_parquet(rejects)
                writer.write_table(table)
                total += len(table)
                images += table["row"].null_count
                for source, reason in zip(table["source"], table["reason"], strict=True):
                    if len(examples) < _KNOWN_REASONS or reason.as_py() in examples:
                        reasons[reason.as_py()] += 1
                        examples.setdefault(reason.as_py(), source.as_py())
        common = [[why, count, examples[why]] for why, count in reasons.most_common(_SHOWN)]
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
            "rejects": {"all": total, "images": images, "reasons": common},
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
            reasons=[tuple(one) for one in manifest["rejects"]["reasons"]],
            notes=manifest["notes"],
            fingerprint=manifest["fingerprint"],
            kept_parts=kept_parts,
            seconds=seconds,
        )
