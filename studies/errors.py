"""Errors of what a person runs; the command line maps each family to an exit code.

StudyError
├── FileError             a file that a person writes cannot be used; holds file, line and key
│   ├── OverlayFileError  an overlay file
│   └── StudyFileError    a study file, or a study made without one
└── ResultsError          a results folder cannot be written or read
"""

from __future__ import annotations

from functools import partial


class StudyError(Exception):
    """Base of every error that ``studies`` raises on purpose."""


class FileError(StudyError):
    """A file that a person writes cannot be used.

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

    def __reduce__(self) -> tuple[partial[FileError], tuple[()]]:
        """Made again by its names, so that it comes back from another process."""
        return partial(type(self), **vars(self)), ()

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}, line {self.line}"
        return f"{place}: {self.problem}" if self.key is None else f"{place}, {self.key}: {self.problem}"


class OverlayFileError(FileError):
    """An overlay file cannot be used."""


class StudyFileError(FileError):
    """A study file cannot be used; or a study made without one, and then ``file`` is ``study`` and there is no line.

    Parameters
    ----------
    path : tuple of str and int
        The key in pieces, with the tables of a list counted from 0.
    """

    def __init__(
        self, *, file: str, line: int | None, key: str | None, problem: str, path: tuple[str | int, ...] = ()
    ) -> None:
        super().__init__(file=file, line=line, key=key, problem=problem)
        self.path = path


class ResultsError(StudyError):
    """A results folder cannot be written or read."""
