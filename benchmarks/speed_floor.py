"""How fast the curves are, as ratios measured side by side in one run.

The rivals take turns in every round, so that a machine that slows down slows them all; the median
over rounds and its quartiles are printed. Answers are compared before anything is timed.
Run `python benchmarks/speed_floor.py`; `--help` tells the sizes.
"""

import argparse
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable

import numba
import numpy as np
import skimage
from skimage import measure

from mfeat import MinkowskiCurves, count_patterns, minkowski_curves
from mfeat.functionals import contour, euler
from mfeat.transformer import full_curves

RAW_ONLY = full_curves() | {
    "smooth": (), "band": (), "slope": (), "location_scale": False, "connectivity": 8,
}  # fmt: skip


def level_loop(patch: np.ndarray, levels: np.ndarray) -> np.ndarray:
    """Return the three curves by a loop over levels with scikit-image, framed."""
    rows = []
    for level in levels:
        binary = np.pad(patch >= level, 1)
        contour_length = measure.perimeter_crofton(binary, directions=4)
        rows.append((binary.sum(), contour_length, measure.euler_number(binary, connectivity=2)))
    return np.array(rows).T


def check_answers(patch: np.ndarray, levels: np.ndarray) -> None:
    """Stop unless both sides give the same curves."""
    counts = count_patterns(patch, levels, edges="framed")
    ours = minkowski_curves(patch, levels=levels, edges="framed", connectivity=8)
    loop = level_loop(patch, levels)
    assert np.array_equal(ours.area, loop[0])
    assert np.allclose(contour(counts), loop[1], rtol=1e-12)
    assert np.array_equal(euler(counts, connectivity=8), loop[2])
    assert np.array_equal(ours.euler, loop[2])


def time_in_turn(rivals: dict[str, Callable[[], object]], rounds: int) -> dict[str, list[float]]:
    """Return seconds of each rival in each round; one round is not counted."""
    seconds: dict[str, list[float]] = {name: [] for name in rivals}
    for turn in range(rounds + 1):
        for name, work in rivals.items():
            start = time.perf_counter()
            work()
            if turn:
                seconds[name].append(time.perf_counter() - start)
    return seconds


def quartiles(values: list[float]) -> tuple[float, float, float]:
    """Return lower quartile, median, upper quartile."""
    if len(values) < 2:
        return values[0], values[0], values[0]
    low, middle, high = statistics.quantiles(values, n=4)
    return low, middle, high


def ratios(base: list[float], other: list[float]) -> tuple[float, float, float]:
    """Return quartiles of base over other, round by round."""
    return quartiles([b / o for b, o in zip(base, other, strict=True)])


def speed_over_the_loop(rounds: int, side: int, patches: int) -> dict[str, tuple]:
    """Compare the curves of 32 levels with the loop over levels, per patch."""
    rng = np.random.default_rng(0)
    batch = rng.integers(0, 256, (patches, side, side)).astype(np.uint8)
    levels = np.linspace(4.5, 250.5, 32)
    check_answers(batch[0], levels)
    transformer = MinkowskiCurves(levels=list(levels), level_rule="fixed", **RAW_ONLY)
    standard = MinkowskiCurves(levels=32, **RAW_ONLY)
    rivals = {
        "loop": lambda: level_loop(batch[0], levels),
        "MinkowskiCurves, 32 fixed levels": lambda: transformer.transform(batch),
        "MinkowskiCurves, 32 standard levels": lambda: standard.transform(batch),
        "minkowski_curves, one call a patch": lambda: [
            minkowski_curves(patch, levels=levels) for patch in batch
        ],
        "count_patterns, one call a patch": lambda: [
            count_patterns(patch, levels) for patch in batch
        ],
    }
    seconds = time_in_turn(rivals, rounds)
    for name in rivals:
        if name != "loop":
            seconds[name] = [s / patches for s in seconds[name]]
    return {name: ratios(seconds["loop"], s) for name, s in seconds.items() if name != "loop"}


def overhead(rounds: int, side: int) -> dict[str, float]:
    """Return milliseconds a patch of the default vector: one call a patch, and one for them all."""
    rng = np.random.default_rng(1)
    batch = rng.integers(0, 256, (64, side, side)).astype(np.uint8)
    transformer = MinkowskiCurves()
    rivals = {
        "alone": lambda: [transformer.transform(batch[k : k + 1]) for k in range(len(batch))],
        "in a batch": lambda: transformer.transform(batch),
    }
    seconds = time_in_turn(rivals, rounds)
    alone = 1000 * statistics.median(seconds["alone"]) / len(batch)
    batched = 1000 * statistics.median(seconds["in a batch"]) / len(batch)
    return {"alone": alone, "in a batch": batched, "overhead": alone - batched}


