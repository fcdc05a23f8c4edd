"""Local worker processes, each with a pipe of its own, so that none can take another down.

Whatever happens to a worker (it crashes, hangs, is stopped or killed from outside, runs out of memory) ends its
pipe or its time limit, and nothing else: there is no queue or lock that it could leave taken.  Pools with a
shared queue were tried first; one whose idle worker is killed gives up all frames.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import sys
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from multiprocessing import connection, resource_tracker
from typing import Any, Final

from grader.errors import GraderError, WorkerFailed
from grader.outcome import Outcome, Stop, guarded, outcome_of

_POLL_S: Final = 0.5
_END_S: Final = 5.0
_BEGIN_S: Final = 120.0
"""A worker that does not take a job for so long is not going to: it was stopped, or cannot start."""
_TRIES: Final = 3
"""So often a job is handed out when workers end before they begin it."""
_THREAD_VARIABLES: Final = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
_MASKED: Final = (signal.SIGINT, signal.SIGTERM)


@dataclass(eq=False)
class _Task:
    function: Callable[[Any], Any]
    job: Any
    tries: int = 0


@dataclass(eq=False)
class _Worker:
    """One process and the parent's end of its pipe."""

    process: Any
    pipe: connection.Connection
    task: _Task | None = None
    begun: bool = False
    since_s: float = 0.0
    """When the job was handed out, then when it began."""


class Crew:
    """Worker processes that live until `close`.

    Parameters
    ----------
    size : int
        How many frames may be in flight.
    timeout_s : float, optional
        A job that takes longer is ended with its worker.
    memory_bytes : int, optional
        What one worker may allocate, where the system has such limits.
    """

    def __init__(self, size: int, *, timeout_s: float | None = None, memory_bytes: int | None = None) -> None:
        self._size, self._timeout_s, self._memory_bytes = size, timeout_s, memory_bytes
        self._workers: list[_Worker] = []

    def run(
        self, function: Callable[[Any], Any], jobs: Iterable[Any], stop: Stop
    ) -> Iterator[Outcome[Any, Any]]:
        """Yield an outcome for each job as it ends (see `grader.workers.run`)."""
        again: deque[_Task] = deque()
        source = (_Task(function, job) for job in jobs)
        try:
            while not stop.at_once:
                self._hand_out(again, source, stop)
                if not any(worker.task for worker in self._workers):
                    return
                outcomes = list(self._collect(again))
                self._hand_out(again, source, stop)  # keeps workers busy while the caller has the outcomes
                yield from outcomes
        finally:
            for worker in [worker for worker in self._workers if worker.task is not None]:
                self._remove(worker)

    def close(self) -> None:
        """End all workers."""
        for worker in self._workers:
            worker.pipe.close()  # an idle worker leaves by itself
        for worker in self._workers:
            worker.process.join(_END_S)
            _end(worker)
        self._workers.clear()

    def _hand_out(self, again: deque[_Task], source: Iterator[_Task], stop: Stop) -> None:
        while not stop.asked:
            worker = self._idle()
            if worker is None:
                return
            task = again.popleft() if again else next(source, None)
            if task is None:
                return
            worker.task, worker.begun, worker.since_s = task, False, time.monotonic()
            task.tries += 1
            with contextlib.suppress(OSError):  # that a worker is gone shows when its pipe is read
                worker.pipe.send((task.function, task.job))

    def _idle(self) -> _Worker | None:
        for worker in self._workers:
            if worker.task is None:
                return worker
        if len(self._workers) >= self._size:
            return None
        self._workers.append(_start(self._memory_bytes))
        return self._workers[-1]

    def _collect(self, again: deque[_Task]) -> Iterator[Outcome[Any, Any]]:
        busy = [worker for worker in self._workers if worker.task is not None]
        ready = connection.wait([worker.pipe for worker in busy], timeout=_POLL_S)
        for worker in busy:
            if worker.pipe in ready:
                yield from self._read(worker, again)
            elif self._is_late(worker):
                yield from self._lost(worker, again, _late())

    def _read(self, worker: _Worker, again: deque[_Task]) -> Iterator[Outcome[Any, Any]]:
        try:
            message = worker.pipe.recv()
        except (EOFError, OSError):
            worker.process.join(_END_S)
            yield from self._lost(worker, again, _death(worker))
            return
        if message is None:
            worker.begun, worker.since_s = True, time.monotonic()
            return
        task, worker.task = worker.task, None
        assert task is not None  # noqa: S101 - only busy workers are read
        yield outcome_of(task.job, message[0])

    def _is_late(self, worker: _Worker) -> bool:
        limit = self._timeout_s if worker.begun else _BEGIN_S
        return limit is not None and time.monotonic() - worker.since_s > limit

    def _lost(self, worker: _Worker, again: deque[_Task], error: GraderError) -> Iterator[Outcome[Any, Any]]:
        """Remove a worker; its frame failed, unless it was never begun: then another worker takes it."""
        self._remove(worker)
        task = worker.task
        assert task is not None  # noqa: S101 - only busy workers are watched
        if worker.begun:
            yield Outcome(task.job, error=error)
        elif task.tries < _TRIES:
            again.append(task)
        else:
            yield Outcome(task.job, error=_no_start(worker))

    def _remove(self, worker: _Worker) -> None:
        self._workers.remove(worker)
        _end(worker)


