"""The demonstration data set: simulated height maps of powder-coated panels, as files."""

import csv
import itertools
import os
import shutil
import tempfile
from pathlib import Path
from typing import Any

import tifffile
from tqdm import tqdm

from mfeat import _checks
from mfeat.surfaces import PANEL_CONDITIONS, simulate_panel

MANIFEST = "manifest.csv"

#: Columns of the manifest. Paths are relative to its folder; the pitch is in `unit`.
MANIFEST_COLUMNS = ("path", "label", "group", "truth", "pitch_x", "pitch_y", "unit")


def write_demo(
    folder: Any, panels: int = 4, *, side: int = 512, pitch: float = 10.0, seed: int = 0
) -> Path:
    """Write simulated panels of every condition as TIFF files, with their truth and a manifest.

    Parameters
    ----------
    folder : path-like
        Made if it does not exist; refused if it holds anything, so that nothing is overwritten.
        The files appear when all are complete; an interrupted run leaves none of them.
    panels : int, default 4
        Panels of each condition, up to 10,000.
    side : int, default 512
        Side of a panel in pixels, 16 to 16,384.
    pitch : float, default 10.0
        Pixel pitch in micrometres, 0.01 to 10,000.
    seed : int, default 0
        Seed of the first panel of each condition; the others count on from it.

    Returns
    -------
    pathlib.Path
        The manifest, a CSV file with the columns of `MANIFEST_COLUMNS`: height maps are float32
        micrometres with NaN for missing pixels, truth images uint8 with 0 for sound pixels and
        otherwise the position of the label in `mfeat.surfaces.PANEL_CONDITIONS`.

    Raises
    ------
    FileExistsError, NotADirectoryError
        If the folder is not empty, or lies below a file.
    OSError
        If it cannot be written.
    ValueError, TypeError
        For sizes that make no panel.

    Examples
    --------
    >>> import tempfile
    >>> from pathlib import Path
    >>> from mfeat.demo import write_demo
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     manifest = write_demo(Path(folder) / "demo", panels=1, side=32)
    ...     print(manifest.read_text().splitlines()[1])
    heights/sound_0000.tif,sound,sound_0000,truth/sound_0000.tif,10.0,10.0,um
    """
    panels = _checks.integer("panels", panels, minimum=1, maximum=10_000)
    seed = _checks.integer("seed", seed, minimum=0, maximum=2**63)
    side = _checks.integer("side", side, minimum=16, maximum=16_384)
    pitch = _checks.real("pitch", pitch, minimum=0.01, maximum=1e4)
    if not isinstance(folder, str | os.PathLike) or not str(folder):
        raise TypeError(f"folder must be a path; got {folder!r}")
    folder = Path(folder)
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise FileExistsError(
            f"{folder} exists and is not an empty folder; name a new one, or empty it first"
        )
    parent = folder.absolute().parent
    if any(above.exists() and not above.is_dir() for above in (parent, *parent.parents)):
        raise NotADirectoryError(f"{folder} lies below a file; name a folder")
    parent.mkdir(parents=True, exist_ok=True)
    # Written aside and renamed at the end, so nothing half done bears its final name.
    existing = folder.is_dir()
    target = folder.resolve() if existing else folder
    aside = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=target if existing else parent))
    try:
        work = aside / "demo"
        work.mkdir()
        _write_files(work, panels, side, pitch, seed)
        if existing:  # a folder of the user's keeps its place and its permissions
            for name in ("heights", "truth", MANIFEST):
                (work / name).rename(target / name)
        else:
            work.rename(target)
    finally:
        shutil.rmtree(aside, ignore_errors=True)
    return folder / MANIFEST


def _write_files(folder: Path, panels: int, side: int, pitch: float, seed: int) -> None:
    for name in ("heights", "truth"):
        (folder / name).mkdir()
    rows = []
    wanted = itertools.product(PANEL_CONDITIONS, range(seed, seed + panels))
    total = panels * len(PANEL_CONDITIONS)
    for condition, number in tqdm(wanted, "panels", total, disable=None):
        panel = simulate_panel(condition, number, (side, side), pitch)
        name = f"{condition}_{number:04d}"
        tifffile.imwrite(folder / "heights" / f"{name}.tif", panel.height)
        tifffile.imwrite(folder / "truth" / f"{name}.tif", panel.truth, compression="zlib")
        rows.append(
            (f"heights/{name}.tif", condition, name, f"truth/{name}.tif", pitch, pitch, "um")
        )
    with (folder / MANIFEST).open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(MANIFEST_COLUMNS)
        writer.writerows(rows)
