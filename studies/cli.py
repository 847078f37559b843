"""The command line: parses, wires, maps error families to exit codes. No computation.

Heavy imports are inside the commands, so that ``rollband --help`` answers at once.
"""

from __future__ import annotations

import io
import shlex
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated

import typer

from .options import (
    Append,
    AsJson,
    Columns,
    DateFormat,
    DecimalMark,
    Dividends,
    First,
    Last,
    Portfolio,
    Prices,
    Rates,
    Signal,
    Store,
    Symbol,
    SymbolColumn,
    Unit,
    Vol,
)
from .overlay_options import (
    AccountKind,
    BothRoll,
    Call,
    CallRoll,
    CallTerm,
    Commission,
    DividendYield,
    HalfSpreadPercent,
    HalfSpreadVol,
    Multiplier,
    OverlayPath,
    Put,
    PutRoll,
    PutTerm,
    Quote,
    Rate,
    Smile,
    StockBps,
)
from .wiring import (
    history_and_source,
    overlay_of,
    replay_and_write,
    say,
    show_summary_of,
    tell_history,
    with_options,
)
from .wiring_histories import histories
from .wiring_next import next_roll
from .wiring_overlays import app as overlays_app

#: Exit codes: a wrong command or overlay file, bad data, a replay or folder that cannot be had.
WRONG_USE, BAD_DATA, NOT_POSSIBLE = 2, 3, 5

app = typer.Typer(
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    help="""Replay a rolling option overlay (a put bought below, a call sold above, struck again every month or
quarter) over your own price and volatility history: how much drawdown it would have taken away, what it would have
cost, and whether holding less stock does the same for less.

Start with: rollband demo

Option prices are model prices on past volatilities, not quotes; the past is not the future. Options carry risks that
are described in the risk documents of your exchange; tax and regulation are local. Ask a licensed adviser before you
trade.""",
)
app.add_typer(overlays_app, name="overlays")


@app.command()
def load(
    name: Annotated[str, typer.Argument(help="Name for the history: letters, digits, hyphen, underscore, dot.")],
    prices: Annotated[
        Path, typer.Option("--prices", help="Price CSV: date, close; also open, high, low, volume, dividend.")
    ],
    vol: Vol = None,
    dividends: Dividends = None,
    rates: Rates = None,
    signal: Signal = None,
    vol_unit: Unit = None,
    date_format: DateFormat = None,
    decimal: DecimalMark = None,
    columns: Columns = None,
    symbol_column: SymbolColumn = None,
    symbol: Symbol = None,
    first: First = None,
    last: Last = None,
    append: Append = False,
    store: Store = Path("histories"),
) -> None:
    """Check CSV files (or Parquet, packed or not) and store them as one history, or one of each symbol.

    Nothing is written if anything is wrong.
    """
    from .wiring_load import load_and_store

    load_and_store(
        name, {"prices": prices, "vol": vol, "dividends": dividends, "rates": rates, "signal": signal}, mapping=columns,
        date_format=date_format, decimal=decimal, symbol_column=symbol_column, symbol=symbol, vol_unit=vol_unit,
        first=first, last=last, append=append, store=store,
    )  # fmt: skip


