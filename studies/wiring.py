"""What the commands share: options -> overlay and history, a replay written and told, signs of life.

Heavy imports are inside the functions, so that ``rollband --help`` answers at once.
"""

from __future__ import annotations

import shlex
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import typer

from .options import Account, Roll, VolQuote, VolUnit

if TYPE_CHECKING:
    from backtest import Costs, Overlay, Volatility
    from data_loaders import History

    from .overlay_files import OverlayFile


def overlay_of(
    file: Path | None, percent: dict[str, float | None], rolls: dict[str, Roll | None], terms: dict[str, int | None],
    roll: Roll | None,
) -> OverlayFile:  # fmt: skip
    """The overlay of a file, or of the shorthand options; an option that would do nothing is refused."""
    from .overlay_files import read_overlay_file, shorthand_overlay

    options: dict[str, tuple[str, object]] = {f"--{right}-roll": (right, value) for right, value in rolls.items()}
    options |= {f"--{right}-term": (right, value) for right, value in terms.items()}
    if file is not None:
        given = [f"--{right}" for right, value in percent.items() if value is not None]
        given += [option for option, (_, value) in options.items() if value is not None]
        given += ["--roll"] if roll is not None else []
        if given:
            raise typer.BadParameter(
                f"give --overlay or --put and --call, not both: leave out {', '.join(given)}", param_hint="--overlay"
            )
        return read_overlay_file(file)
    if all(value is None for value in percent.values()):
        raise typer.BadParameter(
            "say what to replay: --put 95, --call 110, both, or --overlay FILE", param_hint="--put"
        )
    for option, (right, value) in options.items():
        if value is not None and percent[right] is None:
            raise typer.BadParameter(f"there is no --{right} for it", param_hint=option)
    usual = roll or Roll.quarter
    return shorthand_overlay(
        put=percent["put"], call=percent["call"], put_roll=(rolls["put"] or usual).value,
        call_roll=(rolls["call"] or usual).value, put_term=terms["put"], call_term=terms["call"],
    )  # fmt: skip


def with_options(
    agreed: OverlayFile,
    *,
    account: Account | None,
    vol_quote: VolQuote | None,
    smile: str | None,
    portfolio: float | None,
    costs: dict[str, float | None],
) -> OverlayFile:
    """Options given on the command line replace what the overlay file says."""
    from dataclasses import replace

    from .overlay_files import smile_from_option

    made_costs: Costs = replace(
        agreed.overlay.costs, **{key: value for key, value in costs.items() if value is not None}
    )
    overlay: Overlay = replace(agreed.overlay, costs=made_costs)
    volatility: Volatility = agreed.volatility
    if account is not None:
        overlay = replace(overlay, account=account.value)
    if portfolio is not None:
        overlay = replace(overlay, portfolio=portfolio)
    if vol_quote is not None:
        volatility = replace(volatility, quote="at the money" if vol_quote is VolQuote.atm else "variance swap")
    if smile is not None:
        volatility = replace(volatility, smile=smile_from_option(smile))
    return replace(agreed, overlay=overlay, volatility=volatility)


def history_of(
    name: str | None, files: dict[str, Path | None], *, vol_unit: VolUnit | None, last: datetime | None, store: Path
) -> tuple[History, str]:
    """A stored history, or one from the files given; and its name."""
    history, label, _ = history_and_source(name, files, vol_unit=vol_unit, last=last, store=store)
    return history, label


