"""Errors of what a person runs; the command line maps each family to an exit code.

StudyError
├── OverlayFileError   an overlay file cannot be used; holds file, line and key
└── ResultsError       a results folder cannot be written or read
"""

from __future__ import annotations


class StudyError(Exception):
    """Base of every error that ``studies`` raises on purpose."""


class OverlayFileError(StudyError):
    """An overlay file cannot be used.

    Parameters
    ----------
    file : str
        Name of the file.
    line : int or None
        Line of the key, counted from 1.
    key : str or None
        The key, with its table: ``costs.half_spread_vol``.
    problem : str
        What is wrong and what to do.
    """

    def __init__(self, *, file: str, line: int | None, key: str | None, problem: str) -> None:
        self.file, self.line, self.key, self.problem = file, line, key, problem
        super().__init__(file, line, key, problem)

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}, line {self.line}"
        return f"{place}: {self.problem}" if self.key is None else f"{place}, {self.key}: {self.problem}"


class ResultsError(StudyError):
    """A results folder cannot be written or read."""
