"""Options of the command line that several commands share, and their choices."""

from __future__ import annotations

from datetime import datetime
from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer


class Roll(StrEnum):
    """How often a leg is replaced."""

    month = "month"
    quarter = "quarter"
    half = "half"
    year = "year"


class VolUnit(StrEnum):
    """Unit of a vol file."""

    percent = "percent"
    decimal = "decimal"


class VolQuote(StrEnum):
    """How a vol series is read."""

    atm = "atm"
    variance_swap = "variance-swap"


class Account(StrEnum):
    """Who carries premiums and settlements."""

    resize = "resize"
    cash = "cash"


Prices = Annotated[
    Path | None, typer.Option("--prices", help="Price CSV: date, close; also open, high, low, volume, dividend.")
]
Vol = Annotated[
    Path | None,
    typer.Option("--vol", help="Vol CSV: date, vol; or a column per tenor named by its days. Without: realised vol."),
]
Dividends = Annotated[
    Path | None, typer.Option("--dividends", help="Dividend CSV: date (ex-date), dividend (cash a share).")
]
Rates = Annotated[Path | None, typer.Option("--rates", help="Rate CSV: date, rate (percent a year).")]
Signal = Annotated[
    Path | None, typer.Option("--signal", help="Signal CSV: date, on (1 or 0), for gates with signal = true.")
]
Unit = Annotated[VolUnit | None, typer.Option("--vol-unit", help="Unit of the vol file, where it is not plain.")]
DateFormat = Annotated[
    list[str] | None,
    typer.Option(
        "--date-format",
        metavar="FORM",
        help="Form of the dates where a file does not settle it: DD/MM/YYYY, MM/DD/YYYY, SERIAL-1904, ...; "
        "vol=DD/MM/YYYY for one file.",
    ),
]
DecimalMark = Annotated[
    list[str] | None,
    typer.Option(
        "--decimal",
        metavar="MARK",
        help="Decimal mark where a file does not settle it: point or comma; vol=comma for one file.",
    ),
]
Columns = Annotated[
    list[str] | None,
    typer.Option(
        "--map",
        metavar="ROLE=NAME",
        help="The file's own name of a column: close=Schluss; of the vol file vol.vol=IV. Repeatable.",
    ),
]
SymbolColumn = Annotated[
    str | None,
    typer.Option(
        "--symbol-column",
        metavar="NAME",
        help="Column of symbols in a file of many: makes a history NAME-SYMBOL of each, or see --symbol.",
    ),
]
Symbol = Annotated[str | None, typer.Option("--symbol", help="The one symbol to load from a file of many.")]
Store = Annotated[Path, typer.Option("--store", help="Folder of stored histories.")]
First = Annotated[datetime | None, typer.Option("--from", formats=["%Y-%m-%d"], help="First day.")]
Last = Annotated[datetime | None, typer.Option("--to", formats=["%Y-%m-%d"], help="Last day.")]
AsJson = Annotated[
    bool, typer.Option("--json", help="Print the summary as JSON on standard output, and nothing else there.")
]
Portfolio = Annotated[
    float | None,
    typer.Option("--portfolio", help="Money at inception: options are then held in whole contracts, rounded down."),
]
Append = Annotated[
    bool,
    typer.Option(
        "--append", help="Put the new days after the stored history; on days in common the files must agree with it."
    ),
]