@app.command()
def replay(
    name: Annotated[str | None, typer.Argument(help="A stored history; or give the file options instead.")] = None,
    put: Put = None,
    call: Call = None,
    roll: BothRoll = None,
    put_roll: PutRoll = None,
    call_roll: CallRoll = None,
    put_term: PutTerm = None,
    call_term: CallTerm = None,
    overlay: OverlayPath = None,
    prices: Prices = None,
    vol: Vol = None,
    dividends: Dividends = None,
    rates: Rates = None,
    signal: Signal = None,
    vol_unit: Unit = None,
    rate: Rate = None,
    dividend_yield: DividendYield = None,
    vol_quote: Quote = None,
    smile: Smile = None,
    account: AccountKind = None,
    half_spread_vol: HalfSpreadVol = None,
    half_spread_percent: HalfSpreadPercent = None,
    commission: Commission = None,
    multiplier: Multiplier = None,
    portfolio: Portfolio = None,
    stock_bps: StockBps = None,
    first: First = None,
    last: Last = None,
    store: Store = Path("histories"),
    out: Annotated[
        Path | None, typer.Option("--out", help="Results folder; a new one under ./results if not given.")
    ] = None,
    as_json: AsJson = False,
    pdf: Annotated[bool, typer.Option("--pdf", help="Also write the report's pictures as report.pdf.")] = False,
    resamples: Annotated[
        int, typer.Option("--resamples", help="How often the history is drawn again for the intervals.")
    ] = 2000,
    seed: Annotated[int, typer.Option("--seed", help="Of those draws; the same seed gives the same numbers.")] = 1,
) -> None:
    """Replay one overlay on one history and write a results folder."""
    agreed = overlay_of(
        overlay,
        {"put": put, "call": call},
        {"put": put_roll, "call": call_roll},
        {"put": put_term, "call": call_term},
        roll,
    )
    agreed = with_options(
        agreed, account=account, vol_quote=vol_quote, smile=smile, portfolio=portfolio,
        costs={
            "half_spread_vol": half_spread_vol, "half_spread_percent": half_spread_percent, "commission": commission,
            "multiplier": multiplier, "stock_bps": stock_bps,
        },
    )  # fmt: skip
    files = {"prices": prices, "vol": vol, "dividends": dividends, "rates": rates, "signal": signal}
    history, label, source = history_and_source(name, files, vol_unit=vol_unit, last=last, store=store)
    window = {"start": first.date().isoformat() if first else None, "end": last.date().isoformat() if last else None}
    replay_and_write(
        history, label, agreed, rate=rate, dividend_yield=dividend_yield, window=window, out=out, as_json=as_json,
        results=Path("results"), overlay_file=overlay, command=["rollband", *sys.argv[1:]], seed=seed,
        resamples=resamples, pdf=pdf, source=source,
    )  # fmt: skip


app.command("next")(next_roll)
app.command("histories")(histories)


@app.command()
def show(
    folder: Annotated[Path, typer.Argument(help="A results folder.")],
    as_json: AsJson = False,
) -> None:
    """Print the summary of a results folder again."""
    from .results import json_text, read_manifest, read_summary

    told = read_summary(folder)
    if as_json:
        typer.echo(json_text(told))
        return
    show_summary_of(told, history=(read_manifest(folder) or {}).get("history") or folder.name)


@app.command()
def study(
    file: Annotated[Path, typer.Argument(help="Study file (TOML); ready-made ones are in the folder studies.")],
    store: Store = Path("histories"),
    out: Annotated[
        Path | None,
        typer.Option("--out", help="Results folder; one named after the file under ./results if not given."),
    ] = None,
    workers: Annotated[
        int | None, typer.Option("--workers", help="Processes; as many as there are cores if not given.")
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option("--scheduler", help="Address of a Dask scheduler, whose workers are used: tcp://HOST:PORT."),
    ] = None,
    resume: Annotated[bool, typer.Option("--resume", help="Go on with a run that was stopped.")] = False,
    against: Annotated[
        Path | None, typer.Option("--against", help="Results folder of another study: say what has changed since.")
    ] = None,
) -> None:
    """Replay the many overlays of a study file, and say how far the search alone explains the best of them."""
    from .wiring_study import study_and_write

    study_and_write(
        file, store=store, out=out, workers=workers, scheduler=scheduler, resume=resume, against=against,
        command=["rollband", *sys.argv[1:]],
    )  # fmt: skip


