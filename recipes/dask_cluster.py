"""The same feature table from a Dask cluster: a scheduler and two worker processes, here.

On machines of your own, start `dask scheduler` on one and `dask worker ADDRESS` on each, let all of
them see the same files under the same path, and give the address to `dump` or `mfeat dump
--cluster`. Workers read images and write parts themselves; the client only hears which part is
done. This recipe writes one table with a cluster, one with a single worker, and compares their
numbers bit for bit. Dask comes with `pip install '.[cluster]'` in a clone.
"""

import argparse
from pathlib import Path

from dask.distributed import LocalCluster

from mfeat import dump, read_table
from mfeat.demo import write_demo


def main(argv: list[str] | None = None) -> int:
    """Write both tables and compare them; returns the number of patches."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--out", type=Path, default=Path("out/dask_cluster"))
    parser.add_argument("--panels", type=int, default=4, help="panels a condition")
    parser.add_argument("--side", type=int, default=512, help="side of a panel in pixels")
    parser.add_argument("--size", type=int, default=64, help="side of a patch in pixels")
    parser.add_argument("--stride", type=int, default=32, help="step from patch to patch")
    options = parser.parse_args(argv)

    manifest = options.out / "panels" / "manifest.csv"
    if not manifest.exists():
        write_demo(manifest.parent, options.panels, side=options.side)
    how = {"size": options.size, "stride": options.stride, "fresh": True}
    with LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
    ) as cluster:
        print(f"scheduler at {cluster.scheduler_address}, two worker processes")
        many = dump(manifest, options.out / "by_cluster", cluster=cluster.scheduler_address, **how)
    print(many)
    one = dump(manifest, options.out / "by_one", jobs=1, **how)
    print(one)
    tables = [read_table(summary.out) for summary in (many, one)]
    if tables[0].X.tobytes() != tables[1].X.tobytes():
        raise AssertionError("the two tables differ")
    print(f"both tables: {len(tables[0])} patches, the same numbers bit for bit")
    return len(tables[0])


if __name__ == "__main__":
    main()
