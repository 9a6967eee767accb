"""From the plan of a comparison to its results: candidate by candidate, resumed, then published.

Each candidate at each patch size writes one part beside the results to come; what a killed run has
finished is kept.
"""

import json
from collections.abc import Callable, Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from joblib import Parallel, delayed
from tqdm import tqdm

from mfeat import storage
from mfeat.comparison import (
    COMPARISON,
    COSTS,
    RESULTS,
    Comparison,
    is_variant,
)
from mfeat.contest import RESULTS_SCHEMA, Contest, results_of
from mfeat.contests import ComparisonPlan
from mfeat.costs import measure_costs
from mfeat.entries import changed_inputs
from mfeat.packing import packed, unpacked
from mfeat.pool import Pool
from mfeat.publishing import OutputRefused
from mfeat.report import write_report
from mfeat.schema import UNFINISHED, differences

#: Where a run keeps what it has finished, and what it is a run of.
RUN = f"{UNFINISHED}/comparison"
RECORD = f"{RUN}/record.json"


class ComparisonRun:
    """One call of `compare`, while it holds the output."""

    def __init__(self, store: Any, plan: ComparisonPlan, how: dict[str, Any], quiet: bool | None):
        self._store, self._plan, self._how, self._quiet = store, plan, how, quiet
        self._record = plan.record()

    def complete(self, fresh: bool) -> None:
        """Resume, start, or find the comparison complete."""
        goes_on = not fresh and self._store.exists(RECORD)
        if goes_on:
            self._refuse_differences(RECORD, "an interrupted comparison", lambda found: found)
        elif not fresh and self._store.exists(COMPARISON):
            self._refuse_differences(COMPARISON, "a comparison", lambda found: found["record"])
            return
        contests, pools = [], []
        for size in self._plan.sizes:
            contest, pool = self._plan.contest(size, self._quiet)
            contests.append(contest)
            pools.append(pool)
        if not goes_on:  # only now: what cannot be compared leaves no trace
            self._store.remove_tree(RUN)  # parts without a record are of an unknown run
            self._store.make(RUN)
            self._write_json(RECORD, self._record)
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
        for stale in self._store.names(RUN):
            if stale.endswith(storage.TEMPORARY):
                self._store.remove(f"{RUN}/{stale}")
        there = set(self._store.names(RUN))
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
                with self._store.open(f"{RUN}/{_part_of(s, c)}") as stream:
                    yield storage.read_parquet(stream)

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
            with self._store.writing(f"{RUN}/{name}") as stream:
                pq.write_table(table, stream, compression="zstd")
        found = Comparison(self._store.location, results, costs, about)
        names = [RESULTS, COSTS]
        for name, content in write_report(found).items():
            self._store.make(f"{RUN}/{name}".rpartition("/")[0])
            with self._store.writing(f"{RUN}/{name}") as stream:
                stream.write(content)
            names.append(name)
        self._write_json(f"{RUN}/{COMPARISON}", about)
        self._store.remove(COMPARISON)
        for name in names:
            self._store.make(name.rpartition("/")[0])
            self._store.move(f"{RUN}/{name}", name)
        for name in self._store.names("charts"):
            if f"charts/{name}" not in names:  # of an earlier comparison
                self._store.remove(f"charts/{name}")
        self._store.move(f"{RUN}/{COMPARISON}", COMPARISON)
        self._store.settle()
        self._store.remove_tree(RUN)


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
    with storage.output(location).writing(f"{RUN}/{part}") as stream:
        pq.write_table(results.cast(RESULTS_SCHEMA), stream, compression="zstd")
