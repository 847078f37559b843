"""The columns we know: their names and synonyms, units and rules, declared once.

Header matching, checks, messages and the documentation all read these declarations.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

#: Version of what a stored history holds; a change that an older reader would misread raises it.
SCHEMA_VERSION = 1

#: What a cell may hold, without regard to case, to say that there is no value.
MISSING_TEXTS = (
    "", ".", "-", "--", "\u2013", "\u2014", "na", "n/a", "n.a.", "#n/a", "#na", "#n/a n/a", "<na>", "nd", "null",
    "(null)", "none", "nil", "missing",
)  # fmt: skip
#: Text of numbers that are none: a problem in price and dividend files, a missing value in vol and rate files.
NAN_TEXTS = ("nan", "-nan", "+nan")
INFINITE_TEXTS = ("inf", "-inf", "+inf", "infinity", "-infinity", "+infinity")

#: Dates outside these are typing mistakes; they also keep the frame inside nanosecond timestamps.
FIRST_DATE, LAST_DATE = "1800-01-01", "2199-12-31"
#: A vol or rate is carried forward at most this many calendar days, never backward.
CARRY_DAYS = 5
#: Plausible vols, percent a year.
VOL_PERCENT_RANGE = (0.1, 500.0)
#: Plausible rates, percent a year: above the first, at most the second.
RATE_PERCENT_RANGE = (-100.0, 100.0)
#: Longest tenor a vol column may be named by, in days.
LONGEST_TENOR = 10_000

Kind = Literal["prices", "vol", "dividends", "rates", "signal"]
#: What a missing value means: a problem of this code, no value, or zero.
Missing = Literal["missing-price", "missing-dividend", "absent", "zero"]
Sign = Literal["positive", "not negative", "any"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One column we look for.

    Attributes
    ----------
    role : str
        Our name of it, and its name in the frame.
    meaning : str
        In plain words, with the unit; goes into messages.
    exact : tuple of str
        Names that settle the matter when several columns would do; the first is the one we recommend.
    synonyms : tuple of str
        Names taken if there is no exact one. More than one of them in a file is a problem.
    fallbacks : tuple of str
        General names (``close``, ``value``) taken if there is neither of the above.
    """

    role: str
    meaning: str
    exact: tuple[str, ...]
    synonyms: tuple[str, ...] = ()
    fallbacks: tuple[str, ...] = ()
    required: bool = False
    missing: Missing = "absent"
    sign: Sign = "any"


@dataclass(frozen=True, slots=True, kw_only=True)
class FileSchema:
    """What one kind of file holds.

    ``sole_column`` allows a file of two columns to bring its value under any name; ``tenors`` allows columns
    named by days; ``nan_is_missing`` reads the text ``nan`` as no value.
    """

    kind: Kind
    date: Column
    value_columns: tuple[Column, ...]
    sole_column: bool = False
    tenors: bool = False
    nan_is_missing: bool = False


_DATE_NAMES = (
    "day", "dates", "trading day", "trading date", "trade date", "time", "timestamp", "datetime", "date time", "as of",
    "as of date", "observation date", "quote date",
)  # fmt: skip
_DATE = Column(role="date", meaning="the trading day", exact=("date",), synonyms=_DATE_NAMES, required=True)
#: Names of a column that tells series apart which stand one below the other.
SYMBOL_NAMES = (
    "symbol", "symbols", "ticker", "tickers", "ric", "isin", "cusip", "sedol", "permno", "instrument", "security",
    "act symbol", "stock symbol",
)  # fmt: skip
#: What programs call a column of row labels that has no name; taken for the dates where nothing else is.
_UNNAMED = ("", "unnamed: 0", "index level 0", "index")
_CLOSE_NAMES = (
    "closing price", "close price", "closing", "px last", "last", "last price", "price", "settle", "settlement",
    "settlement price", "close last", "value", "level", "index level", "index value",
)  # fmt: skip
_VOL_NAMES = ("volatility", "implied vol", "implied volatility", "iv", "ivol", "atm vol", "vol index", "sigma")
_RATE_NAMES = ("rates", "yield", "interest rate", "risk free", "risk free rate", "rf", "rate percent", "rate pct")
_DIVIDEND_NAMES = (
    "dividends", "div", "cash dividend", "cash dividends", "dividend amount", "ex dividend", "dividend per share",
)  # fmt: skip


