"""The command line: parses, wires, maps error families to exit codes. No computation.

Heavy imports are inside the commands, so that ``rollband --help`` answers at once.
"""

from __future__ import annotations

import shlex
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from .options import Account, AsJson, Dividends, First, Last, Prices, Rates, Roll, Store, Unit, Vol, VolQuote, VolUnit

if TYPE_CHECKING:
    from backtest import Costs, Overlay, Volatility
    from data_loaders import History

    from .overlay_files import OverlayFile

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


@app.command()
def load(
    name: Annotated[str, typer.Argument(help="Name for the history: letters, digits, hyphen, underscore, dot.")],
    prices: Annotated[
        Path, typer.Option("--prices", help="Price CSV: date, close; also open, high, low, volume, dividend.")
    ],
    vol: Vol = None,
    dividends: Dividends = None,
    rates: Rates = None,
    vol_unit: Unit = None,
    first: First = None,
    last: Last = None,
    store: Store = Path("histories"),
) -> None:
    """Check CSV files and store them as one history. Nothing is written if anything is wrong."""
    from data_loaders import load_history
    from data_loaders.store import check_name, write_history

    check_name(name)
    history = load_history(
        prices=prices, vol=vol, dividends=dividends, rates=rates,
        vol_unit=vol_unit.value if vol_unit else None,
        first_day=first.date() if first else None,
        last_day=last.date() if last else None,
    )  # fmt: skip
    path = write_history(history, store, name)
    _tell_history(history)
    _say(f"Stored as {path}")
    _say(f"Next: rollband replay {shlex.quote(name)} --put 95 --call 110" + _store_option(store))


