"""The batch on dask.distributed: the same functions, the same bytes, other machines.

Sources and targets are expected on storage that every worker sees under the same paths.
"""

from __future__ import annotations

import contextlib
import os
import secrets
import time
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import CancelledError
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from grader.errors import GraderError, PresetError, WorkerFailed, WriteFailed
from grader.outcome import Outcome, Stop, as_grader_error, guarded, outcome_of

_CONNECT_S = 15
_POLL_S: Final = 0.5
_PATIENCE_S = 60.0
"""How long a cluster may have no workers at all."""
_SEEN_S: Final = 5.0
"""How long a new file may take to be seen on another machine (network file systems remember folders so long)."""
_LIBRARIES: Final = ("numpy", "numba", "imagecodecs", "tifffile", "pillow", "rawpy")
"""Libraries whose version can change a result's bytes."""
_SHARED_HINT: Final = "mount the storage on every worker under the same path (see docs/CLUSTER.md)"


@contextmanager
def connect(
    address: str,
    *,
    timeout_s: float | None = None,
    must_write: str | None = None,
    must_read: str | None = None,
) -> Iterator[Cluster]:
    """Yield the cluster, checked.

    Parameters
    ----------
    address : str
        ``tcp://host:port`` of a running scheduler, or ``local:N`` for N processes of our own.
    timeout_s : float, optional
        A frame that takes longer is given up, and its worker started anew.
    must_write, must_read : str, optional
        A folder and a file that every worker has to see.

    Raises
    ------
    PresetError
        ``distributed`` is not installed, the scheduler does not answer or has no workers, a worker runs
        another version of grader or of a library, or does not see the folder or the file.
    WriteFailed
        The folder cannot be written from here.
    """
    try:
        import distributed  # noqa: PLC0415 - an extra
    except ImportError as error:
        raise PresetError(
            "--cluster needs dask.distributed", hint="install it with: pip install 'grader[cluster]'"
        ) from error
    local = _local_cluster(distributed, address) if address.startswith("local:") else None
    try:
        client = distributed.Client(local or address, timeout=_CONNECT_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise PresetError(
            f"the scheduler at {address} does not answer ({error})", hint="start one with: dask scheduler"
        ) from error
    try:
        _check_versions(client, address)
        _check_storage(client, must_write, must_read)
        yield Cluster(client, address, timeout_s)
    finally:
        client.close()
        if local is not None:
            local.close()


def _local_cluster(distributed: Any, address: str) -> Any:
    count = address.removeprefix("local:")
    if not count.isdecimal() or int(count) < 1:
        raise PresetError(
            f"--cluster {address!r} is not understood", hint="write local:N with N of 1 or more"
        )
    return distributed.LocalCluster(
        n_workers=int(count), threads_per_worker=1, processes=True, dashboard_address=None
    )


@dataclass(frozen=True, slots=True)
class _Flight:
    job: Any
    since_s: float


class Cluster:
    """A connection to a scheduler and its workers; `connect` makes it."""

    def __init__(self, client: Any, address: str, timeout_s: float | None) -> None:
        self._client, self._address, self._timeout_s = client, address, timeout_s
        self._alone_since_s: float | None = None

    def run(
        self, function: Callable[[Any], Any], jobs: Iterable[Any], stop: Stop
    ) -> Iterator[Outcome[Any, Any]]:
        """Yield an outcome for each job as it ends (see `grader.workers.run`).

        A frame whose worker is lost goes to another one; dask.distributed gives up after three.
        """
        source = iter(jobs)
        flying: dict[Any, _Flight] = {}
        try:
            while not stop.at_once:
                self._hand_out(function, source, flying, stop)
                if not flying:
                    return
                outcomes = [*self._collect(flying), *self._give_up(flying)]
                self._hand_out(function, source, flying, stop)
                yield from outcomes
        finally:
            self._client.cancel(list(flying))

    def _hand_out(
        self, function: Callable[[Any], Any], source: Iterator[Any], flying: dict[Any, _Flight], stop: Stop
    ) -> None:
        free = self._threads() - len(flying)
        while free > 0 and not stop.asked:
            for job in source:
                future = self._client.submit(guarded, function, job, pure=False)
                flying[future] = _Flight(job, time.monotonic())
                break
            else:
                return
            free -= 1

    def _threads(self) -> int:
        """Return how many frames the cluster can take at once now: workers come and go."""
        threads = 0
        with contextlib.suppress(OSError, TimeoutError, RuntimeError):
            threads = sum(self._client.nthreads().values())
        self._check_scheduler()
        if threads:
            self._alone_since_s = None
            return threads
        now = time.monotonic()
        self._alone_since_s = self._alone_since_s or now
        if now - self._alone_since_s > _PATIENCE_S:
            raise WorkerFailed(
                f"the scheduler at {self._address} has no workers any more",
                hint="start some, then go on with --resume",
            )
        return 0

    def _check_scheduler(self) -> None:
        if self._client.status != "running":
            raise WorkerFailed(
                f"the scheduler at {self._address} is gone", hint="start it again, then go on with --resume"
            )

    def _collect(self, flying: dict[Any, _Flight]) -> Iterator[Outcome[Any, Any]]:
        from distributed import wait  # noqa: PLC0415 - an extra

        with contextlib.suppress(TimeoutError, CancelledError), self._client.as_current():
            wait(list(flying), timeout=_POLL_S, return_when="FIRST_COMPLETED")
        self._check_scheduler()
        for future in [future for future in flying if future.done()]:
            yield _outcome(flying.pop(future).job, future)

    def _give_up(self, flying: dict[Any, _Flight]) -> Iterator[Outcome[Any, Any]]:
        """Start anew the workers of frames that take too long: a thread of theirs cannot be ended otherwise."""
        if self._timeout_s is None:
            return
        limit = time.monotonic() - self._timeout_s
        late = {future.key: future for future, flight in flying.items() if flight.since_s < limit}
        if not late:
            return
        stuck = [
            worker for worker, keys in self._client.processing().items() if not late.keys().isdisjoint(keys)
        ]
        self._client.cancel(list(late.values()))
        for future in late.values():
            error = WorkerFailed(
                "the frame took longer than --frame-timeout allows and was ended",
                hint="--resume tries it once more by itself",
            )
            yield Outcome(flying.pop(future).job, error=error)
        if stuck:
            self._client.restart_workers(stuck, timeout=_CONNECT_S, raise_for_error=False)


def _outcome(job: Any, future: Any) -> Outcome[Any, Any]:
    try:
        return outcome_of(job, future.result())
    except Exception as error:  # noqa: BLE001 - what the cluster itself raises has no bounds
        return Outcome(job, error=_cluster_error(error))


def _cluster_error(error: Exception) -> GraderError:
    name = type(error).__name__
    if name == "KilledWorker":
        return WorkerFailed(
            "the cluster lost several workers on this frame",
            hint="see the workers' own logs; --resume tries again",
        )
    if "Cancelled" in name:
        return WorkerFailed("the cluster dropped the frame", hint="go on with --resume")
    return as_grader_error(error)


# ---------------------------------------------------------------- checks before the start


def worker_versions() -> dict[str, str]:
    """Return the version of grader where this runs, and of the libraries that results depend on."""
    from importlib.metadata import PackageNotFoundError, version  # noqa: PLC0415 - asked on the worker

    from grader import __version__  # noqa: PLC0415 - asked on the worker

    found = {"grader": __version__}
    for name in _LIBRARIES:
        with contextlib.suppress(PackageNotFoundError):
            found[name] = version(name)
    return found


def _check_versions(client: Any, address: str) -> None:
    ours = worker_versions()
    theirs: dict[str, dict[str, str]] = client.run(worker_versions)
    if not theirs:
        raise PresetError(
            f"the scheduler at {address} has no workers", hint="start some with: dask worker " + address
        )
    for worker, versions in theirs.items():
        for name, version in ours.items():
            if versions.get(name) != version:
                raise PresetError(
                    f"worker {worker} runs {name} {versions.get(name, '(none)')}, this is {version}",
                    hint="install the same versions everywhere: results depend on them",
                )


def _check_storage(client: Any, folder: str | None, file: str | None) -> None:
    """Refuse workers that would not read these sources, or would write their results somewhere else."""
    with _sign_in(folder) as sign:
        size = os.stat(file).st_size if file is not None and os.path.exists(file) else None  # noqa: PTH110, PTH116
        absolute = None if file is None or size is None else os.path.abspath(file)  # noqa: PTH100
        told: dict[str, str | None] = client.run(what_is_not_seen, sign, absolute, size)
    for worker, problem in told.items():
        if problem is not None:
            raise PresetError(f"worker {worker} {problem}", hint=_SHARED_HINT)


@contextmanager
def _sign_in(folder: str | None) -> Iterator[str | None]:
    """Leave a file in the folder for the workers to find: its name was never there before."""
    if folder is None:
        yield None
        return
    sign = Path(os.path.abspath(folder)) / f".grader-{secrets.token_hex(6)}.part"  # noqa: PTH100
    try:
        os.close(os.open(sign, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
        yield str(sign)
    except OSError as error:
        raise WriteFailed(
            f"the output folder cannot be written ({error.strerror or error})",
            path=folder,
            hint="choose another --out",
        ) from error
    finally:
        with contextlib.suppress(OSError):
            sign.unlink()


def what_is_not_seen(sign: str | None, file: str | None, size: int | None) -> str | None:
    """Tell (on a worker) what of the shared storage is missing here; None if all is there."""
    if sign is not None:
        end = time.monotonic() + _SEEN_S
        while not os.path.lexists(sign) and time.monotonic() < end:
            time.sleep(_POLL_S)
        if not os.path.lexists(sign):
            return f"does not see the output folder {os.path.dirname(sign)}"  # noqa: PTH120
        trial = Path(sign).with_name(f".grader-{secrets.token_hex(6)}.part")
        try:
            os.close(os.open(trial, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
            trial.unlink()
        except OSError as error:
            return f"cannot write into {trial.parent} ({error.strerror or error})"
    if file is not None:
        try:
            with open(file, "rb") as stream:  # noqa: PTH123
                if os.fstat(stream.fileno()).st_size != size:
                    return f"sees another file at {file}"
        except OSError as error:
            return f"cannot read {file} ({error.strerror or error})"
    return None
