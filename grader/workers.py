"""One call shape for three places to compute: this process, local processes, a Dask cluster.

``run(function, jobs, ...)`` yields ``Outcome``s as jobs end.  Jobs and results are small values; pixels
never cross a process boundary.  A job that raises, dies, hangs or is lost becomes an outcome with an
error, never an exception of the batch.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
import traceback
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, CancelledError, Future, wait
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

from grader.errors import GraderError, WorkerFailed

Job = TypeVar("Job")
Result = TypeVar("Result")

_POLL_S = 0.5
_THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@dataclass(frozen=True, slots=True)
class Pool:
    """Where to compute.

    ``processes`` 0 computes in this process; ``cluster`` is a scheduler's address or ``local:N``.
    """

    processes: int = 0
    cluster: str | None = None
    timeout_s: float | None = None
    memory_bytes: int | None = None
    """Memory limit of one worker process, where the system has such limits."""


@dataclass(frozen=True, slots=True)
class Outcome(Generic[Job, Result]):
    """One job's end: a result or an error."""

    job: Job
    result: Result | None = None
    error: GraderError | None = None


class Stop:
    """A wish to stop: once, finish what is in flight; twice, drop it.

    Examples
    --------
    >>> stop = Stop()
    >>> stop.ask(); stop.asked, stop.at_once
    (True, False)
    >>> stop.ask(); stop.at_once
    True
    """

    def __init__(self) -> None:
        self._asked = threading.Event()
        self._at_once = threading.Event()

    def ask(self) -> None:
        """Ask to stop; ask again to stop at once."""
        (self._at_once if self._asked.is_set() else self._asked).set()

    @property
    def asked(self) -> bool:
        """Whether no further job should begin."""
        return self._asked.is_set()

    @property
    def at_once(self) -> bool:
        """Whether jobs in flight should be dropped."""
        return self._at_once.is_set()


def run(
    function: Callable[[Job], Result], jobs: Iterable[Job], pool: Pool, stop: Stop | None = None
) -> Iterator[Outcome[Job, Result]]:
    """Run ``function`` on every job and yield the outcomes as they come.

    Parameters
    ----------
    function : callable
        A module-level function of one picklable argument.
    jobs : iterable
        The arguments.
    pool : Pool
        Where to compute.
    stop : Stop, optional
        When asked, no further job begins; what is in flight is still yielded.
    """
    stop = stop or Stop()
    if pool.cluster is None and pool.processes < 1:
        yield from _run_inline(function, jobs, stop)
        return
    executor = _on_cluster(pool) if pool.cluster is not None else _on_processes(pool)
    with executor as (submit, slots):
        yield from _drain(function, iter(jobs), submit, slots, stop)


def _run_inline(
    function: Callable[[Job], Result], jobs: Iterable[Job], stop: Stop
) -> Iterator[Outcome[Job, Result]]:
    for job in jobs:
        if stop.asked:
            return
        yield guarded(function, job)


def guarded(function: Callable[[Job], Result], job: Job) -> Outcome[Job, Result]:
    """Call ``function(job)``; turn whatever it raises into an outcome."""
    try:
        return Outcome(job, result=function(job))
    except Exception as error:  # noqa: BLE001 - the one place where errors become records
        return Outcome(job, error=as_grader_error(error))


def as_grader_error(error: BaseException) -> GraderError:
    """Return ``error`` if it is ours, else a plain account of a fault that is grader's own."""
    if isinstance(error, GraderError):
        return error
    if isinstance(error, MemoryError):
        return WorkerFailed(
            "there is not enough memory for this frame", hint="use fewer --workers or raise --memory"
        )
    where = traceback.extract_tb(error.__traceback__)
    place = f" at {os.path.basename(where[-1].filename)}:{where[-1].lineno}" if where else ""  # noqa: PTH119
    return GraderError(
        f"internal error ({type(error).__name__}: {error}{place})",
        hint="please report it with this line of the log",
    )


Submit = Callable[[Callable[[Any], Any], Any], "Future[Any]"]