def growth(rounds: int, sides: list[int], numbers: list[int]) -> dict[str, dict[int, tuple]]:
    """Return counting over np.bincount of the same pixels, by image side and by levels (law 6)."""
    rng = np.random.default_rng(2)
    found: dict[str, dict[int, tuple]] = {"side": {}, "levels": {}}
    for side in sides:
        image = rng.integers(0, 256, (side, side)).astype(np.uint8)
        found["side"][side] = _against_bincount(image, np.linspace(1, 255, 32), rounds)
    image = rng.integers(0, 65_536, (512, 512)).astype(np.uint16)
    for number in numbers:
        levels = np.linspace(1, 65_535, number)
        found["levels"][number] = _against_bincount(image, levels, rounds)
    return found


def _against_bincount(image: np.ndarray, levels: np.ndarray, rounds: int) -> tuple:
    seconds = time_in_turn(
        {
            "counts": lambda: count_patterns(image, levels),
            "bincount": lambda: np.bincount(image.ravel(), minlength=256),
        },
        rounds,
    )
    return ratios(seconds["counts"], seconds["bincount"])


def cold_start() -> dict[str, float]:
    """Return seconds of the first default vector in fresh processes: empty cache, then warm."""
    code = (
        "import time; t = time.perf_counter();"
        "import numpy as np; from mfeat import MinkowskiCurves;"
        "i = time.perf_counter() - t; t = time.perf_counter();"
        "MinkowskiCurves().transform(np.random.default_rng(0).random((1, 64, 64)));"
        "print(i, time.perf_counter() - t)"
    )
    found = {}
    with tempfile.TemporaryDirectory() as folder:
        for name in ("empty cache", "warm cache"):
            run = subprocess.run(
                [sys.executable, "-c", code],
                env=os.environ | {"MFEAT_CACHE_DIR": folder},
                capture_output=True,
                text=True,
                check=True,
            )
            found["import"], found[f"first call, {name}"] = map(float, run.stdout.split())
    return found


def main(argv: list[str] | None = None) -> dict[str, dict]:
    """Run the benchmark and print its tables."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n", 1)[0])
    parser.add_argument("--rounds", type=int, default=15, help="counted rounds (15)")
    parser.add_argument("--side", type=int, default=64, help="side of a patch (64)")
    parser.add_argument("--patches", type=int, default=64, help="patches of a batch (64)")
    parser.add_argument("--sides", type=int, nargs="*", default=[64, 256, 1024, 4096])
    parser.add_argument("--levels", type=int, nargs="*", default=[8, 64, 1024, 65_535])
    parser.add_argument("--no-cold", action="store_true", help="leave out the cold start")
    options = parser.parse_args(argv)

    print(
        f"{platform.machine()}, {os.cpu_count()} processors, Python {platform.python_version()}, "
        f"NumPy {np.__version__}, Numba {numba.__version__}, scikit-image {skimage.__version__}; "
        f"one thread; median [quartiles] of {options.rounds} rounds"
    )
    loop = speed_over_the_loop(options.rounds, options.side, options.patches)
    print(f"\ntimes faster than the loop over 32 levels, {options.side}x{options.side} uint8 noise")
    for name, (low, middle, high) in loop.items():
        print(f"  {name:38s}{middle:8.0f} [{low:.0f}, {high:.0f}]")
    single = overhead(options.rounds, options.side)
    print("\ndefault vector, ms a patch: " + ", ".join(f"{k} {v:.3f}" for k, v in single.items()))
    costs = growth(options.rounds, options.sides, options.levels)
    print("\ncount_patterns over np.bincount of the same pixels")
    for quantity, rows in costs.items():
        for number, (low, middle, high) in rows.items():
            print(f"  {quantity + ' ' + str(number):38s}{middle:8.1f} [{low:.1f}, {high:.1f}]")
    cold = {} if options.no_cold else cold_start()
    if cold:
        print("\nfresh process, s: " + ", ".join(f"{k} {v:.2f}" for k, v in cold.items()))
    return {"loop": loop, "overhead": single, "growth": costs, "cold": cold}


if __name__ == "__main__":
    main()
