"""Who does the work: threads, processes or a cluster, all through joblib."""

import contextlib
from collections.abc import Iterator
from typing import Any

from joblib import parallel_config

from mfeat import _checks

BACKENDS = ("threading", "loky")


@contextlib.contextmanager
def workers(jobs: int, backend: str | None, cluster: str | None) -> Iterator[dict[str, Any]]:
    """Give the arguments of `joblib.Parallel` for a number of workers of a kind."""
    if _checks.integer("jobs", jobs, minimum=-(2**31)) == 0:
        raise ValueError("jobs must be >= 1, or <= -1 to count from all processors; got 0")
    how = {"n_jobs": jobs, "batch_size": 1}
    if cluster is not None:
        if backend is not None:
            raise ValueError(f"backend {backend!r} and a cluster were given; choose one")
        with _dask_client(cluster), parallel_config(backend="dask"), _killed_workers():
            yield how | {"n_jobs": -1}
    elif backend is not None:
        with parallel_config(backend=_checks.choice("backend", backend, BACKENDS)):
            yield how
    else:
        yield how | {"prefer": "threads"}


@contextlib.contextmanager
def _killed_workers() -> Iterator[None]:
    """Say what it means when Dask gives a task up."""
    from dask.distributed import KilledWorker

    try:
        yield
    except KilledWorker as error:
        raise RuntimeError(
            "several workers of the cluster died over one part: out of memory, or killed. What was "
            f"finished is kept; run the same again ({error})"
        ) from error


def _dask_client(address: str) -> Any:
    try:
        from dask.distributed import Client
    except ImportError:
        raise ImportError(
            "a cluster needs Dask: python -m pip install dask distributed, here and on every worker"
        ) from None
    if not isinstance(address, str) or not address:
        raise TypeError(f"cluster must be the address of a Dask scheduler; got {address!r}")
    try:
        client = Client(address, timeout=20, set_as_default=True)
    except (OSError, ValueError, TimeoutError) as error:
        raise ValueError(f"no Dask scheduler answers at {address}: {error}") from None
    try:
        client.wait_for_workers(1, timeout=10)
    except TimeoutError:
        client.close()
        raise ValueError(
            f"the scheduler at {address} has no worker; start some with: dask worker {address}"
        ) from None
    return client
