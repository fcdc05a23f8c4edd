"""How one job ends, how errors become records, and the wish to stop."""

from __future__ import annotations

import os
import threading
import traceback
from collections.abc import Callable
from dataclasses import dataclass
from typing import Generic, TypeVar

from grader.errors import GraderError, WorkerFailed

Job = TypeVar("Job")
Result = TypeVar("Result")


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


def guarded(function: Callable[[Job], Result], job: Job) -> Result | GraderError:
    """Call ``function(job)`` where the job is done; return whatever it raises as an error of ours."""
    try:
        return function(job)
    except Exception as error:  # noqa: BLE001 - the one place where errors become records
        return as_grader_error(error)


def outcome_of(job: Job, answer: Result | GraderError) -> Outcome[Job, Result]:
    """Return the outcome for what `guarded` returned."""
    return Outcome(job, error=answer) if isinstance(answer, GraderError) else Outcome(job, result=answer)


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
