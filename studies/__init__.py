"""What a person runs: the command line, one replay, many replays, and their results on disk.

As a library: ``from studies import Study, read_study, run_study``.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .study import Axis, Study, read_study
    from .study_folder import run_study

__all__ = ["Axis", "Study", "read_study", "run_study"]


def __getattr__(name: str) -> Any:
    # imported when asked for: the command line must answer at once
    if name in ("Axis", "Study", "read_study"):
        from . import study

        return getattr(study, name)
    if name == "run_study":
        from .study_folder import run_study

        return run_study
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
