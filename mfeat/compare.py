"""`compare`: descriptors against each other on a user's own images, and under changes."""

import logging
from collections.abc import Iterable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from mfeat import _checks, locations, storage
from mfeat.candidates import OWN, candidates_of, classifiers_of
from mfeat.comparing import RECORD, ComparisonRun
from mfeat.comparison import (
    COMPARISON,
    VARIANT,
    Comparison,
    read_comparison,
)
from mfeat.conditions import known_names
from mfeat.contests import ComparisonPlan
from mfeat.entries import Sources
from mfeat.images import MAX_PIXELS
from mfeat.options import DumpSettings, dump_settings
from mfeat.planning import with_pitch
from mfeat.publishing import OutputRefused
from mfeat.report import require_charts
from mfeat.retrace import is_table, table_inputs
from mfeat.schema import UNFINISHED
from mfeat.sources import list_sources
from mfeat.trials import PROTOCOLS
from mfeat.variants import variants_of
from mfeat.workers import workers

_log = logging.getLogger("mfeat")


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
    plan = ComparisonPlan(
        sources=sources,
        settings=settings,
        candidates=chosen,
        classifiers=classifiers_of(classifiers),
        conditions=None if conditions is None else known_names(conditions),
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
        ComparisonRun(store, plan, how, quiet).complete(fresh)
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
    if names and COMPARISON not in names and not store.exists(RECORD):
        raise OutputRefused(
            f"out {store.location} holds other files, e.g. {min(names)}; name a new or empty folder"
        )
