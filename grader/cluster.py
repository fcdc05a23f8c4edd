"""The batch on dask.distributed: the same functions, the same bytes, other machines.

Sources and targets are expected on storage that every worker sees under the same paths.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from grader.errors import PresetError

_RETRIES = 2
_CONNECT_S = 15


@contextmanager
def connect(address: str) -> Iterator[tuple[Any, int]]:
    """Yield an executor on the cluster and the number of threads it has.

    Parameters
    ----------
    address : str
        ``tcp://host:port`` of a running scheduler, or ``local:N`` for N processes of our own.

    Raises
    ------
    PresetError
        ``distributed`` is not installed, the scheduler does not answer or has no workers, or a worker
        runs another version of grader.
    """
    try:
        import distributed  # noqa: PLC0415 - an extra
    except ImportError as error:
        raise PresetError(
            "--cluster needs dask.distributed", hint="install it with: pip install 'grader[cluster]'"
        ) from error
    cluster = _local_cluster(distributed, address) if address.startswith("local:") else None
    try:
        client = distributed.Client(cluster or address, timeout=_CONNECT_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise PresetError(
            f"the scheduler at {address} does not answer ({error})", hint="start one with: dask scheduler"
        ) from error
    try:
        _check_versions(client, address)
        executor = client.get_executor(pure=False, retries=_RETRIES)
        yield executor, max(sum(client.nthreads().values()), 1)
        executor.shutdown(wait=False)
    finally:
        client.close()
        if cluster is not None:
            cluster.close()


def _local_cluster(distributed: Any, address: str) -> Any:
    count = address.removeprefix("local:")
    if not count.isdecimal() or int(count) < 1:
        raise PresetError(
            f"--cluster {address!r} is not understood", hint="write local:N with N of 1 or more"
        )
    return distributed.LocalCluster(
        n_workers=int(count), threads_per_worker=1, processes=True, dashboard_address=None
    )


def worker_version() -> str:
    """Return the version of grader where this runs."""
    from grader import __version__  # noqa: PLC0415 - asked on the worker

    return __version__


def _check_versions(client: Any, address: str) -> None:
    ours = worker_version()
    theirs: dict[str, str] = client.run(worker_version)
    if not theirs:
        raise PresetError(
            f"the scheduler at {address} has no workers", hint="start some with: dask worker " + address
        )
    other = {worker: version for worker, version in theirs.items() if version != ours}
    if other:
        worker, version = next(iter(other.items()))
        raise PresetError(
            f"worker {worker} runs grader {version}, this is {ours}",
            hint="install the same version everywhere",
        )
