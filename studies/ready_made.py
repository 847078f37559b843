"""Ready-made overlays: files to begin with, their names, what they do, and what any overlay is worth at expiry."""

from __future__ import annotations

import difflib
from importlib.resources import files
from pathlib import Path

from .errors import OverlayFileError, ResultsError

#: Their names, which are those of the files in ``overlays/``; plain ones first.
READY_MADE = (
    "put-only",
    "call-only",
    "band",
    "half-covered-band",
    "zero-cost-band",
    "put-spread-and-call",
    "delta-band",
    "mirrored-band",
    "laddered-band",
    "week-before-expiry-band",
    "one-year-put",
    "ratcheting-put",
    "early-replacing-put",
    "trend-gated-put",
    "low-vol-put",
)

#: Endings of a picture's file.
PICTURES = (".png", ".svg", ".pdf")


def ready_made_text(name: str) -> str:
    """The text of a ready-made overlay file.

    Raises
    ------
    OverlayFileError
        If there is none of that name.
    """
    if name not in READY_MADE:
        close = difflib.get_close_matches(name, READY_MADE, n=1)
        meant = f"did you mean {close[0]}? All are" if close else "there are"
        raise OverlayFileError(
            file=name,
            line=None,
            key=None,
            problem=f"no ready-made overlay has this name; {meant}: {', '.join(READY_MADE)}",
        )
    return (files(__package__) / "overlays" / f"{name}.toml").read_text(encoding="utf-8")


def what_it_does(text: str) -> str:
    """What a ready-made overlay is for: the first line of its file.

    Examples
    --------
    >>> what_it_does(ready_made_text("band"))
    'The standing band: a put 5% below each quarter, a call 10% above each month.'
    """
    return text.partition("\n")[0].removeprefix("#").strip()


def ready_made_lines() -> list[str]:
    """A line for each: its name and what it does."""
    width = max(map(len, READY_MADE)) + 2
    return [f"{name:{width}}{what_it_does(ready_made_text(name))}" for name in READY_MADE]


def overlay_text(name: str) -> str:
    """The text of a ready-made overlay, or of a file (``.toml``) of the user's own.

    Raises
    ------
    OverlayFileError
        If there is none.
    """
    if not name.endswith(".toml"):
        return ready_made_text(name)
    from .overlay_files import LARGEST_FILE_BYTES
    from .toml_text import read_toml_text

    return read_toml_text(Path(name), error=OverlayFileError, what="overlay file", largest=LARGEST_FILE_BYTES)


def draw_payoff(name: str, text: str, path: Path) -> list[str]:
    """Draw what an overlay is worth at expiry in an assumed market; what the picture says, in words.

    Raises
    ------
    OverlayFileError, OverlayError
        If the text is no overlay, or nothing of it can be drawn.
    ResultsError
        If the picture cannot be written.
    """
    from backtest.analytics.payoff import payoff_at_expiry
    from backtest.charts.payoff import option_words, payoff_caption, payoff_figure

    from .overlay_files import parse_overlay

    shown = Path(name).name
    agreed = parse_overlay(text, file=shown)
    payoff = payoff_at_expiry(agreed.overlay, agreed.volatility)
    figure = payoff_figure(payoff, title=f"{shown.removesuffix('.toml')}: {agreed.overlay.name}")
    try:
        figure.savefig(path)
    except OSError as error:
        raise ResultsError(f"cannot write {path}: {error}") from None
    return [*map(option_words, payoff.options), *payoff_caption(payoff)]


def check_free(path: Path) -> None:
    """Raise ResultsError if there is such a file."""
    if path.exists() or path.is_symlink():
        raise ResultsError(f"{path} is there already and stays as it is: give another file")


def write_new(path: Path, text: str) -> None:
    """Write a file that is not there yet.

    Raises
    ------
    ResultsError
        If it is there, or cannot be written.
    """
    check_free(path)
    try:
        with path.open("x", encoding="utf-8", newline="\n") as file:
            file.write(text)
    except OSError as error:
        raise ResultsError(f"cannot write {path}: {error}") from None