def _price(role: str, meaning: str) -> Column:
    return Column(role=role, meaning=meaning, exact=(role,), synonyms=(f"{role} price", f"px {role}"), sign="positive")


FILES: dict[Kind, FileSchema] = {
    "prices": FileSchema(
        kind="prices",
        date=_DATE,
        value_columns=(
            Column(
                role="close", meaning="the closing price", exact=("close",), synonyms=_CLOSE_NAMES, required=True,
                missing="missing-price", sign="positive",
            ),
            _price("open", "the opening price"),
            _price("high", "the highest price of the day"),
            _price("low", "the lowest price of the day"),
            Column(
                role="volume", meaning="the traded volume", exact=("volume",), synonyms=("px volume", "shares traded"),
                sign="not negative",
            ),
            Column(
                role="dividend", meaning="cash per share on its ex-date", exact=("dividend",), synonyms=_DIVIDEND_NAMES,
                missing="zero", sign="not negative",
            ),
        ),
    ),
    "vol": FileSchema(
        kind="vol",
        date=_DATE,
        value_columns=(
            Column(
                role="vol", meaning="implied volatility a year", exact=("vol",),
                synonyms=_VOL_NAMES,
                fallbacks=("close", *_CLOSE_NAMES), required=True, sign="positive",
            ),
        ),
        sole_column=True, tenors=True, nan_is_missing=True,
    ),
    "dividends": FileSchema(
        kind="dividends",
        # 'date' beside 'ex_date' may be the day of payment, so neither settles the matter
        date=Column(
            role="date", meaning="the ex-date", exact=("date", "ex date"),
            synonyms=("exdate", "ex dividend date", "ex div date", "ex day", *_DATE_NAMES), required=True,
        ),
        value_columns=(
            Column(
                role="dividend", meaning="cash per share", exact=("dividend",),
                synonyms=(*_DIVIDEND_NAMES, "amount", "cash", "cash amount"), fallbacks=("value",), required=True,
                missing="missing-dividend", sign="not negative",
            ),
        ),
    ),
    "rates": FileSchema(
        kind="rates",
        date=_DATE,
        value_columns=(
            Column(
                role="rate", meaning="annual effective rate, percent a year", exact=("rate",),
                synonyms=_RATE_NAMES,
                fallbacks=("close", *_CLOSE_NAMES), required=True,
            ),
        ),
        sole_column=True, nan_is_missing=True,
    ),
    "signal": FileSchema(
        kind="signal",
        date=_DATE,
        value_columns=(
            Column(
                role="signal", meaning="1 while the signal is on, 0 while it is off", exact=("on", "signal"),
                synonyms=("active", "state", "flag"), fallbacks=("value",), required=True,
            ),
        ),
        sole_column=True, nan_is_missing=True,
    ),
}  # fmt: skip

_TENOR = re.compile(r"(?:(?:vol|iv|implied vol|implied volatility|atm vol) ?)?(\d{1,5}) ?(?:d|day|days)?")


@dataclass(frozen=True, slots=True, kw_only=True)
class HeaderProblem:
    """A role the header does not settle: none of its columns fits, or several do."""

    column: Column
    candidates: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Matched:
    """Which column of a header was taken for what, by position.

    ``taken`` maps role -> position; for tenors the role is ``vol_<days>``. ``guessed`` names the role that a file
    of two columns brought under a name we do not know; ``unnamed_date`` says that the dates stand in a column without
    a name. ``unknown`` are pairs of a role and the name that the user
    gave for it, which no column has, or more than one.
    """

    taken: dict[str, int]
    ignored: tuple[int, ...]
    problems: tuple[HeaderProblem, ...]
    guessed: str | None = None
    unnamed_date: bool = False
    unknown: tuple[tuple[str, str], ...] = ()


def normal_name(name: str) -> str:
    """A column name without regard to case, spaces, underscores, dashes, dots and slashes.

    >>> normal_name(" PX_Last "), normal_name("Adj. Close")
    ('px last', 'adj close')
    """
    return re.sub(r"[\s_\-./]+", " ", name).strip().casefold()


