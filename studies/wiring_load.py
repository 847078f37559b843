"""``rollband load``: files into one history, or a file of many symbols into a history of each.

Heavy imports are inside the functions, so that ``rollband --help`` answers at once.
"""

from __future__ import annotations

import shlex
from collections.abc import Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import typer

from .options import VolUnit
from .wiring import say, store_option, tell_notes, tell_taken
from .wiring_histories import load_for, store_and_tell

if TYPE_CHECKING:
    from data_loaders import History, Reading
    from data_loaders.schema import Kind

#: Histories that a load of many names one by one, and the longest name that goes before a symbol.
NAMED, LONGEST_PREFIX = 20, 40


def load_and_store(
    name: str, files: Mapping[str, Path | None], *, mapping: Sequence[str] | None, date_format: Sequence[str] | None,
    decimal: Sequence[str] | None, symbol_column: str | None, symbol: str | None, vol_unit: VolUnit | None,
    first: datetime | None, last: datetime | None, append: bool, store: Path,
) -> None:  # fmt: skip
    """Read, check, store and tell; nothing is written if anything is wrong."""
    from data_loaders import ReadingError, load_history, readings
    from data_loaders.store import check_name, read_history

    check_name(name)
    try:
        said = readings(
            columns=mapping or (), date_formats=date_format or (), decimals=decimal or (), symbol_column=symbol_column,
            symbol=symbol,
        )  # fmt: skip
    except ReadingError as error:
        raise typer.BadParameter(str(error), param_hint=error.option) from None
    if symbol is not None and not symbol.strip():
        raise typer.BadParameter("a symbol is not empty", param_hint="--symbol")
    span = {"first_day": first.date() if first else None, "last_day": last.date() if last else None}
    if symbol_column is not None and symbol is None:
        if append:
            raise typer.BadParameter("append one symbol at a time: say which with --symbol", param_hint="--append")
        _load_many(name, files, said, vol_unit.value if vol_unit else None, span, store)
        return
    if append:
        said = remembered(read_history(store, name), said)
    history = load_for(
        lambda unit: load_history(**files, vol_unit=unit, readings=said, **span),  # type: ignore[arg-type]
        vol_unit.value if vol_unit else None, store, name, append=append,
    )  # fmt: skip
    store_and_tell(history, store, name, append=append)
    say(f"Next: rollband replay {shlex.quote(name)} --put 95 --call 110" + store_option(store))


def remembered(history: History, said: dict[Kind, Reading]) -> dict[Kind, Reading]:
    """What was said of the files of a stored history, where nothing else is said now."""
    from dataclasses import asdict

    from data_loaders import Reading

    before = {source.kind: source.reading for source in history.sources}
    return {
        kind: Reading(**{**asdict(before[kind]), **{key: value for key, value in asdict(now).items() if value}})
        if kind in before
        else now
        for kind, now in said.items()
    }


def _load_many(
    prefix: str, files: Mapping[str, Path | None], said: dict[Kind, Reading], unit: str | None, span: dict[str, Any],
    store: Path,
) -> None:  # fmt: skip
    """A history of each symbol, named after it."""
    from data_loaders import load_histories
    from data_loaders.store import store_histories
    from data_loaders.symbols import history_name

    if len(prefix) > LONGEST_PREFIX:
        raise typer.BadParameter(
            f"the symbols come after it, so it can have at most {LONGEST_PREFIX} characters", param_hint="NAME"
        )
    found = load_histories(**files, vol_unit=unit, readings=said, **span)  # type: ignore[arg-type]
    named = {history_name(prefix, symbol): symbol for symbol in found}
    stored = store_histories([(name, found[symbol]) for name, symbol in named.items()], store)
    tell_taken(next(iter(found.values())))
    for name, symbol in list(named.items())[:NAMED]:
        index = found[symbol].frame.index
        say(f"  {symbol}: {len(index):,} days, {index[0].date()} to {index[-1].date()}, stored as {name}")
    if len(named) > NAMED:
        say(f"  and {len(named) - NAMED:,} more")
    if len(found) == 1:
        tell_notes(next(iter(found.values())))
    written = sum(one.written for one in stored)
    same = f"; {len(stored) - written:,} held exactly this already" if written < len(stored) else ""
    say(f"Stored {written:,} {'history' if written == 1 else 'histories'} in {store}{same}")
    say(f"Next: rollband replay {shlex.quote(next(iter(named)))} --put 95 --call 110" + store_option(store))
