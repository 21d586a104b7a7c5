"""Progress on the terminal: one line when a stage begins, its time when it ends."""

from __future__ import annotations

import contextlib
import logging
import os
import sys
import time
from collections.abc import Iterator
from typing import TextIO


def say(line: str, stream: TextIO) -> None:
    """Print a line; where its reader has gone (``| head``), fall silent without stopping the work."""
    try:
        print(line, file=stream, flush=True)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())


class Stages:
    """Announces the stages of a run on standard error and keeps their times.

    Parameters
    ----------
    count : int
        Number of stages to come.
    shown : bool
        Print them.

    Attributes
    ----------
    seconds : dict of str to float
        Time of each finished stage.
    """

    def __init__(self, count: int, shown: bool) -> None:
        self.count = count
        self.shown = shown
        self.seconds: dict[str, float] = {}

    @property
    def bars(self) -> bool:
        """Whether a bar that redraws itself can be shown: on a terminal or in a notebook, not in a log file."""
        return self.shown and (sys.stderr.isatty() or "ipykernel" in sys.modules)

    @contextlib.contextmanager
    def stage(self, name: str, doing: str) -> Iterator[None]:
        """Run one stage between its two lines."""
        start = time.perf_counter()
        label = f"[{len(self.seconds) + 1}/{self.count}] {doing}"
        self._say(f"{label} ...")
        yield
        self.seconds[name] = time.perf_counter() - start
        if self.seconds[name] >= 2:  # quick stages need no second line
            self._say(f"{label}: {self.seconds[name]:.1f} s")

    def _say(self, line: str) -> None:
        if self.shown:
            say(line, sys.stderr)


class KeptWarnings(logging.Handler):
    """Keeps the text of every warning the package logs, for the record.

    Attributes
    ----------
    texts : list of str
        Warnings in order of appearance, each once.
    """

    def __init__(self) -> None:
        super().__init__(level=logging.WARNING)
        self.texts: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        """Keep one logged warning."""
        message = record.getMessage()
        if message not in self.texts:
            self.texts.append(message)


@contextlib.contextmanager
def kept_warnings() -> Iterator[KeptWarnings]:
    """Listen to the package's logger for as long as the block runs."""
    handler = KeptWarnings()
    logger = logging.getLogger("prevmap")
    logger.addHandler(handler)
    try:
        yield handler
    finally:
        logger.removeHandler(handler)
