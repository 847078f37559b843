"""Stored histories on the command line: what a load stored, appended or changed; what a store holds.

Heavy imports are inside the functions, so that ``rollband --help`` answers at once.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from .options import AsJson, Store
from .wiring import say, store_option, tell_history

if TYPE_CHECKING:
    from data_loaders import History
    from data_loaders.listing import Listed
    from data_loaders.store import Stored
    from data_loaders.versions import Version

#: From so many former versions of one history on, a load says how to let some go.
MANY = 100


def load_for(load: Callable[[Any], History], unit: str | None, store: Path, name: str, *, append: bool) -> History:
    """What ``load`` makes of the files; where they are to be appended, in the vol unit of before if it is not plain."""
    from data_loaders import DataProblems, read_history

    if not append:
        return load(unit)
    former = read_history(store, name)
    try:
        return load(unit)
    except DataProblems as problems:
        known = {source.unit for source in former.sources if source.kind == "vol"}
        if unit is not None or set(problems.totals) != {"vol-unit-unclear"} or len(known) != 1:
            raise
        return load(known.pop())


def store_and_tell(history: History, store: Path, name: str, *, append: bool) -> None:
    """Store a history, or append it, and say what was read and what is different from before."""
    from data_loaders.appending import TOLERANCE
    from data_loaders.store import append_history, store_history

    if not append:
        stored = store_history(history, store, name)
        tell_history(history)
        _tell_stored(stored, store, name)
        return
    stored, found = append_history(history, store, name)
    tell_history(history)
    if found.left_out:
        say(f"  note: {name} has no {', '.join(found.left_out)}: left out; a load without --append takes them")
    common = "there is no day in common, so nothing could be compared"
    if found.in_common:
        days = "1 day in common agrees" if found.in_common == 1 else f"{found.in_common:,} days in common agree"
        common = f"{days} within {TOLERANCE:g} of the value"
    if found.nothing_new:
        last = history.frame.index[-1].date()
        say(f"Nothing to append: the files end on {last}, which is stored already; {common}.")
    else:
        say(f"Appended to {name}, days: {found.added}; {common}.")
    for one in found.replaced:
        say(f"  {one}")
    if stored.written:
        _tell_kept(stored, store, name)
        say(f"Stored as {stored.path}")


def _tell_stored(stored: Stored, store: Path, name: str) -> None:
    if not stored.written:
        say(f"Nothing has changed: {stored.path} holds exactly this already.")
        return
    if stored.former is not None:
        say(f"The history that was stored as {name} before is replaced.")
        for line in [] if stored.changes is None else stored.changes.lines():
            say(f"  {line}")
        if stored.unreadable is not None:
            say(f"  what is different cannot be said: {stored.unreadable}")
        _tell_kept(stored, store, name)
    say(f"Stored as {stored.path}")


def _tell_kept(stored: Stored, store: Path, name: str) -> None:
    if stored.former is None:
        return
    from data_loaders.versions import former_versions

    say(
        f"  the one of {_time(stored.former)} is kept as version {stored.former.short}: rollband histories {name}"
        f"{store_option(store)}"
    )
    kept = former_versions(store, name)
    if len(kept) >= MANY:
        say(
            f"  {len(kept):,} former versions are kept ({_size(sum(one.size for one in kept))}); rollband histories "
            f"{name} --prune 20{store_option(store)} lets all but the newest 20 go"
        )


def histories(
    name: Annotated[str | None, typer.Argument(help="One history, with its versions; all if not given.")] = None,
    store: Store = Path("histories"),
    prune: Annotated[
        int | None,
        typer.Option(
            "--prune", min=0,
            help="Let go of all former versions but the newest so many of each history; results made from those can "
            "no longer be audited.",
        ),
    ] = None,
    as_json: AsJson = False,
) -> None:  # fmt: skip
    """List the stored histories: what each holds, its versions, and when it was last loaded."""
    from data_loaders.listing import list_histories
    from data_loaders.store import prune_versions

    found = _one(store, name) if name is not None else list_histories(store)
    gone: list[Version] = []
    if prune is not None and found:
        gone = prune_versions(store, [one.name for one in found], prune)
        found = _one(store, name) if name is not None else list_histories(store)
    if as_json:
        from .results import SCHEMA, json_text

        told = {"schema": SCHEMA, "store": str(store), "histories": [listed_table(one) for one in found]}
        typer.echo(json_text(told if prune is None else told | {"pruned": [version_table(one) for one in gone]}))
        return
    if prune is not None:
        size = _size(sum(one.size for one in gone))
        say(f"{len(gone):,} former version{_s(len(gone) != 1)} let go ({size}).")
    if not found:
        say(f"{store} holds no history yet: rollband load NAME --prices FILE{store_option(store)} makes one.")
    elif name is not None:
        _tell_one(found[0])
    else:
        _tell_all(found, store)


def listed_table(one: Listed) -> dict[str, Any]:
    """One history of a store as plain values."""
    told, now = one.told, one.current
    table: dict[str, Any] = {"name": one.name, "problem": one.problem}
    if told is not None:
        table |= {
            "first": told.first.isoformat(), "last": told.last.isoformat(), "days": told.days,
            "usable_from": told.usable_from.isoformat(), "columns": list(told.columns),
            "files": [{"kind": kind, "file": file, "sha256": sha256} for kind, file, sha256 in told.files],
        }  # fmt: skip
    table["last_loaded"] = None if now is None else _iso(now)
    table["versions"] = [version_table(version) for version in one.versions]
    return table


def version_table(version: Version) -> dict[str, Any]:
    """One version of a history as plain values."""
    return {
        "name": version.name, "sha256": version.sha256, "loaded": _iso(version), "bytes": version.size,
        "current": version.current, "file": str(version.path),
    }  # fmt: skip


def _one(store: Path, name: str) -> tuple[Listed, ...]:
    from data_loaders.listing import list_history
    from data_loaders.store import read_history

    found = list_history(store, name)
    if not found.versions:
        read_history(store, name)  # which says which names there are
    return (found,)


def _tell_all(found: tuple[Listed, ...], store: Path) -> None:
    from rich.console import Console

    table = _table("", "from", "to", "days", "versions", "last loaded, UTC", "holds")
    for one in found:
        now, told = one.current, one.told
        span = (str(told.first), str(told.last), f"{told.days:,}") if told is not None else ("", "", "")
        loaded = _time(now) if now is not None else ""
        table.add_row(
            one.name, *span, f"{len(one.versions):,}", loaded, told.holds if told is not None else "cannot be read"
        )
    Console().print(table)
    for one in found:
        if one.problem is not None:
            say(f"{one.name}: {one.problem}")
    former = [version for one in found for version in one.versions if not version.current]
    if former:
        say(
            f"Former versions: {_size(sum(one.size for one in former))}; rollband histories NAME{store_option(store)} "
            "lists those of one."
        )


def _tell_one(one: Listed) -> None:
    """Each version with what it holds and what was different from the one before it."""
    from data_loaders.errors import StoreError
    from data_loaders.revisions import changes_between
    from data_loaders.store import read_version

    say(one.name)
    if one.told is not None:
        say(f"  holds: {one.told.holds}; every series has a value from {one.told.usable_from} on")
        for kind, file, sha256 in one.told.files:
            say(f"  {kind}: {file}, sha256 {sha256}")
    if one.problem is not None:
        say(f"  {one.problem}")
    before = None
    for version in one.versions:
        say("")
        say(f"Version {version.short}, loaded {_time(version)} UTC{', the one in use' if version.current else ''}")
        say(f"  {version.path}")
        try:
            history = read_version(version)
        except StoreError as error:
            say(f"  {error}")
            before = None
            continue
        index = history.frame.index
        say(f"  {index[0].date()} to {index[-1].date()}, {len(index):,} days")
        if before is not None:
            for line in changes_between(before, history).lines():
                say(f"  {line}")
        before = history


def _table(*heads: str) -> Any:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, show_edge=False)
    for head in heads:
        numbers = head in ("days", "versions")
        wraps = head == "holds"
        table.add_column(head, justify="right" if numbers else "left", no_wrap=not wraps, overflow="fold")
    return table


def _time(version: Version) -> str:
    return f"{version.loaded:%Y-%m-%d %H:%M}"


def _iso(version: Version) -> str:
    return f"{version.loaded:%Y-%m-%dT%H:%M:%SZ}"


def _size(number: int) -> str:
    """Bytes in words.

    >>> _size(900), _size(234_567), _size(12_345_678)
    ('900 bytes', '235 kB', '12.3 MB')
    """
    if number < 1_000:
        return f"{number} bytes"
    return f"{number / 1e3:.0f} kB" if number < 1e6 else f"{number / 1e6:.1f} MB"


def _s(plural: bool) -> str:
    return "s" if plural else ""
