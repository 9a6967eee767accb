"""How close `mfeat.dump` comes to decoding and transforming alone, on all processors.

For images of 2048x2048 pixels as PNG and as uncompressed TIFF, one thread decodes and transforms
some of them without writing anything; the dump of the whole folder is compared with that time
divided by the number of processors. Both are measured in turn, in one process.
"""

import argparse
import os
import shutil
import statistics
import tempfile
import time
from pathlib import Path

import imagecodecs
import numpy as np
import tifffile

from mfeat import MinkowskiCurves, PatchGrid, dump
from mfeat.images import read_image


def write_images(folder: Path, count: int, side: int) -> dict[str, Path]:
    """Write the same noisy images as PNG and as TIFF."""
    folders = {}
    for kind in ("png", "tif"):
        folders[kind] = folder / kind
        folders[kind].mkdir()
    for k in range(count):
        rng = np.random.default_rng(k)
        image = np.clip(rng.normal(120, 20, (side, side)), 0, 255).astype(np.uint8)
        png = imagecodecs.png_encode(image)
        (folders["png"] / f"{k:03d}.png").write_bytes(png)
        tifffile.imwrite(folders["tif"] / f"{k:03d}.tif", image)
    return folders


def bare(paths: list[Path]) -> float:
    """Return the seconds of decoding and transforming images, an image at a time, one thread."""
    transformer = MinkowskiCurves(n_jobs=1)
    grid = PatchGrid(64)
    start = time.perf_counter()
    for path in paths:
        transformer.transform(grid.cut(read_image(path)))
    return time.perf_counter() - start


def dumped(source: Path, out: Path, jobs: int, backend: str | None) -> float:
    """Return the seconds of a dump."""
    start = time.perf_counter()
    summary = dump(source, out, size=64, jobs=jobs, backend=backend, progress=False)
    seconds = time.perf_counter() - start
    assert summary.rejects == 0
    shutil.rmtree(out)
    return seconds


def main(argv: list[str] | None = None) -> dict[str, list[float]]:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--images", type=int, default=12)
    parser.add_argument("--side", type=int, default=2048)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--jobs", type=int, default=os.cpu_count())
    options = parser.parse_args(argv)
    found: dict[str, list[float]] = {}
    with tempfile.TemporaryDirectory() as work:
        folders = write_images(Path(work), options.images, options.side)
        for backend in ("threading", "loky"):  # compiles kernels, starts workers
            dumped(folders["png"], Path(work) / "out", options.jobs, backend)
        for _ in range(options.rounds):
            for kind, folder in folders.items():
                paths = sorted(folder.iterdir())
                alone = bare(paths) / options.jobs
                for backend in ("threading", "loky"):
                    seconds = dumped(folder, Path(work) / "out", options.jobs, backend)
                    found.setdefault(f"{kind} {backend}", []).append(seconds / alone)
    print(f"{options.images} images of {options.side}x{options.side}, {options.jobs} workers")
    print("dump over (decoding + transforming) / workers: median [least, most]")
    for name, ratios in found.items():
        print(f"{name:16} {statistics.median(ratios):.2f} [{min(ratios):.2f}, {max(ratios):.2f}]")
    return found


if __name__ == "__main__":
    main()
