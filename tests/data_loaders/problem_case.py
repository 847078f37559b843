"""Files to load and the one problem that is expected of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from data_loaders import DataProblems, Problem, load_history

PRICES = """date,close
2020-01-02,100
2020-01-03,101
2020-01-06,102
2020-01-07,103
2020-01-08,104
2020-01-09,105
2020-01-10,106
2020-01-13,107
"""
VOL = "date,vol\n" + "".join(f"2020-01-{d:02d},{20 + d}\n" for d in (2, 3, 6, 7, 8, 9, 10, 13))


@dataclass
class Case:
    """Files to load, and the one problem expected."""

    code: str
    files: dict[str, str | bytes]
    at: str
    line: int | None = None
    column: str | None = None
    value: str | None = None
    says: tuple[str, ...] = ()
    options: dict[str, Any] = field(default_factory=dict)


def vol(**changes: str) -> str:
    """The vol file with the values of some days changed (``d02`` is 2020-01-02)."""
    text = VOL
    for day, value in changes.items():
        d = int(day[1:])
        text = text.replace(f"2020-01-{d:02d},{20 + d}\n", f"2020-01-{d:02d},{value}\n")
    return text


def write(folder: Path, files: Mapping[str, str | bytes]) -> dict[str, Path]:
    paths = {}
    for kind, content in files.items():
        paths[kind] = folder / f"{kind}.csv"
        paths[kind].write_bytes(content if isinstance(content, bytes) else content.encode())
    return paths


def problems_of(folder: Path, files: Mapping[str, str | bytes], **options: Any) -> tuple[Problem, ...]:
    with pytest.raises(DataProblems) as caught:
        load_history(**write(folder, files), **options)
    return caught.value.problems


def check(case: Case, folder: Path) -> None:
    """The problem is the only one, and says where and what."""
    (problem,) = problems_of(folder, case.files, **case.options)
    assert (problem.code, problem.kind, problem.file) == (case.code, case.at, f"{case.at}.csv")
    assert (problem.line, problem.column, problem.value) == (case.line, case.column, case.value)
    for piece in case.says:
        assert piece in problem.message
    assert problem.message[-1] == "."
    assert "{" not in problem.message
