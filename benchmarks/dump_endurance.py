"""Whether `mfeat.dump` keeps its promises at full size: nothing lost, killed, small, on a cluster.

Four parts, each in a temporary folder:

files    thousands of files of all formats, among them more than 15 kinds of damaged ones: every
         file is in the table or in the rejects, none in both; values of some are compared.
kills    runs are killed with SIGKILL at random moments, alone or with all their workers, and the
         same call is made again until the table is complete: it equals, byte for byte, that of a
         run left alone.
memory   the peak memory of processes that dump few and many images (on Linux).
cluster  a Dask scheduler with two workers, one of which is killed: the same table.

Each part stops with an AssertionError where a promise is broken.
"""

import argparse
import contextlib
import io
import json
import os
import random
import shutil
import signal
import struct
import subprocess
import sys
import tempfile
import threading
import time
import zlib
from collections import Counter
from pathlib import Path
from typing import Any

import imagecodecs
import numpy as np
import pyarrow.parquet as pq
import tifffile
from PIL import Image

from mfeat import MinkowskiCurves, PatchGrid, dump, planning, read_table
from mfeat.images import read_image

PARTS = ("files", "kills", "memory", "cluster")
SIZE = 32

# What other processes run: arguments are the source, the output, the backend and the cost of a
# part; they say when they begin and the peak memory of themselves and of their workers, in MB.
# VmHWM is that of the program alone; ru_maxrss would start with what its parent had.
RUN = """
import sys
from joblib import Parallel, delayed
from mfeat import dump, planning

def peak():
    with open("/proc/self/status") as status:
        return int(next(line for line in status if line.startswith("VmHWM")).split()[1]) / 1024

if int(sys.argv[4]):
    planning._PART_COSTS = (int(sys.argv[4]),) * 2
print("begins", flush=True)
dump(sys.argv[1], sys.argv[2], size=32, jobs=2, backend=sys.argv[3])
workers = [0.0]
if sys.argv[3] == "loky":
    workers = Parallel(n_jobs=2, backend="loky")(delayed(peak)() for _ in range(20))
print(peak(), max(workers), flush=True)
"""


# Files --------------------------------------------------------------------------------------


def saved(write: Any, *arguments: Any, **options: Any) -> bytes:
    stream = io.BytesIO()
    write(stream, *arguments, **options)
    return stream.getvalue()


def image_files(rng: np.random.Generator) -> dict[str, bytes]:
    """Return an image file of each kind, by ending."""
    shape = tuple(rng.integers(SIZE, 4 * SIZE, 2))
    grey = rng.integers(0, 250, shape).astype(np.uint8)
    deep = rng.integers(0, 60_000, shape).astype(np.uint16)
    height = rng.normal(size=shape).astype(np.float32)
    height[:9, :9] = np.nan
    colour = rng.integers(0, 250, (*shape, 3)).astype(np.uint8)
    tiled = {"tile": (16, 32), "compression": "zlib"}
    return {
        "grey.png": imagecodecs.png_encode(grey),
        "deep.png": imagecodecs.png_encode(deep),
        "colour.png": imagecodecs.png_encode(colour),
        "grey.jpg": saved(Image.fromarray(grey).save, format="JPEG"),
        "colour.jpg": saved(Image.fromarray(colour).save, format="JPEG"),
        "grey.bmp": saved(Image.fromarray(grey).save, format="BMP"),
        "plain.tif": saved(tifffile.imwrite, deep, byteorder=">"),
        "float.tif": saved(tifffile.imwrite, height, bigtiff=True),
        "tiled.tif": saved(tifffile.imwrite, deep, **tiled),
        "strips.tif": saved(tifffile.imwrite, height, compression="lzw", rowsperstrip=7),
        "pages.tif": saved(tifffile.imwrite, np.stack([grey] * 2), photometric="minisblack"),
        "height.npy": saved(np.save, height),
        "one.npz": saved(np.savez_compressed, height),
        "pair.npz": saved(np.savez, one=grey, two=height),
    }


