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
Unit = Annotated[VolUnit | None, typer.Option("--vol-unit", help="Unit of the vol file, where it is not plain.")]
Store = Annotated[Path, typer.Option("--store", help="Folder of stored histories.")]
First = Annotated[datetime | None, typer.Option("--from", formats=["%Y-%m-%d"], help="First day.")]
Last = Annotated[datetime | None, typer.Option("--to", formats=["%Y-%m-%d"], help="Last day.")]
AsJson = Annotated[
    bool, typer.Option("--json", help="Print the summary as JSON on standard output, and nothing else there.")
]
Append = Annotated[
    bool,
    typer.Option(
        "--append", help="Put the new days after the stored history; on days in common the files must agree with it."
    ),
]
