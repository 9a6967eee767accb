"""`dump`: folders of images to a feature table, in parts that survive any interruption."""

import logging
import time
from typing import Any

from mfeat import locations, storage
from mfeat.images import MAX_PIXELS
from mfeat.options import dump_settings
from mfeat.runs import DumpSummary, TableRun, check_output
from mfeat.schema import REJECTS, UNFINISHED
from mfeat.sources import list_sources
from mfeat.workers import workers

_log = logging.getLogger("mfeat")


class RejectsFound(RuntimeError):
    """Under ``strict``: the table is complete, but something was rejected.

    Attributes
    ----------
    summary : DumpSummary
    """

    def __init__(self, summary: "DumpSummary"):
        super().__init__(f"{summary.rejects} rejects are listed in {summary.out}/{REJECTS}")
        self.summary = summary


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
        What to compute; default ``MinkowskiCurves()``. Patches below its `min_valid` are rejected,
        whatever its `below_min_valid` says.
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
    Memory does not grow with the number of images, but for 1 kB an image for the plan: 250 MB for
    the imported libraries, and 60 MB a thread or 330 MB a worker process. To these come images that
    are decoded whole: up to `max_pixels` pixels of compressed ones that cannot be read in strips,
    else 17 million, at their bytes a pixel and another 16 for colours and missing pixels; and for
    vectors of more than 2000 numbers up to 64 MB a few times over, because rows are written in
    groups.

    Examples
    --------
    >>> import tempfile, numpy as np
    >>> from mfeat import dump
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     for k in range(2):
    ...         noise = np.random.default_rng(k).normal(size=(128, 192))
    ...         np.save(f"{folder}/noise{k}.npy", noise)
    ...     summary = dump(f"{folder}/*.npy", f"{folder}/table", size=64, jobs=1)
    >>> summary.patches, summary.rejects
    (12, 0)
    """
    started = time.monotonic()
    settings = dump_settings(
        transformer, size=size, stride=stride, edge=edge, regions=regions, label_from=label_from,
        truth_rule=truth_rule, channel=channel, missing_value=missing_value, max_pixels=max_pixels,
    )  # fmt: skip
    place = locations.absolute(locations.as_location(out, "out"))
    sources = list_sources(source, label_from=label_from, leave_out=place)
    for remark in sources.remarks:
        _log.warning("%s", remark)
    store = storage.output(place)
    check_output(store)
    quiet = None if progress is None else not progress
    with workers(jobs, backend, cluster) as how, store.lock(f"{UNFINISHED}/lock") as held:
        run = TableRun(store, settings, sources, how, quiet, held)
        summary = run.complete(fresh, started)
    if strict and summary.rejects:
        raise RejectsFound(summary)
    return summary
