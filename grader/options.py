"""How a batch is run: what the command line's options are in a program."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from grader.model import ReadLimits
from grader.workers import Pool

LOG_NAME = "grader-log.jsonl"
Paths = Iterable[str | os.PathLike[str]]
Progress = Callable[[str, int, int], None]
"""Called with the stage (``measure`` or ``grade``), frames done, frames in all."""


@dataclass(frozen=True, slots=True)
class Options:
    """How a batch is run; what it does to the pictures is in its preset."""

    recurse: bool = False
    pool: Pool = field(default_factory=Pool)
    limits: ReadLimits = field(default_factory=ReadLimits)
    log: str | os.PathLike[str] | None = None
    overwrite: bool = False
    resume: bool = False
    dry_run: bool = False
    clocks: Mapping[str, float] = field(default_factory=dict)
    """Seconds to add to the clock of a body."""
    grey_cards: tuple[str, ...] = ()
    """``FRAME@X,Y,W,H``: a known neutral in a frame."""
    stretches: str | os.PathLike[str] | None = None
    """CSV of first file, last file: boundaries fixed by a person."""
    regrade_deg: float = 0.2
    """On resume, a finished frame is graded again when its correction moved by more than this angle."""
    against: str | os.PathLike[str] | None = None
    """A frame or fixed preset whose light every frame is compared with."""
    command: tuple[str, ...] = ()

    def log_path(self, out: Path | None) -> Path | None:
        """Return where the log goes; None where nothing is written."""
        if self.log is not None:
            return Path(self.log)
        return None if out is None else out / LOG_NAME