def damaged_files(rng: np.random.Generator) -> dict[str, bytes]:
    """Return a file of each kind of damage, by ending."""
    good = image_files(rng)
    cut = ("grey.png", "grey.jpg", "grey.bmp", "plain.tif", "tiled.tif", "height.npy", "one.npz")
    flipped = ("deep.png", "tiled.tif", "one.npz")
    bad = {f"cut_{name}": good[name][: len(good[name]) // 2] for name in cut}
    bad |= {f"head_{name}": good[name][:12] for name in cut}
    for name in flipped:
        content, middle = bytearray(good[name]), len(good[name]) // 2
        content[middle : middle + 9] = bytes(b ^ 0xFF for b in content[middle : middle + 9])
        bad[f"flipped_{name}"] = bytes(content)
    complex_ = np.ones((SIZE, SIZE), dtype=complex)
    header = struct.pack(">IIBBBBB", 90_000, 90_000, 8, 0, 0, 0, 0)
    chunk = b"IHDR" + header + struct.pack(">I", zlib.crc32(b"IHDR" + header))
    return bad | {
        "empty.png": b"",
        "text.tif": b"no image\n" * 50,
        "complex.npy": saved(np.save, complex_),
        "objects.npy": saved(np.save, complex_.astype(object), allow_pickle=True),
        "cmyk.jpg": saved(Image.new("CMYK", (SIZE, SIZE)).save, format="JPEG"),
        "small.png": imagecodecs.png_encode(np.zeros((SIZE - 1, SIZE), dtype=np.uint8)),
        "bomb.png": b"\x89PNG\r\n\x1a\n" + struct.pack(">I", 13) + chunk + bytes(1000),
    }


def write_files(folder: Path, count: int, seed: int = 0) -> tuple[set[str], Counter]:
    """Write files of all kinds, one in eight damaged; returns the damaged ones and their kinds."""
    rng, damaged, kinds = np.random.default_rng(seed), set(), Counter()
    queues: dict[bool, list] = {True: [], False: []}
    for k in range(count):
        bad = k % 8 == 5
        if not queues[bad]:
            queues[bad] = list((damaged_files if bad else image_files)(rng).items())
        kind, content = queues[bad].pop()
        place = folder / f"lot{k % 7}" / f"{k}_{kind}"
        place.parent.mkdir(exist_ok=True)
        place.write_bytes(content)
        if bad:
            damaged.add(f"{place.parent.name}/{place.name}")
            kinds[kind] += 1
    return damaged, kinds


def endure_files(work: Path, options: argparse.Namespace) -> dict[str, Any]:
    source = work / "in"
    source.mkdir()
    damaged, kinds = write_files(source, options.files)
    start = time.perf_counter()
    summary = dump(source, work / "out", size=SIZE, jobs=options.jobs, progress=False)
    seconds = time.perf_counter() - start
    listed = {str(path.relative_to(source)) for path in source.rglob("*.*")}
    table, rejects = read_table(work / "out"), pq.read_table(work / "out" / "rejects.parquet")
    sources = np.array(table.columns["source"].to_pylist())
    refused = Counter(rejects["source"].to_pylist())
    assert set(sources) | set(refused) == listed, "a file is lost"
    assert not set(sources) & set(refused), "a file is in the table and in the rejects"
    assert set(refused) == damaged, "a damaged file was used, or a good one was not"
    assert set(refused.values()) <= {1}, "a file is rejected twice"
    compared = 0
    for name in sorted(set(sources))[:: max(1, len(listed) // 60)]:
        first = (sources == name) & (table.columns["page"].to_numpy() == 0)
        image = read_image(source / name)
        vectors = MinkowskiCurves().transform(PatchGrid(SIZE, min_valid=0.5).cut(image))
        assert table.X[first].tobytes() == vectors.tobytes(), f"{name} has other values"
        compared += 1
    found = {
        "files": len(listed),
        "damaged": len(damaged),
        "kinds": len(kinds),
        "patches": summary.patches,
        "compared": compared,
        "seconds": seconds,
    }
    print(
        f"files: {len(listed)}, of which {len(damaged)} damaged in {len(kinds)} ways; each is in "
        f"the table or in the rejects, none in both; {summary.patches} patches in {seconds:.0f} s, "
        f"{compared} files compared bit for bit"
    )
    return found


# Kills --------------------------------------------------------------------------------------


def noise_images(folder: Path, count: int, side: int) -> Path:
    """Write noisy images, half of them mapped and half to be decoded, and a damaged one."""
    folder.mkdir()
    for k in range(count):
        image = np.random.default_rng(k).normal(120, 20, (side, side)).clip(0, 255).astype(np.uint8)
        if k % 2:
            np.save(folder / f"{k}.npy", image)
        else:
            (folder / f"{k}.png").write_bytes(imagecodecs.png_encode(image))
    (folder / "damaged.png").write_bytes(b"")
    return folder


@contextlib.contextmanager
def part_cost(pixels: int):
    """Let parts be small, so that there are many."""
    before, planning._PART_COSTS = planning._PART_COSTS, (pixels, pixels)
    try:
        yield
    finally:
        planning._PART_COSTS = before


def contents(out: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in out.iterdir() if path.is_file()}


def check_equal(out: Path, reference: dict[str, bytes]) -> None:
    assert contents(out) == reference, f"{out} differs from the table of a run left alone"
    left = [str(path) for path in out.rglob("*") if path.name not in reference]
    assert not left, f"left behind: {left}"


def started(source: Path, out: Path, backend: str, cost: int) -> subprocess.Popen:
    """Start a dump in a session of its own and wait until it begins."""
    process = subprocess.Popen(
        [sys.executable, "-c", RUN, str(source), str(out), backend, str(cost)],
        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, start_new_session=True,
    )  # fmt: skip
    assert process.stdout.readline() == "begins\n", "the process did not start"
    return process


def endure_kills(work: Path, options: argparse.Namespace) -> dict[str, Any]:
    rng = random.Random(options.seed)
    source = noise_images(work / "in", options.images, options.side)
    cost = options.side**2
    with part_cost(cost):
        summary = dump(source, work / "alone", size=SIZE, jobs=options.jobs, progress=False)
    reference = contents(work / "alone")
    usual = {}
    for backend in ("threading", "loky"):
        with started(source, work / "timed", backend, cost) as process:
            start = time.perf_counter()
            process.communicate()
            usual[backend] = time.perf_counter() - start
        check_equal(work / "timed", reference)
        shutil.rmtree(work / "timed")
    out, found = work / "out", Counter()
    while found["kills"] < options.kills:
        backend = rng.choice(("threading", "loky"))
        with started(source, out, backend, cost) as process:
            with contextlib.suppress(subprocess.TimeoutExpired):
                process.wait(rng.uniform(0, usual[backend]))
            if process.poll() is None:
                if rng.random() < 0.5:
                    process.kill()  # its workers find out
                else:
                    os.killpg(process.pid, signal.SIGKILL)
                process.wait()
                found["kills"] += 1
                found[f"kills {backend}"] += 1
                state = "complete" if (out / "manifest.json").exists() else "unfinished"
                found[f"left {state}" if out.exists() else "left nothing"] += 1
                found["left half a file"] += any(out.rglob("*.tmp"))
                continue
        assert process.returncode == 0, "a run failed by itself"
        check_equal(out, reference)
        found["completed"] += 1
        shutil.rmtree(out)
    with part_cost(cost):
        last = dump(source, out, size=SIZE, jobs=options.jobs, progress=False)
    check_equal(out, reference)
    found["completed"] += 1
    print(
        f"kills: {found['kills']} ({found['kills threading']} with threads, {found['kills loky']} "
        f"with processes; {found['left half a file']} left half a file) in runs of {last.parts} "
        f"parts; {found['completed']} tables were completed after them, all equal byte for byte"
    )
    return {**found, "parts": summary.parts}


# Memory -------------------------------------------------------------------------------------


def endure_memory(work: Path, options: argparse.Namespace) -> dict[str, Any]:
    found: dict[str, Any] = {}
    one = noise_images(work / "one", 2, options.side)
    for backend in ("threading", "loky"):
        peaks = []
        for count in options.memory:
            source = work / f"{count}"
            if not source.exists():
                source.mkdir()
                for k in range(count):
                    suffix = (".png", ".npy")[k % 2]
                    shutil.copy(one / f"{k % 2}{suffix}", source / f"{k}{suffix}")
            with started(source, work / f"out_{backend}_{count}", backend, 0) as process:
                own, worker = map(float, process.communicate()[0].split())
            assert process.returncode == 0, "a run failed"
            peaks.append((own, worker if backend == "loky" else 0.0))
        found[backend] = peaks
        few, many = peaks[0], peaks[-1]
        ratios = [b / a for a, b in zip(few, many, strict=True) if a]
        found[f"{backend} ratio"] = max(ratios)
        shown = ", ".join(
            f"{own:.0f} MB" + (f" and {worker:.0f} MB a worker" if worker else "")
            for own, worker in peaks
        )
        print(f"memory, {backend}: {shown} at {options.memory} images; ratio {max(ratios):.3f}")
    return found


# Cluster ------------------------------------------------------------------------------------


@contextlib.contextmanager
def dask_processes(work: Path, n_workers: int):
    """Give the address of a Dask scheduler and the processes of its workers, without nannies."""
    address_file = work / "scheduler.json"
    common = ["--no-dashboard", "--scheduler-file", str(address_file)]
    scheduler = ["scheduler", "--host", "127.0.0.1", "--port", "0", *common]
    worker = ["worker", "--nthreads", "1", "--no-nanny", "--local-directory", str(work), *common]
    processes = []
    try:
        for arguments in (scheduler, *[worker] * n_workers):
            command = [sys.executable, "-m", "dask", *arguments]
            processes.append(subprocess.Popen(command, stderr=subprocess.DEVNULL))
        while not address_file.exists():
            assert processes[0].poll() is None, "the scheduler did not start"
            time.sleep(0.05)
        yield json.loads(address_file.read_text())["address"], processes[1:]
    finally:
        for process in reversed(processes):
            process.kill()
            process.wait()


def endure_cluster(work: Path, options: argparse.Namespace) -> dict[str, Any]:
    from dask.distributed import Client

    source = noise_images(work / "in", options.images, options.side)
    with part_cost(options.side**2):
        summary = dump(source, work / "alone", size=SIZE, jobs=options.jobs, progress=False)
        with dask_processes(work, 2) as (address, workers):
            with Client(address) as client:
                client.wait_for_workers(2)
            killed_at = []

            def kill_one() -> None:
                parts = 0
                while parts < summary.parts // 3:
                    time.sleep(0.002)
                    parts = len(list(work.glob("out/.unfinished/*/part-*.parquet")))
                workers[0].kill()
                killed_at.append(parts)

            killer = threading.Thread(target=kill_one, daemon=True)
            killer.start()
            dump(source, work / "out", size=SIZE, cluster=address, progress=False)
            killer.join(timeout=10)
            assert killed_at, "the worker was not killed in time"
            assert workers[0].wait() == -signal.SIGKILL
            assert workers[1].poll() is None, "the other worker did not live on"
    check_equal(work / "out", contents(work / "alone"))
    print(
        f"cluster: of two Dask workers one was killed after {killed_at[0]} of {summary.parts} "
        "parts; the table equals, byte for byte, that of threads"
    )
    return {"killed_at": killed_at[0], "parts": summary.parts}


def main(argv: list[str] | None = None) -> dict[str, dict[str, Any]]:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--parts", nargs="+", choices=PARTS, default=list(PARTS))
    parser.add_argument("--files", type=int, default=2000)
    parser.add_argument("--kills", type=int, default=50)
    parser.add_argument("--images", type=int, default=40, help="images of runs to be killed")
    parser.add_argument("--side", type=int, default=256, help="their side, and of memory's images")
    parser.add_argument("--memory", type=int, nargs="+", default=[100, 1000], metavar="IMAGES")
    parser.add_argument("--jobs", type=int, default=os.cpu_count())
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args(argv)
    work_of = {
        "files": endure_files,
        "kills": endure_kills,
        "memory": endure_memory,
        "cluster": endure_cluster,
    }
    found = {}
    for part in options.parts:
        with tempfile.TemporaryDirectory() as work:
            found[part] = work_of[part](Path(work), options)
    return found


if __name__ == "__main__":
    main()
