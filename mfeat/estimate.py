"""What a dump would do: images, patches, columns, and from a sample its size and time."""

import io
import time
from collections import Counter
from dataclasses import dataclass
from typing import Any

import joblib
import numpy as np
import pyarrow.parquet as pq
from joblib import Parallel

from mfeat import locations
from mfeat._checks import number
from mfeat._pages import UnreadableImage
from mfeat.cutting import cuts
from mfeat.entries import CARRIED
from mfeat.options import DumpSettings
from mfeat.parts import vectors_or_reasons
from mfeat.planning import Item, PitchedPlans, Plan, make_plan, part_sizes, pitch_of
from mfeat.schema import PartWriter
from mfeat.sources import list_sources
from mfeat.workers import workers

# Images, patches of all of them and pixels, after which no further image is sampled.
_SAMPLED_IMAGES, _SAMPLED_PATCHES, _SAMPLED_PIXELS = 48, 192, 1 << 26

_SHOWN_REASONS = 10


@dataclass(frozen=True)
class Estimate:
    """What a dump would do.

    Attributes
    ----------
    images, patches, parts : int
        Images or regions with patches, rows of the table, and its files.
    columns : list of str
        Columns of the table.
    features : int
        How many of them are numbers of the vector.
    rejects : dict of str to int
        Reasons to reject a file by its header, and how many files each concerns.
    size_bytes, seconds : float
        Size of the table and time to write it, from a sample; NaN where nothing could be sampled.
    workers : int
        Workers that the time is for.
    settings : DumpSettings
        All settings, with the pitch of the manifest.
    remarks : tuple of str
        What a user should know of the sources and images.
    """

    images: int
    patches: int
    parts: int
    columns: list[str]
    features: int
    rejects: dict[str, int]
    size_bytes: float
    seconds: float
    workers: int
    settings: DumpSettings
    remarks: tuple[str, ...] = ()

    def __str__(self) -> str:
        own = ", ".join(self.columns[: len(self.columns) - self.features])
        names = self.columns[-self.features :]
        lines = [
            f"{number(self.images, 'image')} with {number(self.patches, 'patch', 'patches')} in "
            f"{number(self.parts, 'part')}",
            f"{len(self.columns)} columns: {own}; {self.features} numbers, {names[0]} to "
            f"{names[-1]}",
            f"about {_bytes(self.size_bytes)} and {_duration(self.seconds)} with "
            f"{number(self.workers, 'worker')}, from a sample",
        ]
        if self.rejects:
            total = sum(self.rejects.values())
            lines.append(f"{number(total, 'file')} to be rejected by their headers:")
            shown = list(self.rejects.items())[:_SHOWN_REASONS]
            lines += [f"  {count} x {reason}" for reason, count in shown]
            if len(shown) < len(self.rejects):
                lines.append(f"  ... and {len(self.rejects) - len(shown)} more reasons")
        return "\n".join([*lines, *self.remarks])


