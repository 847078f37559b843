"""The command ``rollband next``: options -> the coming roll, told, and its picture.

Heavy imports are inside the functions, so that ``rollband --help`` answers at once.
"""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from .options import AsJson, Store
from .overlay_options import (
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
)
from .wiring import history_of, overlay_of, with_options

if TYPE_CHECKING:
    from backtest.engine.coming_package import Package

#: Endings of a picture's file.
PICTURES = (".png", ".svg")


def next_roll(
    name: Annotated[str, typer.Argument(help="A stored history.")],
    put: Put = None,
    call: Call = None,
    roll: BothRoll = None,
    put_roll: PutRoll = None,
    call_roll: CallRoll = None,
    put_term: PutTerm = None,
    call_term: CallTerm = None,
    overlay: OverlayPath = None,
    money: Annotated[
        float | None,
        typer.Option(
            "--money",
            help="What your holding is worth, for contracts and amounts; the file's portfolio if not given.",
        ),
    ] = None,
    rate: Rate = None,
    dividend_yield: DividendYield = None,
    vol_quote: Quote = None,
    smile: Smile = None,
    half_spread_vol: HalfSpreadVol = None,
    half_spread_percent: HalfSpreadPercent = None,
    commission: Commission = None,
    multiplier: Multiplier = None,
    picture: Annotated[
        Path | None,
        typer.Option("--picture", help="Draw share and options at the first expiry: FILE.png or FILE.svg."),
    ] = None,
    store: Store = Path("histories"),
    as_json: AsJson = False,
) -> None:
    """Say what the coming roll would cost by the newest data of a history, and what the last ones paid."""
    from backtest import Market
    from backtest.arguments import number
    from backtest.engine.coming import coming_roll, for_holding

    from .errors import ResultsError
    from .results import json_text

    if picture is not None and picture.suffix.lower() not in PICTURES:
        raise typer.BadParameter(f"{picture} ends in neither of {', '.join(PICTURES)}", param_hint="--picture")
    if money is not None:
        number("--money", money, least=1.0)
    for option, value, least in (("--rate", rate, -99.0), ("--dividend-yield", dividend_yield, -49.0)):
        if value is not None:
            number(option, value, least=least, most=100.0, unit=" percent a year")
    agreed = overlay_of(
        overlay,
        {"put": put, "call": call},
        {"put": put_roll, "call": call_roll},
        {"put": put_term, "call": call_term},
        roll,
    )
    agreed = with_options(
        agreed, account=None, vol_quote=vol_quote, smile=smile, portfolio=None,
        costs={
            "half_spread_vol": half_spread_vol, "half_spread_percent": half_spread_percent, "commission": commission,
            "multiplier": multiplier,
        },
    )  # fmt: skip
    history, label = history_of(
        name, dict.fromkeys(("prices", "vol", "dividends", "rates", "signal")), vol_unit=None, last=None, store=store
    )
    market = Market.from_frame(
        history.frame,
        rate=None if rate is None else rate / 100.0,
        dividend_yield=None if dividend_yield is None else dividend_yield / 100.0,
    )
    found = coming_roll(market, agreed.overlay, volatility=agreed.volatility)
    worth = money if money is not None else agreed.overlay.portfolio
    holding = None if worth is None else for_holding(found, worth)

    from .next_roll import next_roll as told_of
    from .next_roll import picture_title, show_next

    told = told_of(found, history=label, holding=holding)
    if picture is not None:
        if found.package is None:
            raise ResultsError(f"cannot draw {picture}: by today's data nothing would be opened; leave out --picture")
        write_picture(found.package, picture, title=picture_title(told))
    if as_json:
        typer.echo(json_text(told))
        if picture is not None:
            typer.echo(f"Picture: {picture}", err=True)
        return
    from rich.console import Console

    show_next(Console(), told, picture=None if picture is None else str(picture))


def write_picture(package: Package, picture: Path, *, title: str) -> None:
    """Draw share and options into a file, whole or not at all; the same input gives the same bytes.

    Raises
    ------
    ResultsError
        If it cannot be written.
    """
    from matplotlib import rc_context

    from backtest.charts.coming import coming_figure

    from .errors import ResultsError

    kind = picture.suffix.lower().removeprefix(".")
    told = {"png": {"Software": None}, "svg": {"Date": None, "Creator": None}}[kind]
    with rc_context({"svg.hashsalt": "rollband"}):
        figure = coming_figure(package, title=title)
        try:
            picture.parent.mkdir(parents=True, exist_ok=True)
            with tempfile.TemporaryDirectory(prefix=f".{picture.name}.", dir=picture.parent) as fresh:
                made = Path(fresh) / picture.name
                figure.savefig(made, format=kind, metadata=told)
                made.replace(picture)
        except OSError as error:
            raise ResultsError(f"cannot write {picture}: {error}") from None