def history_and_source(
    name: str | None, files: dict[str, Path | None], *, vol_unit: VolUnit | None, last: datetime | None, store: Path
) -> tuple[History, str, dict[str, Any]]:
    """A stored history, or one from the files given; its name; and for the manifest where it was had from.

    Paths are as they were typed. Of a stored history the sha256 is that of the very bytes that were read: its version,
    whatever is loaded meanwhile.
    """
    from data_loaders import load_history
    from data_loaders.store import read_stored

    given = [f"--{kind}" for kind, path in files.items() if path is not None]
    if files.get("vol") is None and vol_unit is not None:
        raise typer.BadParameter("there is no --vol file for it", param_hint="--vol-unit")
    if name is not None:
        if given:
            raise typer.BadParameter(
                f"{name} is a stored history; leave out {', '.join(given)}, or the name", param_hint="NAME"
            )
        history, sha256 = read_stored(store, name)
        return history, name, {"history": name, "store": str(store), "sha256": sha256}
    prices = files.get("prices")
    if prices is None:
        raise typer.BadParameter("say which history: a stored NAME, or --prices FILE", param_hint="NAME")
    history = load_history(
        prices=prices, vol=files.get("vol"), dividends=files.get("dividends"), rates=files.get("rates"),
        signal=files.get("signal"),
        vol_unit=vol_unit.value if vol_unit else None, needed_to=last.date() if last else None,
    )  # fmt: skip
    typed = {kind: str(path) for kind, path in files.items() if path is not None}
    return history, prices.stem, {"files": typed, "vol_unit": vol_unit.value if vol_unit else None}


def replay_and_write(
    history: History, label: str, agreed: OverlayFile, *, rate: float | None, dividend_yield: float | None,
    window: dict[str, str | None], out: Path | None, as_json: bool, results: Path, overlay_file: Path | None,
    command: list[str], **report: Any,
) -> None:  # fmt: skip
    """Replay, write the results folder, and tell what is in it."""
    from .answer_folder import make_answer_folder, whole_summary
    from .page import DataHealth
    from .results import json_text, sha256_of

    inputs = [
        {"kind": source.kind, "file": source.file, "sha256": source.sha256, "unit": source.unit}
        for source in history.sources
    ]
    if overlay_file is not None:
        inputs.append({"kind": "overlay", "file": overlay_file.name, "sha256": sha256_of(overlay_file)})
    with working("replaying") as progress:
        made, folder = make_answer_folder(
            history.frame, agreed, label=label, inputs=inputs, notes=history.notes, rate=rate,
            dividend_yield=dividend_yield, start=window["start"], end=window["end"], out=out, results=results,
            command=shlex.join(command), data_health=DataHealth.of(history), progress=progress, **report,
        )  # fmt: skip
    told = whole_summary(made)
    if as_json:
        typer.echo(json_text(told))
        typer.echo(f"Results: {folder}", err=True)
        return
    show_summary_of(told, history=label)
    say("")
    say(f"Read {folder / 'report.html'}")
    say(
        f"Beside it in {folder}: summary.json (all figures), tables (CSV), daily.parquet, rolls.parquet, growth.png, "
        "drawdown.png, band.png, manifest.json"
    )


def show_summary_of(told: dict[str, Any], *, history: str) -> None:
    """Print a summary as tables."""
    from rich.console import Console

    from .terminal import show_summary

    show_summary(Console(), told, history=history)


@contextmanager
def working(what: str) -> Iterator[Callable[[str], None]]:
    """A sign of life on standard error while something takes its time, where a person looks on; told each step."""
    if not sys.stderr.isatty():
        yield lambda step: None
        return
    from rich.console import Console

    with Console(stderr=True).status(f"{what} ...") as status:
        yield lambda step: status.update(f"{step} ...")


def tell_history(history: Any) -> None:
    """What was taken for what, what was read, what was changed in it, and what is worth knowing."""
    tell_taken(history)
    for source in history.sources:
        say(f"  {source.kind}: {source.rows} rows, {source.first} to {source.last}, from {source.file}")
    for repair in history.repairs:
        say(f"  changed: {repair.what}")
    tell_notes(history)


def tell_taken(history: Any) -> None:
    """How each file was read, as a short table."""
    width = max((len(source.file) for source in history.sources if source.taken), default=0)
    for source in history.sources:
        for i, (word, description) in enumerate(source.taken):
            say(f"  {source.file if i == 0 else '':{width}}  {word:8}  {description}")


def tell_notes(history: Any) -> None:
    """What is worth knowing and not in that table."""
    from data_loaders.preparing import is_told

    for note in history.notes:
        if not is_told(note):
            say(f"  note: {note}")


def store_option(store: Path) -> str:
    """The option that names this store, nothing for the usual one."""
    return "" if store == Path("histories") else f" --store {shlex.quote(str(store))}"


def say(text: str) -> None:
    """Print a line on standard output."""
    typer.echo(text)
