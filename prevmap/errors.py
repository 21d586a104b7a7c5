"""The three errors a user can meet; every room may import them."""

from __future__ import annotations

from typing import Any


class PrevmapError(Exception):
    """Any error raised on purpose by this package."""


class InputError(PrevmapError, ValueError):
    """An input is wrong: the message says where, what was found and what is accepted.

    Parameters
    ----------
    message : str
        One readable sentence or a short list of them.
    findings : tuple of Finding, optional
        The single findings behind the message, when there are several.
    """

    def __init__(self, message: str, findings: tuple[Any, ...] = ()) -> None:
        super().__init__(message)
        self.findings = findings


class FitError(PrevmapError):
    """The model could not be fitted: the message says why and what to try."""
