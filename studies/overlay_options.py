"""Options by which an overlay is said on the command line, the same for every command that takes one."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from .options import Account, Roll, VolQuote

Put = Annotated[float | None, typer.Option("--put", help="Buy a put at this percent of spot.")]
Call = Annotated[float | None, typer.Option("--call", help="Sell a call at this percent of spot.")]
BothRoll = Annotated[Roll | None, typer.Option("--roll", help="How often both are replaced; a quarter if not given.")]
PutRoll = Annotated[Roll | None, typer.Option("--put-roll", help="How often the put is replaced.")]
CallRoll = Annotated[Roll | None, typer.Option("--call-roll", help="How often the call is replaced.")]
PutTerm = Annotated[
    int | None, typer.Option("--put-term", help="Months to expiry of a new put; its roll if not given.")
]
CallTerm = Annotated[
    int | None, typer.Option("--call-term", help="Months to expiry of a new call; its roll if not given.")
]
OverlayPath = Annotated[
    Path | None,
    typer.Option("--overlay", help="Overlay file (TOML) instead of --put and --call; ready-made: rollband overlays."),
]
Rate = Annotated[float | None, typer.Option("--rate", help="Constant rate, percent a year.")]
DividendYield = Annotated[
    float | None, typer.Option("--dividend-yield", help="Constant dividend yield, percent a year.")
]
Quote = Annotated[
    VolQuote | None,
    typer.Option("--vol-quote", help="Read the vol series at the money, or as a variance-swap index."),
]
Smile = Annotated[str | None, typer.Option("--smile", help="flat, mild, index, steep, or RHO,ETA,GAMMA.")]
AccountKind = Annotated[
    Account | None,
    typer.Option("--account", help="resize: whole packages at every roll; cash: fixed shares and a cash account."),
]
HalfSpreadVol = Annotated[
    float | None, typer.Option("--half-spread-vol", help="Half-spread in vol points (default 0.5).")
]
HalfSpreadPercent = Annotated[
    float | None, typer.Option("--half-spread-percent", help="Half-spread in percent of the option's mid.")
]
Commission = Annotated[float | None, typer.Option("--commission", help="Money a contract.")]
Multiplier = Annotated[float | None, typer.Option("--multiplier", help="Shares a contract (default 100).")]
StockBps = Annotated[
    float | None,
    typer.Option("--stock-bps", help="Cost of stock traded when packages are resized, in basis points."),
]
