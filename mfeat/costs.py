"""What a vector costs: its length, the time for a patch, the memory it takes."""

import time
import tracemalloc
from typing import Any

import numpy as np
import pyarrow as pa
from sklearn.base import clone
from threadpoolctl import threadpool_limits
from tqdm import tqdm

from mfeat.candidates import prepared
from mfeat.contest import Contest, together, told

#: Patches that are timed together, and rounds in which candidates take turns.
PATCHES, ROUNDS = 64, 5

#: One row a candidate. Times and memory are of one thread, patches given as one batch.
COSTS_SCHEMA = pa.schema(
    [
        pa.field("descriptor", pa.string(), nullable=False),
        pa.field("patch_rows", pa.int32(), nullable=False),
        pa.field("patch_cols", pa.int32(), nullable=False),
        ("n_features", pa.int32()),
        ("microseconds", pa.float64()),  # a patch, median over rounds
        ("ratio", pa.float64()),  # over the first candidate in the same round, median
        ("ratio_low", pa.float64()),  # quartiles
        ("ratio_high", pa.float64()),
        ("peak_bytes", pa.int64()),  # allocated at most during one call, beyond the patches
        ("failure", pa.string()),
    ]
)


def measure_costs(candidates: dict[str, Any], contest: Contest, quiet: bool | None) -> pa.Table:
    """Return what each candidate costs, over the clean patches of a contest.

    Machines are noisy, so candidates take turns, and ratios to the first one are taken within
    rounds. Memory is what Python and NumPy allocate during one call of `transform` for 64 patches
    (measured in a call of its own; libraries that allocate by themselves are not seen).
    """
    spread = np.linspace(0, len(contest.scenes) - 1, PATCHES).astype(int)
    members = np.unique(spread)
    patches = contest.patches("clean", members)

    def own() -> Any:  # a candidate that writes into its input must not change that of others
        return together(patches)

    missing = contest.any_missing()
    fitted, failures = {}, {}
    with threadpool_limits(1):
        for name, transformer in tqdm(candidates.items(), desc="costs", disable=quiet):
            try:
                model = clone(prepared(transformer, missing)).fit(own(), contest.labels[members])
                model.transform(own())  # compiles, and fills caches
                fitted[name] = (model, *_peak(model, own()))
            except Exception as error:  # of a candidate: any; its results tell it, too
                failures[name] = told(error)
        seconds = {name: np.empty(ROUNDS) for name in fitted}
        for k in range(ROUNDS):
            for name, (model, *_) in list(fitted.items()):
                given = own()
                started = time.perf_counter()
                try:
                    model.transform(given)
                except Exception as error:
                    failures[name] = told(error)
                    del fitted[name], seconds[name]
                    continue
                seconds[name][k] = time.perf_counter() - started
    first = seconds.get(next(iter(candidates)))
    rows = []
    for name in candidates:
        row: dict[str, Any] = {
            "descriptor": name, "patch_rows": contest.size[0], "patch_cols": contest.size[1],
            "failure": failures.get(name),
        }  # fmt: skip
        if name in fitted:
            _, length, peak = fitted[name]
            row |= {"n_features": length, "peak_bytes": peak}
            row["microseconds"] = float(np.median(seconds[name])) / len(members) * 1e6
            if first is not None:
                low, middle, high = np.quantile(seconds[name] / first, [0.25, 0.5, 0.75])
                row |= {"ratio": middle, "ratio_low": low, "ratio_high": high}
        rows.append(row)
    return pa.Table.from_pylist(rows, schema=COSTS_SCHEMA)


def _peak(model: Any, patches: Any) -> tuple[int, int]:
    """Return the number of features, and the bytes allocated at most while they are computed."""
    tracemalloc.start()
    try:
        before = tracemalloc.get_traced_memory()[0]
        features = np.asarray(model.transform(patches))
        return features.shape[1], tracemalloc.get_traced_memory()[1] - before
    finally:
        tracemalloc.stop()