def tenor_days(name: str) -> int | None:
    """Days of a vol column named by its tenor, or None.

    >>> tenor_days("30"), tenor_days("vol_93"), tenor_days("180d"), tenor_days("close")
    (30, 93, 180, None)
    """
    found = _TENOR.fullmatch(normal_name(name))
    days = int(found[1]) if found else 0
    return days if 0 < days <= LONGEST_TENOR else None


def is_adjusted(name: str) -> bool:
    """Whether a column says that it is adjusted for splits and dividends: not a price that was traded.

    >>> is_adjusted("Adj Close"), is_adjusted("close_adjusted"), is_adjusted("Close")
    (True, True, False)
    """
    words = normal_name(name).split()
    return any(word.startswith("adj") for word in words)


def position_of(header: Sequence[str], name: str) -> int | None:
    """Where a column stands that a user has named; as spelt, or else without regard to case and marks."""
    same = [i for i, one in enumerate(header) if one.strip() == name.strip()]
    alike = same or [i for i, one in enumerate(header) if normal_name(one) == normal_name(name)]
    return alike[0] if len(alike) == 1 else None


def match_header(schema: FileSchema, header: Sequence[str], named: Sequence[tuple[str, str]] = ()) -> Matched:
    """Match the names of a header with the columns of a schema.

    What the user has `named` (role and name) goes before everything. An exact name goes before synonyms and those
    before fallbacks; two columns of the same standing are a problem.
    Adjusted closes match nothing: prices are the traded ones, dividends come separately.
    """
    names = [normal_name(name) for name in header]
    found_by_user = {role: position_of(header, name) for role, name in named}
    unknown = tuple((role, name) for role, name in named if found_by_user[role] is None)
    taken = {role: at for role, at in found_by_user.items() if at is not None}
    problems: list[HeaderProblem] = []
    settled = {*found_by_user, *(["vol"] if any(tenor_days(role) for role in found_by_user) else [])}
    tenors = _tenor_columns(header, problems, schema) if schema.tenors and "vol" not in settled else {}
    guessed, unnamed_date = None, False
    for column in (schema.date, *schema.value_columns):
        if column.role in settled:
            continue
        if column.role == "vol" and tenors:
            # general names beside tenor columns are something else; a column called vol is not
            hits = [i for i, name in enumerate(names) if name in column.exact]
            if hits:
                both = (header[hits[0]], *(header[i] for i in tenors.values()))
                problems.append(HeaderProblem(column=column, candidates=both))
            taken |= tenors
            continue
        hits = next(
            (
                found
                for tier in (column.exact, column.synonyms, column.fallbacks)
                if (found := [i for i, name in enumerate(names) if name in tier and i not in taken.values()])
            ),
            [],
        )
        if not hits and column is schema.date:
            hits = [i for i, name in enumerate(names) if name in _UNNAMED and i not in taken.values()][:1]
            unnamed_date = bool(hits)
        if not hits and schema.sole_column and column.required and column is not schema.date and len(header) == 2:
            hits = [i for i in range(2) if i not in taken.values()] if "date" in taken else []
            guessed = column.role if hits else None
        if len(hits) == 1:
            taken[column.role] = hits[0]
        elif hits:
            problems.append(HeaderProblem(column=column, candidates=tuple(header[i] for i in hits)))
        elif column.required:
            problems.append(HeaderProblem(column=column, candidates=()))
    order = [column.role for column in (schema.date, *schema.value_columns)]
    by_role = sorted(taken, key=lambda role: (0, order.index(role)) if role in order else (1, tenor_days(role) or 0))
    return Matched(
        taken={role: taken[role] for role in by_role},
        ignored=tuple(i for i in range(len(header)) if i not in taken.values()),
        problems=tuple(problems),
        guessed=guessed,
        unnamed_date=unnamed_date,
        unknown=unknown,
    )


def _tenor_columns(header: Sequence[str], problems: list[HeaderProblem], schema: FileSchema) -> dict[str, int]:
    """``vol_<days>`` -> position, shortest tenor first; two columns of one tenor are a problem."""
    found: dict[int, list[int]] = {}
    for i, name in enumerate(header):
        if (days := tenor_days(name)) is not None:
            found.setdefault(days, []).append(i)
    for columns in found.values():
        if len(columns) > 1:
            problems.append(HeaderProblem(column=schema.value_columns[0], candidates=tuple(header[i] for i in columns)))
    return {f"vol_{days}": found[days][0] for days in sorted(found)}