def _end(worker: _Worker) -> None:
    """End a process for certain: a stopped one obeys nothing milder."""
    worker.pipe.close()
    if worker.process.is_alive():
        worker.process.kill()
    worker.process.join(_END_S)


def _late() -> GraderError:
    return WorkerFailed(
        "the frame took longer than --frame-timeout allows and was ended",
        hint="--resume tries it once more by itself",
    )


def _death(worker: _Worker) -> GraderError:
    return WorkerFailed(
        f"the worker process died on this frame ({_how(worker)})",
        hint="the file may crash its decoder, or memory ran out; --resume tries it once more by itself",
    )


def _no_start(worker: _Worker) -> GraderError:
    return WorkerFailed(
        f"worker processes end before they begin ({_how(worker)})",
        hint="a script must call grader below: if __name__ == '__main__':",
    )


def _how(worker: _Worker) -> str:
    code = worker.process.exitcode
    if isinstance(code, int) and code < 0:
        known = {number.value: number.name for number in signal.Signals}
        return f"signal {known.get(-code, -code)}"
    return f"exit code {code}"


# ---------------------------------------------------------------- starting


def _start(memory_bytes: int | None) -> _Worker:
    kind = "forkserver" if "forkserver" in multiprocessing.get_all_start_methods() else "spawn"
    context: Any = multiprocessing.get_context(kind)
    if kind == "forkserver":
        context.set_forkserver_preload(["grader.jobs"])
    ours, theirs = context.Pipe()
    process = context.Process(target=_serve, args=(theirs, memory_bytes), daemon=True)
    try:
        with _prepared():
            process.start()
    except (OSError, EOFError) as error:
        ours.close()
        raise WorkerFailed(
            f"no worker process can be started ({error})", hint="use fewer --workers"
        ) from error
    finally:
        theirs.close()  # else the end of a worker would not end its pipe
    return _Worker(process, ours)


@contextlib.contextmanager
def _prepared() -> Iterator[None]:
    """Let what starts inside have one thread each, and not be reached by Ctrl-C before it is ready for it."""
    if os.name == "posix":
        resource_tracker.ensure_running()  # it would undo the mask
    before = {name: os.environ.get(name) for name in _THREAD_VARIABLES}
    os.environ.update(dict.fromkeys(_THREAD_VARIABLES, "1"))
    masks = hasattr(signal, "pthread_sigmask")
    mask = signal.pthread_sigmask(signal.SIG_BLOCK, _MASKED) if masks else ()
    try:
        yield
    finally:
        if masks:
            signal.pthread_sigmask(signal.SIG_SETMASK, mask)
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


# ---------------------------------------------------------------- in the worker


def _serve(pipe: connection.Connection, memory_bytes: int | None) -> None:
    """Do jobs until the pipe ends."""
    _prepare(memory_bytes)
    with contextlib.suppress(EOFError, OSError):
        while True:
            function, job = pipe.recv()
            pipe.send(None)  # begun
            pipe.send((guarded(function, job),))


def _prepare(memory_bytes: int | None) -> None:
    """Make this process a worker: it leaves with its parent, and only the parent answers signals."""
    _leave_signals_to_the_parent()
    threading.Thread(target=_leave_with_the_parent, daemon=True).start()
    _quieten_decoders()
    if memory_bytes is not None:
        _limit_memory(memory_bytes)


def _quieten_decoders() -> None:
    """Keep what libraries print themselves, file names as they are among it, from the terminal and from stdout.

    What goes wrong with a file is in its line of the log.  Python's own stderr stays, for warnings of ours.
    """
    with contextlib.suppress(OSError, ValueError):
        sys.stderr = os.fdopen(os.dup(2), "w", buffering=1, encoding="utf-8", errors="backslashreplace")
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, 1)
        os.dup2(nowhere, 2)
        os.close(nowhere)


def _leave_signals_to_the_parent() -> None:
    """Ctrl-C and ``kill`` reach the whole group of a terminal or a script: frames in flight are to be finished."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if hasattr(os, "setpgid"):
        with contextlib.suppress(OSError):
            os.setpgid(0, 0)
    if hasattr(signal, "pthread_sigmask"):
        signal.signal(
            signal.SIGTERM, signal.SIG_IGN
        )  # drops one that came before this process had its own group
        signal.pthread_sigmask(signal.SIG_UNBLOCK, _MASKED)
    signal.signal(signal.SIGTERM, signal.SIG_DFL)


def _leave_with_the_parent() -> None:
    """Wait for the parent's end, however it comes, and end at once: the next run may write the same files."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def _limit_memory(memory_bytes: int) -> None:
    """Bound what this process may allocate.

    ``RLIMIT_DATA`` counts writable private memory (Linux since 4.7, getrlimit(2)), not address space that is
    only reserved, as compilers and thread pools do in plenty, so that a limit near the real need can be set.
    """
    try:
        import resource  # noqa: PLC0415 - not on every system
    except ImportError:
        return
    _, hard = resource.getrlimit(resource.RLIMIT_DATA)
    limit = memory_bytes if hard == resource.RLIM_INFINITY else min(memory_bytes, hard)
    with contextlib.suppress(OSError, ValueError):  # not every system keeps it
        resource.setrlimit(resource.RLIMIT_DATA, (limit, hard))
