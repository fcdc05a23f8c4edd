"""One call shape for three places to compute: this process, local processes, a Dask cluster.

``run(function, jobs, ...)`` yields ``Outcome``s as jobs end; ``crew`` keeps the workers for several such calls.
Jobs and results are small values; pixels never cross a process boundary.  A job that raises, dies, hangs or is
lost becomes an outcome with an error, never an exception of the batch.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from typing import Any

from grader.outcome import Job, Outcome, Result, Stop, guarded, outcome_of

__all__ = ["Outcome", "Pool", "Runner", "Staff", "Stop", "crew", "run"]

Runner = Callable[[Callable[[Any], Any], Iterable[Any], Stop], Iterator[Outcome[Any, Any]]]
"""Runs a function on every job: ``runner(function, jobs, stop)``, see `run`."""


@dataclass(frozen=True, slots=True)
class Pool:
    """Where to compute.

    ``processes`` 0 computes in this process; ``cluster`` is a scheduler's address or ``local:N``.
    """

    processes: int = 0
    cluster: str | None = None
    timeout_s: float | None = None
    """A frame that takes longer is ended (not in this process, where nothing can end it)."""
    memory_bytes: int | None = None
    """Memory for all local processes together; the default is half of what is free."""
    worker_bytes: int | None = None
    """What one local process may allocate, where the system has such limits."""
    must_write: str | None = None
    """A folder that every worker of a cluster must see and be able to write."""
    must_read: str | None = None
    """A file that every worker of a cluster must see."""


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

    Raises
    ------
    PresetError
        The cluster cannot be used.
    WorkerFailed
        No worker can be started, or the cluster is gone.
    """
    with crew(pool) as runner:
        yield from runner(function, jobs, stop or Stop())


@contextmanager
def crew(pool: Pool) -> Iterator[Runner]:
    """Yield a runner whose workers live as long as the block (see `run`)."""
    if pool.cluster is not None:
        from grader.cluster import connect  # noqa: PLC0415 - distributed is an extra

        with connect(
            pool.cluster, timeout_s=pool.timeout_s, must_write=pool.must_write, must_read=pool.must_read
        ) as cluster:
            yield cluster.run
    elif pool.processes < 1:
        yield _run_here
    else:
        from grader.processes import Crew  # noqa: PLC0415 - only where processes are used

        processes = Crew(pool.processes, timeout_s=pool.timeout_s, memory_bytes=pool.worker_bytes)
        try:
            yield processes.run
        finally:
            processes.close()


class Staff:
    """The workers of one run: hired when they are first needed, kept for all its passes.

    Parameters
    ----------
    pool : Pool
        Where most jobs are done, side by side.
    alone : callable
        Returns the pool for a job that is done apart, by itself.
    stop : Stop
    """

    def __init__(self, pool: Pool, alone: Callable[[], Pool], stop: Stop) -> None:
        self._pool, self._alone, self._stop = pool, alone, stop
        self._runner: Runner | None = None
        self._hired = ExitStack()

    def run(
        self, function: Callable[[Any], Any], jobs: Iterable[Any], apart: Callable[[Any], bool]
    ) -> Iterator[Outcome[Any, Any]]:
        """Yield outcomes as `run` does; jobs for which ``apart`` is true come last, one after the other."""
        together: list[Any] = []
        by_themselves: list[Any] = []
        for job in jobs:
            (by_themselves if apart(job) else together).append(job)
        if together:
            if self._runner is None:
                self._runner = self._hired.enter_context(crew(self._pool))
            yield from self._runner(function, together, self._stop)
        for job in by_themselves:
            if self._stop.asked:
                return
            yield from run(function, [job], self._alone(), self._stop)

    def close(self) -> None:
        """Let all workers go."""
        self._runner = None
        self._hired.close()


def _run_here(function: Callable[[Any], Any], jobs: Iterable[Any], stop: Stop) -> Iterator[Outcome[Any, Any]]:
    for job in jobs:
        if stop.asked:
            return
        yield outcome_of(job, guarded(function, job))
