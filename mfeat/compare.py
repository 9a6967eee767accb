"""`compare`: descriptors against each other on a user's own images, and under changes."""

import json
import logging
import re
import sys
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from joblib import Parallel, delayed
from tqdm import tqdm

from mfeat import __version__, _checks, locations, storage
from mfeat.candidates import OWN, candidates_of, classifiers_of
from mfeat.comparison import (
    COMPARISON,
    COSTS,
    RESULTS,
    VARIANT,
    Comparison,
    is_variant,
    read_comparison,
)
from mfeat.conditions import conditions_for
from mfeat.contest import RESULTS_SCHEMA, Contest, results_of
from mfeat.costs import measure_costs
from mfeat.entries import Sources, changed_inputs
from mfeat.images import MAX_PIXELS
from mfeat.options import DumpSettings, dump_settings
from mfeat.planning import with_pitch
from mfeat.pool import Pool, halves_pool, labelled_pool, packed, unpacked
from mfeat.publishing import OutputRefused
from mfeat.report import require_charts, write_report
from mfeat.retrace import is_table, table_inputs
from mfeat.schema import UNFINISHED, differences
from mfeat.sources import list_sources
from mfeat.trials import PROTOCOLS, TRAIN_SIZES, grouped_splits, half_splits
from mfeat.variants import variants_of
from mfeat.workers import workers

_log = logging.getLogger("mfeat")

_RUN = f"{UNFINISHED}/comparison"
_RECORD = f"{_RUN}/record.json"