@app.command()
def audit(
    folder: Annotated[Path, typer.Argument(help="A results folder of a replay or a study.")],
    store: Annotated[
        Path | None, typer.Option("--store", help="Folder of stored histories, if not the one of then.")
    ] = None,
    inputs: Annotated[
        Path | None, typer.Option("--inputs", help="Folder in which to look for input files that have moved.")
    ] = None,
    anyway: Annotated[bool, typer.Option("--anyway", help="Make it again even from inputs that have changed.")] = False,
    sample: Annotated[
        int | None, typer.Option("--sample", min=1, help="Of a study, make only so many rows again, drawn at random.")
    ] = None,
    seed: Annotated[
        int | None, typer.Option("--seed", min=0, help="Of the rows that are drawn; 1 if not given.")
    ] = None,
    workers: Annotated[
        int | None, typer.Option("--workers", help="Processes, for a study; as many as there are cores if not given.")
    ] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the verdict as JSON on standard output, and nothing else there.")
    ] = False,
) -> None:
    """Make a results folder again from its manifest and say whether it comes out the same.

    Exit code: 0 the same, 4 different or of other data, 5 it cannot be had.
    """
    from .wiring_audit import audit_and_tell

    audit_and_tell(
        folder, store=store, inputs=inputs, anyway=anyway, sample=sample, seed=seed, workers=workers, as_json=as_json
    )


@app.command()
def demo(folder: Annotated[Path, typer.Argument(help="Where to put it.")] = Path("demo")) -> None:
    """Make an invented market, load it, replay a quarterly 95 put with a monthly 110 call on it."""
    from data_loaders import load_history
    from data_loaders.store import write_history

    from .demo import DEMO_OVERLAY, write_demo_files
    from .overlay_files import parse_overlay

    files = write_demo_files(folder)
    history = load_history(prices=files.prices, vol=files.vol, dividends=files.dividends, rates=files.rates)
    store = folder / "histories"
    write_history(history, store, "demo")
    say(f"An invented market ({files.name}): prices, vols, dividends and rates as CSV files in {folder}")
    tell_history(history)
    overlay_file = folder / "overlay.toml"
    arguments = ["demo", "--store", str(store), "--overlay", str(overlay_file), "--out", str(folder / "results")]
    replay_and_write(
        history, "demo", parse_overlay(DEMO_OVERLAY, file=overlay_file.name), rate=None, dividend_yield=None,
        window={"start": None, "end": None}, out=folder / "results", as_json=False, results=folder,
        overlay_file=overlay_file, command=["rollband", "replay", *arguments],
        source=history_and_source("demo", {}, vol_unit=None, last=None, store=store)[2],
    )  # fmt: skip
    say("")
    say("Try next:")
    at, of = shlex.quote(str(store)), shlex.quote(str(overlay_file))
    say(f"  rollband replay demo --store {at} --put 90 --call 110 --roll month --vol-quote variance-swap")
    say(f"  rollband replay demo --store {at} --overlay {of} --smile flat")
    say(f"  rollband study {shlex.quote(str(folder / 'study.toml'))} --store {at}")
    say("  rollband load mine --prices my_prices.csv --vol my_vols.csv")


def main() -> None:
    """Run the command line; every error of ours becomes a sentence on standard error and an exit code."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")  # a file name need not be text
    with _errors_as_exit_codes():
        app()


@contextmanager
def _errors_as_exit_codes() -> Iterator[None]:
    try:
        yield
    except (SystemExit, KeyboardInterrupt, typer.Exit, typer.Abort):
        raise
    except Exception as error:
        code = _exit_code(error)
        if code is None:
            raise
        typer.echo(f"rollband: {error}", err=True)
        raise SystemExit(code) from None


def _exit_code(error: Exception) -> int | None:
    from backtest.errors import BacktestError, MarketError, OverlayError
    from data_loaders.errors import LoadError

    from .errors import OverlayFileError, StudyError, StudyFileError

    families: list[tuple[type[Exception], int]] = [
        (OverlayFileError, WRONG_USE),
        (StudyFileError, WRONG_USE),
        (OverlayError, WRONG_USE),
        (LoadError, BAD_DATA),
        (MarketError, BAD_DATA),
        (BacktestError, NOT_POSSIBLE),
        (StudyError, NOT_POSSIBLE),
    ]
    return next((code for family, code in families if isinstance(error, family)), None)