def _drain(
    function: Callable[[Job], Result], jobs: Iterator[Job], submit: Submit, slots: int, stop: Stop
) -> Iterator[Outcome[Job, Result]]:
    """Keep ``slots`` jobs in flight; yield outcomes; leave early when asked to stop at once."""
    waiting: dict[Future[Any], Job] = {}
    exhausted = False
    while True:
        while not exhausted and len(waiting) < slots and not stop.asked:
            try:
                job = next(jobs)
            except StopIteration:
                exhausted = True
                break
            waiting[submit(function, job)] = job
        if not waiting or stop.at_once:
            return
        done, _ = wait(waiting, timeout=_POLL_S, return_when=FIRST_COMPLETED)
        for future in sorted(done, key=list(waiting).index):
            job = waiting.pop(future)
            yield _outcome(job, future)


def _outcome(job: Job, future: Future[Any]) -> Outcome[Job, Any]:
    try:
        return Outcome(job, result=future.result())
    except CancelledError:
        return Outcome(job, error=WorkerFailed("the frame was cancelled"))
    except Exception as error:  # noqa: BLE001 - the one place where errors become records
        return Outcome(job, error=_worker_error(error))


def _worker_error(error: BaseException) -> GraderError:
    name = type(error).__name__
    if isinstance(error, TimeoutError):
        return WorkerFailed(
            "the frame took longer than --frame-timeout allows and was ended", hint="open the file by itself"
        )
    if name == "ProcessExpired":
        code = getattr(error, "exitcode", None)
        how = (
            f"signal {signal.Signals(-code).name}"
            if isinstance(code, int) and code < 0
            else f"exit code {code}"
        )
        return WorkerFailed(
            f"the worker process died on this frame ({how})",
            hint="the file may crash its decoder; open it by itself",
        )
    if name == "KilledWorker":
        return WorkerFailed("the cluster lost its workers on this frame", hint="see the workers' own logs")
    return as_grader_error(error)


# ---------------------------------------------------------------- local processes


@contextmanager
def _single_threaded() -> Iterator[None]:
    """Give the processes that start inside one thread each: frames run side by side already."""
    before = {name: os.environ.get(name) for name in _THREAD_VARIABLES}
    os.environ.update(dict.fromkeys(_THREAD_VARIABLES, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def _start_worker(memory_bytes: int | None) -> None:
    """Prepare a worker process: the parent alone answers Ctrl-C; memory is limited where possible."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if memory_bytes is None:
        return
    try:
        import resource  # noqa: PLC0415 - not on every system
    except ImportError:
        return
    _, hard = resource.getrlimit(resource.RLIMIT_DATA)
    limit = memory_bytes if hard == resource.RLIM_INFINITY else min(memory_bytes, hard)
    resource.setrlimit(resource.RLIMIT_DATA, (limit, hard))


@contextmanager
def _on_processes(pool: Pool) -> Iterator[tuple[Submit, int]]:
    from pebble import ProcessPool  # noqa: PLC0415 - only where processes are used

    kind = "forkserver" if "forkserver" in multiprocessing.get_all_start_methods() else "spawn"
    context = multiprocessing.get_context(kind)
    if kind == "forkserver":
        context.set_forkserver_preload(["grader.jobs"])
    with _single_threaded():
        processes = ProcessPool(
            max_workers=pool.processes,
            context=context,
            initializer=_start_worker,
            initargs=(pool.memory_bytes,),
        )

    def submit(function: Callable[[Any], Any], job: Any) -> Future[Any]:
        future: Future[Any] = processes.schedule(function, args=[job], timeout=pool.timeout_s)
        return future

    try:
        with _single_threaded():
            yield submit, pool.processes + 1
        processes.close()
    except BaseException:
        processes.stop()
        raise
    finally:
        processes.stop()
        processes.join()


# ---------------------------------------------------------------- a cluster


@contextmanager
def _on_cluster(pool: Pool) -> Iterator[tuple[Submit, int]]:
    from grader.cluster import connect  # noqa: PLC0415 - distributed is an extra

    with connect(str(pool.cluster)) as (executor, threads):
        yield (executor.submit), 2 * threads