def compare(
    source: Any,
    out: Any,
    descriptors: Any = None,
    transformer: Any = None,
    *,
    ablation: bool = False,
    protocol: str | None = None,
    conditions: Sequence[str] | None = None,
    classifiers: Any = ("lda", "svm"),
    size: Any = 64,
    train: Sequence[int] | None = None,
    test: int = 16,
    patches: int = 100,
    repeats: int = 10,
    folds: int | None = None,
    seed: int = 0,
    regions: str = "patch",
    label_from: str | None = None,
    truth_rule: str = "majority",
    channel: str | int = "luminance",
    missing_value: float | None = None,
    max_pixels: int = MAX_PIXELS,
    jobs: int = -1,
    backend: str | None = None,
    fresh: bool = False,
    progress: bool | None = None,
) -> Comparison:
    """Compare descriptors on labelled patches, or on images each of which is a class.

    Parameters
    ----------
    source : path-like or str
        A folder, a pattern, or a manifest, as for `mfeat.dump`; or a table made by it, whose
        images, labels and settings are then used.
    out : path-like or str
        Folder of the results; new, empty, or one that an interrupted call was writing.
    descriptors : sequence of str, or dict of str to transformer, optional
        Names: "minkowski" (`transformer`), those of `mfeat.descriptors.DESCRIPTORS`, or import
        paths "package.module:name"; or transformers by name. Default: "minkowski" and all others.
        The first is the one that the others are compared with.
    transformer : MinkowskiCurves, optional
        What "minkowski" means; default ``MinkowskiCurves()``, or the transformer of the table.
    ablation : bool, default False
        Whether variants of `transformer` take part, too: with each functional, field family,
        level rule and part of the vector left out, alone, or done otherwise; at the largest
        training size.
    protocol : {"halves", "groups"}, optional
        "halves": every image is a class; patches of one half train, those of the other are tested.
        "groups": labelled patches, no group on both sides. Default "groups" where there are labels.
    conditions : sequence of str, optional
        Changes of the test patches, see `mfeat.conditions`; default all that suit the images.
    classifiers : sequence of {"lda", "svm"}, or dict of str to classifier, default ("lda", "svm")
        Shrinkage LDA, SVM with Gaussian kernel, or your own.
    size : int, (int, int), or list of these, default 64
        Rows and columns of a patch; a list repeats the comparison for each.
    train : sequence of int, optional
        Numbers of training patches a class; default those of 2, 4, 8, 16 that all classes have.
    test : int, default 16
        Test patches a class under "halves".
    patches : int, default 100
        Largest number of patches a class under "groups", drawn evenly over its groups.
    repeats : int, default 10
        Random repeats of the splits, at least two.
    folds : int, optional
        Folds of "groups"; default 5, or as many as the class with the fewest groups allows.
    seed : int, default 0
        Of all that is random.
    regions, label_from, truth_rule, channel, missing_value, max_pixels
        How images are read and labelled, see `mfeat.dump`.
    jobs : int, default -1
        Number of workers; -1 all processors. It does not change an accuracy.
    backend : {"threading", "loky"}, optional
        Threads or processes; default processes.
    fresh : bool, default False
        Whether to start anew, in place of results or an interrupted run.
    progress : bool, optional
        Whether to show progress bars; default where stderr is a terminal.

    Returns
    -------
    Comparison

    Raises
    ------
    ValueError, TypeError, ImportError
        For parameters, images or labels that cannot be used.
    OutputRefused
        If the output holds other files, or results of other settings; the differences are shown.
    mfeat.storage.OutputInUse
        If another run writes there.

    Notes
    -----
    The folder holds ``results.parquet`` (every single result), ``costs.parquet``, ``report.md``
    and ``report.html`` with charts, and ``comparison.json`` (settings, and what was left out).

    Memory: the chosen patches with their surroundings in each worker process (about 2.3 times the
    pixels of the patches), the features of one descriptor under all conditions, and 350 MB of
    libraries a worker.

    Examples
    --------
    >>> import tempfile, numpy as np
    >>> from scipy.ndimage import gaussian_filter
    >>> from mfeat import compare
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     for k, scale in enumerate((1, 3)):
    ...         noise = np.random.default_rng(k).normal(size=(160, 256))
    ...         np.save(f"{folder}/noise{k}.npy", gaussian_filter(noise, scale))
    ...     found = compare(
    ...         f"{folder}/*.npy", f"{folder}/evidence", ["minkowski", "power-spectrum"],
    ...         size=32, train=(4,), test=4, repeats=2, conditions=["clean"], jobs=1,
    ...     )
    >>> found.descriptors, found.conditions
    (['minkowski', 'power-spectrum'], ['clean'])
    """
    require_charts()
    place = locations.absolute(locations.as_location(out, "out"))
    reading = {
        "regions": regions, "label_from": label_from, "truth_rule": truth_rule,
        "channel": channel, "missing_value": missing_value, "max_pixels": max_pixels,
    }  # fmt: skip
    sources, settings = _inputs(source, place, transformer, reading)
    chosen = candidates_of(descriptors, settings.transformer)
    if ablation:
        if next(iter(chosen)) != OWN:
            raise ValueError(
                f"ablation compares variants of {OWN!r} with it, so it must come first among the "
                f"descriptors; got {list(chosen)}"
            )
        chosen |= {f"{VARIANT}{k}": v for k, v in variants_of(settings.transformer).items()}
    plan = _Plan(
        sources=sources,
        settings=settings,
        candidates=chosen,
        classifiers=classifiers_of(classifiers),
        conditions=conditions,
        protocol=_protocol(protocol, sources, settings),
        sizes=_sizes(size),
        train=_train_sizes(train),
        test=_checks.integer("test", test, minimum=2),
        patches=_checks.integer("patches", patches, minimum=2),
        repeats=_checks.integer("repeats", repeats, minimum=2),
        folds=None if folds is None else _checks.integer("folds", folds, minimum=2),
        seed=_checks.integer("seed", seed, minimum=0),
    )
    store = storage.output(place)
    _check_output(store)
    quiet = None if progress is None else not progress
    with (
        workers(jobs, backend or "loky", None) as how,
        store.lock(f"{UNFINISHED}/lock"),
    ):
        _ComparisonRun(store, plan, how, quiet).complete(fresh)
    return read_comparison(place)