def _bytes(size: float) -> str:
    if np.isnan(size):
        return "unknown size"
    power = min(int(np.log10(max(size, 1)) // 3), 4)
    return f"{size / 1000**power:.3g} {('B', 'kB', 'MB', 'GB', 'TB')[power]}"


def _duration(seconds: float) -> str:
    if np.isnan(seconds):
        return "unknown time"
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def estimate(
    source: Any,
    settings: DumpSettings,
    *,
    out: Any = "",
    jobs: int = -1,
    backend: str | None = None,
    cluster: str | None = None,
    progress: bool | None = None,
) -> Estimate:
    """Plan a dump without writing anything, and estimate its size and time.

    Parameters
    ----------
    source : path-like or str
        As for `mfeat.dump`.
    settings : DumpSettings
        From `mfeat.options.dump_settings`.
    out : path-like or str, default ""
        The output, if it lies inside the source and is to be left out.
    jobs : int, default -1
        Number of workers, as for `mfeat.dump`.
    backend : {"threading", "loky"}, optional
        Kind of workers.
    cluster : str, optional
        Address of a Dask scheduler.
    progress : bool, optional
        Whether to show progress; default where stderr is a terminal.

    Returns
    -------
    Estimate

    Examples
    --------
    >>> import tempfile, numpy as np
    >>> from mfeat.estimate import estimate
    >>> from mfeat.options import dump_settings
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     np.save(f"{folder}/noise.npy", np.random.default_rng(0).normal(size=(128, 128)))
    ...     found = estimate(folder, dump_settings(size=64), jobs=1)
    >>> found.images, found.patches
    (1, 4)
    """
    leave_out = locations.absolute(locations.as_location(out, "out")) if out else ""
    sources = list_sources(source, label_from=settings.label_from, leave_out=leave_out)
    quiet = None if progress is None else not progress
    with workers(jobs, backend, cluster) as how, Parallel(**how) as parallel:
        plan = make_plan(sources, settings, parallel, quiet)
        count = joblib.effective_n_jobs(how["n_jobs"])
    items = plan.items
    patches, _ = part_sizes(items, settings.grid.size)
    sample = _Sample(plan)
    total = int(patches.sum())
    counted, first, rows, cols = (
        items[name].to_numpy().astype(float) for name in ("patches", "first", "rows", "cols")
    )
    pixels = float((rows * cols)[first == 0].sum())  # an image may be shared out over many items
    features = len(plan.settings.transformer.feature_table())
    return Estimate(
        images=len(np.unique(items["entry"].to_numpy()[counted > 0])),
        patches=total,
        parts=len(patches),
        columns=plan.schema.names,
        features=features,
        rejects=dict(Counter(items["reason"].drop_null().to_pylist()).most_common()),
        size_bytes=sample.size_of(total, len(patches)),
        seconds=sample.seconds_of(total, pixels) / count,
        workers=count,
        settings=plan.settings,
        remarks=(*sources.remarks, *(f"{n} x {note}" for note, n in plan.notes.items())),
    )


class _Sample:
    """Some patches of some images, computed and written to memory, and what it took."""

    def __init__(self, plan: Plan):
        self._plan, self._plans = plan, PitchedPlans(plan.settings)
        self.reading = self.computing = 0.0
        self.pixels = self.patches = 0
        self._rows: list[tuple[dict[str, list], np.ndarray]] = []
        usable = np.flatnonzero(plan.items["patches"].to_numpy() > 0)
        count = min(len(usable), _SAMPLED_IMAGES)
        spread = np.linspace(0, len(usable) - 1, count).astype(int)
        for k in spread[np.argsort(np.arange(count) * 0.618 % 1.0)]:  # far from each other
            if self.pixels < _SAMPLED_PIXELS:
                self._take(int(usable[k]), -(-_SAMPLED_PATCHES // count))

    def _take(self, k: int, most: int) -> None:
        plan = self._plan
        item = Item(**plan.items.slice(k, 1).select(Item._fields).to_pylist()[0])
        entry = plan.sources.entries.slice(item.entry, 1).to_pylist()[0]
        start = time.perf_counter()
        try:
            cut = next(cuts(plan.settings, entry, item))
        except UnreadableImage:
            return
        self.reading += time.perf_counter() - start
        self.pixels += item.rows * item.cols
        min_valid = float(plan.settings.transformer.min_valid)
        good = (cut.fractions >= min_valid) & (cut.fractions > 0)
        if cut.damage is not None or not good.any():
            return
        patches = list(cut.chosen(good)[:most])
        vector = self._plans.of(pitch_of(entry))
        vectors_or_reasons(vector, patches[:1], min_valid)  # compiles, if it has to
        start = time.perf_counter()
        rows, _ = vectors_or_reasons(vector, patches, min_valid)
        self.computing += time.perf_counter() - start
        known = {name: entry[CARRIED + name] for name in plan.sources.carried}
        known |= {name: entry[name] for name in ("source", "group")}
        if plan.settings.label_from != "truth":
            known["label"] = entry["label"]
        own = {name: [known.get(name)] * len(rows) for name in plan.schema.names}
        own |= zip(("row", "col"), cut.positions[good][:most].T.tolist(), strict=True)
        self._rows.append((own, rows))
        self.patches += len(rows)

    def _written(self, rows: list[tuple[dict[str, list], np.ndarray]]) -> tuple[int, int]:
        """Return the bytes of rows in a file, and those of its footer."""
        file = io.BytesIO()
        with PartWriter(file, self._plan.schema) as writer:
            for own, vectors in rows:
                writer.add(own, vectors)
        footer = pq.read_metadata(file).serialized_size
        return file.tell() - footer, footer

    def size_of(self, patches: int, parts: int) -> float:
        """Return the bytes of a table."""
        if not self.patches:
            return 0.0 if not patches else float("nan")
        body, footer = self._written(self._rows)
        half = [
            ({name: column[::2] for name, column in own.items()}, rows[::2])
            for own, rows in self._rows[::2]
        ]
        less, rows_less = self._written(half)[0], sum(len(rows) for _, rows in half)
        if rows_less == self.patches:
            return float(patches * body + parts * footer)
        # Each column of a file has some bytes however few its rows are.
        each = (body - less) / (self.patches - rows_less)
        return patches * each + parts * (footer + max(0.0, body - self.patches * each))

    def seconds_of(self, patches: int, pixels: float) -> float:
        """Return the time of one worker."""
        if not self.patches:
            return 0.0 if not patches else float("nan")
        return pixels * self.reading / self.pixels + patches * self.computing / self.patches