@app.command()
def replay(
    name: Annotated[str | None, typer.Argument(help="A stored history; or give the file options instead.")] = None,
    put: Annotated[float | None, typer.Option("--put", help="Buy a put at this percent of spot.")] = None,
    call: Annotated[float | None, typer.Option("--call", help="Sell a call at this percent of spot.")] = None,
    roll: Annotated[
        Roll | None, typer.Option("--roll", help="How often both are replaced; a quarter if not given.")
    ] = None,
    put_roll: Annotated[Roll | None, typer.Option("--put-roll", help="How often the put is replaced.")] = None,
    call_roll: Annotated[Roll | None, typer.Option("--call-roll", help="How often the call is replaced.")] = None,
    put_term: Annotated[
        int | None, typer.Option("--put-term", help="Months to expiry of a new put; its roll if not given.")
    ] = None,
    call_term: Annotated[
        int | None, typer.Option("--call-term", help="Months to expiry of a new call; its roll if not given.")
    ] = None,
    overlay: Annotated[
        Path | None, typer.Option("--overlay", help="Overlay file (TOML) instead of --put and --call.")
    ] = None,
    prices: Prices = None,
    vol: Vol = None,
    dividends: Dividends = None,
    rates: Rates = None,
    vol_unit: Unit = None,
    rate: Annotated[float | None, typer.Option("--rate", help="Constant rate, percent a year.")] = None,
    dividend_yield: Annotated[
        float | None, typer.Option("--dividend-yield", help="Constant dividend yield, percent a year.")
    ] = None,
    vol_quote: Annotated[
        VolQuote | None,
        typer.Option("--vol-quote", help="Read the vol series at the money, or as a variance-swap index."),
    ] = None,
    smile: Annotated[str | None, typer.Option("--smile", help="flat, mild, index, steep, or RHO,ETA,GAMMA.")] = None,
    account: Annotated[
        Account | None,
        typer.Option("--account", help="resize: whole packages at every roll; cash: fixed shares and a cash account."),
    ] = None,
    half_spread_vol: Annotated[
        float | None, typer.Option("--half-spread-vol", help="Half-spread in vol points (default 0.5).")
    ] = None,
    half_spread_percent: Annotated[
        float | None, typer.Option("--half-spread-percent", help="Half-spread in percent of the option's mid.")
    ] = None,
    commission: Annotated[float | None, typer.Option("--commission", help="Money a contract.")] = None,
    multiplier: Annotated[float | None, typer.Option("--multiplier", help="Shares a contract (default 100).")] = None,
    stock_bps: Annotated[
        float | None,
        typer.Option("--stock-bps", help="Cost of stock traded when packages are resized, in basis points."),
    ] = None,
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
    agreed = _overlay(
        overlay,
        {"put": put, "call": call},
        {"put": put_roll, "call": call_roll},
        {"put": put_term, "call": call_term},
        roll,
    )
    agreed = _with_options(
        agreed, account=account, vol_quote=vol_quote, smile=smile,
        costs={
            "half_spread_vol": half_spread_vol, "half_spread_percent": half_spread_percent, "commission": commission,
            "multiplier": multiplier, "stock_bps": stock_bps,
        },
    )  # fmt: skip
    files = {"prices": prices, "vol": vol, "dividends": dividends, "rates": rates}
    history, label = _history(name, files, vol_unit=vol_unit, last=last, store=store)
    window = {"start": first.date().isoformat() if first else None, "end": last.date().isoformat() if last else None}
    _replay_and_write(
        history, label, agreed, rate=rate, dividend_yield=dividend_yield, window=window, out=out, as_json=as_json,
        results=Path("results"), overlay_file=overlay, command=["rollband", *sys.argv[1:]], seed=seed,
        resamples=resamples, pdf=pdf,
    )  # fmt: skip


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
    _show(told, history=(read_manifest(folder) or {}).get("history") or folder.name)


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
    _say(f"An invented market ({files.name}): prices, vols, dividends and rates as CSV files in {folder}")
    _tell_history(history)
    overlay_file = folder / "overlay.toml"
    arguments = ["demo", "--store", str(store), "--overlay", str(overlay_file), "--out", str(folder / "results")]
    _replay_and_write(
        history, "demo", parse_overlay(DEMO_OVERLAY, file=overlay_file.name), rate=None, dividend_yield=None,
        window={"start": None, "end": None}, out=folder / "results", as_json=False, results=folder,
        overlay_file=overlay_file, command=["rollband", "replay", *arguments],
    )  # fmt: skip
    _say("")
    _say("Try next:")
    at, of = shlex.quote(str(store)), shlex.quote(str(overlay_file))
    _say(f"  rollband replay demo --store {at} --put 90 --call 110 --roll month --vol-quote variance-swap")
    _say(f"  rollband replay demo --store {at} --overlay {of} --smile flat")
    _say("  rollband load mine --prices my_prices.csv --vol my_vols.csv")


def main() -> None:
    """Run the command line; every error of ours becomes a sentence on standard error and an exit code."""
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

    from .errors import OverlayFileError, StudyError

    families: list[tuple[type[Exception], int]] = [
        (OverlayFileError, WRONG_USE),
        (OverlayError, WRONG_USE),
        (LoadError, BAD_DATA),
        (MarketError, BAD_DATA),
        (BacktestError, NOT_POSSIBLE),
        (StudyError, NOT_POSSIBLE),
    ]
    return next((code for family, code in families if isinstance(error, family)), None)


def _overlay(
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


def _with_options(
    agreed: OverlayFile,
    *,
    account: Account | None,
    vol_quote: VolQuote | None,
    smile: str | None,
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
    if vol_quote is not None:
        volatility = replace(volatility, quote="at the money" if vol_quote is VolQuote.atm else "variance swap")
    if smile is not None:
        volatility = replace(volatility, smile=smile_from_option(smile))
    return replace(agreed, overlay=overlay, volatility=volatility)


def _history(
    name: str | None, files: dict[str, Path | None], *, vol_unit: VolUnit | None, last: datetime | None, store: Path
) -> tuple[History, str]:
    from data_loaders import load_history
    from data_loaders.store import read_history

    given = [f"--{kind}" for kind, path in files.items() if path is not None]
    if files["vol"] is None and vol_unit is not None:
        raise typer.BadParameter("there is no --vol file for it", param_hint="--vol-unit")
    if name is not None:
        if given:
            raise typer.BadParameter(
                f"{name} is a stored history; leave out {', '.join(given)}, or the name", param_hint="NAME"
            )
        return read_history(store, name), name
    prices = files["prices"]
    if prices is None:
        raise typer.BadParameter("say which history: a stored NAME, or --prices FILE", param_hint="NAME")
    history = load_history(
        prices=prices, vol=files["vol"], dividends=files["dividends"], rates=files["rates"],
        vol_unit=vol_unit.value if vol_unit else None, needed_to=last.date() if last else None,
    )  # fmt: skip
    return history, prices.stem


def _replay_and_write(
    history: History, label: str, agreed: OverlayFile, *, rate: float | None, dividend_yield: float | None,
    window: dict[str, str | None], out: Path | None, as_json: bool, results: Path, overlay_file: Path | None,
    command: list[str], **report: Any,
) -> None:  # fmt: skip
    from .answer_folder import make_answer_folder, whole_summary
    from .page import DataHealth
    from .results import json_text, sha256_of

    inputs = [
        {"kind": source.kind, "file": source.file, "sha256": source.sha256, "unit": source.unit}
        for source in history.sources
    ]
    if overlay_file is not None:
        inputs.append({"kind": "overlay", "file": overlay_file.name, "sha256": sha256_of(overlay_file)})
    with _working("replaying") as progress:
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
    _show(told, history=label)
    _say("")
    _say(f"Read {folder / 'report.html'}")
    _say(
        f"Beside it in {folder}: summary.json (all figures), tables (CSV), daily.parquet, rolls.parquet, growth.png, "
        "drawdown.png, band.png, manifest.json"
    )


def _show(told: dict[str, Any], *, history: str) -> None:
    from rich.console import Console

    from .terminal import show_summary

    show_summary(Console(), told, history=history)


@contextmanager
def _working(what: str) -> Iterator[Callable[[str], None]]:
    """A sign of life on standard error while something takes its time, where a person looks on; told each step."""
    if not sys.stderr.isatty():
        yield lambda step: None
        return
    from rich.console import Console

    with Console(stderr=True).status(f"{what} ...") as status:
        yield lambda step: status.update(f"{step} ...")


def _tell_history(history: Any) -> None:
    for source in history.sources:
        _say(f"  {source.kind}: {source.rows} rows, {source.first} to {source.last}, from {source.file}")
    for repair in history.repairs:
        _say(f"  changed: {repair.what}")
    for note in history.notes:
        _say(f"  note: {note}")


def _store_option(store: Path) -> str:
    return "" if store == Path("histories") else f" --store {shlex.quote(str(store))}"


def _say(text: str) -> None:
    typer.echo(text)