def _inputs(
    source: Any, out: str, transformer: Any, reading: dict[str, Any]
) -> tuple[Sources, DumpSettings]:
    """Return the images of a source, and how they are read: as given, or as a table was made."""
    if is_table(source):
        default = dump_settings().keywords()
        given = dump_settings(**reading).keywords()
        if others := [name for name in reading if given[name] != default[name]]:
            raise ValueError(
                f"source {source} is a table, whose images are read and labelled as when it was "
                f"made; leave out {', '.join(others)}, or give the images themselves"
            )
        sources, settings = table_inputs(source)
        if transformer is not None:
            settings = replace(settings, transformer=dump_settings(transformer).transformer)
        return sources, settings
    settings = dump_settings(transformer, **reading)
    sources = list_sources(source, label_from=reading["label_from"], leave_out=out)
    for remark in sources.remarks:
        _log.warning("%s", remark)
    settings, differs = with_pitch(settings, sources)
    if differs:
        raise ValueError(
            "the images have different pitches; compare those of each pitch apart, in manifests of "
            "their own"
        )
    return sources, settings


def _protocol(given: str | None, sources: Sources, settings: DumpSettings) -> str:
    label = sources.entries["label"]
    labelled = label.null_count < len(label) or settings.label_from == "truth"
    if given is None:
        return "groups" if labelled else "halves"
    return _checks.choice("protocol", given, PROTOCOLS)


def _sizes(size: Any) -> list[tuple[int, int]]:
    """Return patch sizes; a list holds several, a tuple is (rows, columns)."""
    several = size if isinstance(size, list) else [size]
    if not several:
        raise ValueError("size is an empty list; give one patch size or more")
    found = [dump_settings(size=one).grid.size for one in several]
    if len(set(found)) < len(found):
        raise ValueError(f"size holds a size twice: {size!r}")
    return found


def _train_sizes(train: Any) -> tuple[int, ...] | None:
    if train is None:
        return None
    if isinstance(train, int | np.integer):
        train = (train,)
    if isinstance(train, str) or not isinstance(train, Iterable):
        raise TypeError(f"train must be numbers of patches a class; got {train!r}")
    sizes = [_checks.integer(f"train[{k}]", n, minimum=1) for k, n in enumerate(train)]
    if not sizes or sorted(set(sizes)) != sizes:
        raise ValueError(f"train must be ascending numbers of patches a class; got {train!r}")
    return tuple(sizes)


def _check_output(store: Any) -> None:
    """Refuse an output that is neither empty nor a comparison of ours."""
    names = set(store.names()) - {UNFINISHED}
    if names and COMPARISON not in names and not store.exists(_RECORD):
        raise OutputRefused(
            f"out {store.location} holds other files, e.g. {min(names)}; name a new or empty folder"
        )


@dataclass(frozen=True, eq=False)
class _Plan:
    """What is compared with what, and how."""

    sources: Sources
    settings: DumpSettings
    candidates: dict[str, Any]
    classifiers: dict[str, Any]
    conditions: Sequence[str] | None
    protocol: str
    sizes: list[tuple[int, int]]
    train: tuple[int, ...] | None
    test: int
    patches: int
    repeats: int
    folds: int | None
    seed: int

    def record(self) -> dict[str, Any]:
        """Return all that the accuracies depend on, in types that JSON knows."""
        reading = self.settings.keywords()
        kept = ("regions", "label_from", "truth_rule", "channel", "missing_value", "max_pixels")
        inputs = ("source", "stamp", "label", "group", "mask", "row", "col", "height", "width")
        return {
            "mfeat_version": __version__,
            "descriptors": {name: _described(one) for name, one in self.candidates.items()},
            "order": list(self.candidates),  # the first is the reference; parts are numbered by it
            "classifiers": {name: _described(one) for name, one in self.classifiers.items()},
            "conditions": None if self.conditions is None else list(self.conditions),
            "protocol": self.protocol,
            "sizes": [list(size) for size in self.sizes],
            "train": None if self.train is None else list(self.train),
            "test": self.test,
            "patches": self.patches,
            "repeats": self.repeats,
            "folds": self.folds,
            "seed": self.seed,
            "reading": {name: reading[name] for name in kept},
            "inputs": self.sources.entries.select(inputs).to_pylist(),
        }

    def contest(self, size: tuple[int, int], quiet: bool | None) -> tuple[Contest, Pool]:
        """Choose and read the patches of a size, and draw the splits."""
        grid = dump_settings(size=size).grid
        settings = replace(self.settings, grid=grid)
        if self.protocol == "halves":
            wanted = max(*(self.train or TRAIN_SIZES), self.test)
            pool = halves_pool(self.sources, settings, wanted, quiet)
        else:
            pool = labelled_pool(self.sources, settings, self.patches, self.seed, quiet)
        labels = pool.codes()
        most = max(self.train or TRAIN_SIZES)
        if self.protocol == "halves":
            halves = np.array([place.half for place in pool.places])
            splits = half_splits(labels, halves, most, self.test, self.repeats, self.seed)
        else:
            groups = np.array([place.group for place in pool.places])
            splits = grouped_splits(
                labels, groups, pool.classes, most, self.folds, self.repeats, self.seed
            )
        available = [min(len(own) for own in split.train) for split in splits]
        return Contest(
            scenes=pool.scenes,
            labels=labels,
            splits=splits,
            train_sizes=self._possible(min(available), pool, splits[int(np.argmin(available))]),
            conditions=tuple(c.name for c in conditions_for(pool.kind, self.conditions)),
            classifiers=self.classifiers,
            size=size,
            seed=self.seed,
        ), pool

    def _possible(self, fewest: int, pool: Pool, worst: Any) -> tuple[int, ...]:
        """Return the training sizes; those asked for must be possible."""
        if self.train is None:
            found = tuple(n for n in TRAIN_SIZES if n <= fewest)
            return found or (fewest,)
        if self.train[-1] > fewest:
            name = pool.classes[int(np.argmin([len(own) for own in worst.train]))]
            raise ValueError(
                f"train asks for {self.train[-1]} patches a class, but class {name!r} has {fewest} "
                "on the training side of a split; use fewer, smaller patches, or more images"
            )
        return self.train


def _described(one: Any) -> str:
    """Return a transformer or classifier as text with all its parameters."""
    with np.printoptions(threshold=sys.maxsize, floatmode="unique"):  # nothing is left out
        parameters = ", ".join(f"{k}={v!r}" for k, v in sorted(one.get_params(deep=False).items()))
    text = f"{type(one).__module__}.{type(one).__qualname__}({parameters})"
    return re.sub(r" at 0x[0-9a-fA-F]+", "", text)  # another process has other addresses


class _ComparisonRun:
    """One call of `compare`, while it holds the output."""

    def __init__(self, store: Any, plan: _Plan, how: dict[str, Any], quiet: bool | None):
        self._store, self._plan, self._how, self._quiet = store, plan, how, quiet
        self._record = plan.record()

    def complete(self, fresh: bool) -> None:
        """Resume, start, or find the comparison complete."""
        goes_on = not fresh and self._store.exists(_RECORD)
        if goes_on:
            self._refuse_differences(_RECORD, "an interrupted comparison", lambda found: found)
        elif not fresh and self._store.exists(COMPARISON):
            self._refuse_differences(COMPARISON, "a comparison", lambda found: found["record"])
            return
        contests, pools = [], []
        for size in self._plan.sizes:
            contest, pool = self._plan.contest(size, self._quiet)
            contests.append(contest)
            pools.append(pool)
        if not goes_on:  # only now: what cannot be compared leaves no trace
            self._store.remove_tree(_RUN)  # parts without a record are of an unknown run
            self._store.make(_RUN)
            self._write_json(_RECORD, self._record)
        self._compete(contests)
        costs = [measure_costs(self._plan.candidates, one, self._quiet) for one in contests]
        self._finish(contests, pools, pa.concat_tables(costs))

    def _refuse_differences(
        self, name: str, what: str, record_of: Callable[[dict], dict[str, Any]]
    ) -> None:
        with self._store.open(name) as stream:
            there = record_of(json.loads(stream.read()))
        now = json.loads(json.dumps(self._record))
        inputs = [pa.Table.from_pylist(record.pop("inputs")) for record in (there, now)]
        found = [*differences(there, now), *changed_inputs(*inputs)]
        if found:
            lines = "\n  ".join(found)
            raise OutputRefused(
                f"out {self._store.location} holds {what} of other settings or inputs (there -> "
                f"now):\n  {lines}\nname another output, or start anew with fresh (--fresh)"
            )

    def _write_json(self, name: str, content: Any) -> None:
        with self._store.writing(name) as stream:
            stream.write(json.dumps(content, indent=1, ensure_ascii=False, default=str).encode())

    def _compete(self, contests: list[Contest]) -> None:
        """Write the results of every candidate at every size that has none yet."""
        for stale in self._store.names(_RUN):
            if stale.endswith(storage.TEMPORARY):
                self._store.remove(f"{_RUN}/{stale}")
        there = set(self._store.names(_RUN))
        wanted = [(s, c) for s in range(len(contests)) for c in range(len(self._plan.candidates))]
        missing = [task for task in wanted if _part_of(*task) not in there]
        names = list(self._plan.candidates)
        with tqdm(
            total=len(wanted), initial=len(wanted) - len(missing), desc="descriptors",
            disable=self._quiet,
        ) as progress:  # fmt: skip
            bare = [replace(contest, scenes=[]) for contest in contests]
            pixels = [packed(contest.scenes) for contest in contests]
            tasks = (
                delayed(_write_results)(
                    self._store.location, _part_of(s, c), names[c],
                    self._plan.candidates[names[c]], bare[s], pixels[s],
                )
                for s, c in missing
            )  # fmt: skip
            for _ in Parallel(return_as="generator_unordered", **self._how)(tasks):
                progress.update()

    def _parts(self, contests: list[Contest]) -> Iterator[pa.Table]:
        for s in range(len(contests)):
            for c in range(len(self._plan.candidates)):
                with self._store.open(f"{_RUN}/{_part_of(s, c)}") as stream:
                    yield pq.read_table(stream)

    def _finish(self, contests: list[Contest], pools: list[Pool], costs: pa.Table) -> None:
        """Write tables and report beside the parts, then let them appear, the record last."""
        results = pa.concat_tables(self._parts(contests))
        about = {
            "format": "mfeat comparison",
            "record": self._record,
            "reference": next(iter(self._plan.candidates)),
            "kind": pools[0].kind,
            "classes": [str(one) for one in pools[0].classes],
            "sizes": [_about_size(*both) for both in zip(contests, pools, strict=True)],
        }
        for name, table in ((RESULTS, results), (COSTS, costs)):
            with self._store.writing(f"{_RUN}/{name}") as stream:
                pq.write_table(table, stream, compression="zstd")
        found = Comparison(self._store.location, results, costs, about)
        names = [RESULTS, COSTS]
        for name, content in write_report(found).items():
            self._store.make(f"{_RUN}/{name}".rpartition("/")[0])
            with self._store.writing(f"{_RUN}/{name}") as stream:
                stream.write(content)
            names.append(name)
        self._write_json(f"{_RUN}/{COMPARISON}", about)
        self._store.remove(COMPARISON)
        for name in names:
            self._store.make(name.rpartition("/")[0])
            self._store.move(f"{_RUN}/{name}", name)
        for name in self._store.names("charts"):
            if f"charts/{name}" not in names:  # of an earlier comparison
                self._store.remove(f"charts/{name}")
        self._store.move(f"{_RUN}/{COMPARISON}", COMPARISON)
        self._store.settle()
        self._store.remove_tree(_RUN)


def _part_of(size: int, candidate: int) -> str:
    return f"part-{size:02d}-{candidate:03d}.parquet"


def _about_size(contest: Contest, pool: Pool) -> dict[str, Any]:
    largest = contest.train_sizes[-1]
    ratios = [len(split.test) / len(split.training(largest)) for split in contest.splits]
    return {
        "size": list(contest.size),
        "patches": len(pool.places),
        "classes": len(pool.classes),
        "groups": len({place.group for place in pool.places}),
        "train_sizes": list(contest.train_sizes),
        "conditions": list(contest.conditions),
        "splits": len(contest.splits),
        "ratio": float(np.mean(ratios)),
        "mirrored": pool.mirrored,
        "overlapping": pool.overlapping,
        "left_out": pool.left_out,
    }


def _write_results(
    location: str, part: str, name: str, transformer: Any, contest: Contest, arrays: dict
) -> None:
    """Do what a worker does: one candidate at one size."""
    contest = replace(contest, scenes=unpacked(arrays))
    results = results_of(name, transformer, contest, largest_only=is_variant(name))
    with storage.output(location).writing(f"{_RUN}/{part}") as stream:
        pq.write_table(results.cast(RESULTS_SCHEMA), stream, compression="zstd")
