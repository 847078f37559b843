"""What can be wrong with a file or a stored history, in one place.

    LoadError
    ├── DataProblems   the files cannot be used; carries every problem found, from all files
    └── StoreError     a stored history is unknown, unreadable or wrongly named, or another load is writing
        └── AppendRefused  new days do not go after a stored history; carries every difference found

:data:`REASONS` is the whole catalogue of problems: a short code and the sentence that goes with it.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

from .schema import FILES, Kind

#: What the places of a file are counted in: rows where it has no lines.
Place = Literal["line", "row"]

#: Problems of one code that are written out by ``str(DataProblems)``; the rest are counted.
SHOWN_PER_CODE = 20
#: Problems of one code, file and column that are kept as objects; the rest are counted.
KEPT_PER_CODE = 1000
#: Longest piece of a file's own text that a message repeats.
LONGEST_QUOTE = 60

#: Every problem there is: code -> sentence saying what is wrong, the rule, and what to do.
REASONS: Mapping[str, str] = {
    # the file
    "missing-file": "there is no such file. Check the path; it was read as {path}.",
    "not-a-file": "this is {what}, not a regular file. Give the path of one CSV file.",
    "unreadable-file": "the file could not be read ({reason}). Check its permissions and the disk.",
    "file-too-large": "the file holds {size}{packed}; at most {limit} can be read. "
    "Split it, by years or by symbols, and load the parts.",
    "grows-too-much": "the file has {size} and unpacks to more than {unpacked}, over {limit} times as much, as no "
    "table does; the rest was not unpacked. If you trust it, unpack it yourself.",
    "many-members": "the archive holds {count} files{names}. Give an archive of one file, or the file itself.",
    "damaged-file": "this is {what} and cannot be read ({reason}). Get the file again.",
    "binary-file": "this is {what}, not CSV text. Save it as plain CSV, UTF-8.",
    "not-utf-8": "byte {byte} is not UTF-8 text. Save the file as CSV with UTF-8 encoding.",
    "damaged-text": "the text is {encoding} by its first bytes, but breaks off here. Save the file as CSV with UTF-8 "
    "encoding.",
    "empty-file": "the file is empty. It needs a header line and at least one row.",
    "no-rows": "the file has a header but no row with data. It needs at least one row.",
    "line-too-long": "the line is longer than {limit:,} bytes, so this is no table. "
    "Save it as plain CSV: a header line, then one row a line.",
    "unclosed-quote": 'there is a double quote (") that is never closed, so rows run into each other. '
    "Close it, or remove it.",
    "rows-in-quotes": "whole rows stand inside a pair of double quotes, {value}, and would be lost. "
    "Remove the quote that is too many, here or some lines further down.",
    "ragged-row": "the row has {came} and the header has {expected}. "
    "Give every row as many fields as the header; a decimal comma or a thousands separator splits a number in two.",
    "unreadable-csv": "the file could not be split into rows and columns ({reason}). "
    "Save it as plain CSV: a header line, then one row a line, separated by commas.",
    # the header
    "no-header": "the first row, {value}, is data. Put a line with the names of the columns above it, "
    "such as date and close.",
    "rows-above-header": "{value} looks like a row of data but stands above the header on line {header_line}. "
    "Put the header first, or remove the row.",
    "no-separator": "the header is one single column, {header}. Columns have to be separated by commas, semicolons, "
    "tabs or vertical bars.",
    "missing-column": "no column for '{role}' ({meaning}). The header has {header}. Name it {names}.{hint} "
    "Or say which it is: rollband load ... --map {option}=NAME.",
    "ambiguous-column": "columns {columns} could each be '{role}' ({meaning}). "
    "Keep one of them, or name the right one '{exact}', or say rollband load ... --map {option}=NAME.",
    "unknown-column": "there is no column {name!r}, or more than one, for --map {option}. The header has {header}.",
    "column-type": "the column holds {type}, not {wanted}. Save it as {wanted} or as text.",
    # files of many symbols
    "many-symbols": "the column holds {count} ({symbols}). Say rollband load ... --symbol {first} for one of them, or "
    "--symbol-column {named} to make a history of each.",
    "no-symbol-column": "there is no {named}. The header has {header}. Say which it is: --symbol-column NAME.",
    "unknown-symbol": "no row has symbol {symbol!r}. The column holds {count}: {symbols}.{meant} "
    "Write it as it stands there.",
    "missing-symbol": "the row has no symbol, as {count:,} in all. Put it in, or remove the row.",
    # single values
    "bad-date": "{value} is not a date of the form {form} (for example {example}). "
    "Write every date that way, or remove the row.",
    "date-form-unclear": "the dates of the column fit {form} and {other} alike: {value} is {date} or {other_date}. "
    "Say which it is: rollband load ... --date-format {form} or --date-format {other}.",
    "date-forms-mixed": "{value} can only be {form}, and {other_value} on {place} {other_line} only {other}. "
    "Write all dates of the column the same way.",
    "two-digit-year": "{value} read as {date} is yet to come: two-digit years from {pivot} on are of the 1900s, the "
    "others of the 2000s. Write the years with four digits.",
    "date-out-of-range": "{value} is outside {low} to {high}, the dates that can be used. Correct the year.",
    "duplicate-date": "{value} is already on {place} {first_line}. "
    "Each date may stand once; remove one of the rows.{hint}",
    "not-a-number": "{value} is not a number. Write plain numbers with a {decimal} as decimal mark, "
    "best without thousands separators.",
    "decimal-unclear": "{value} is {as_point} with a decimal point and {as_comma} with a decimal comma, and no number "
    "of the file settles which. Say rollband load ... --decimal point or --decimal comma.",
    "thousands-mixed": "{value} has a {mark} between thousands, and other large numbers of the column have none: it "
    "may be meant for the decimal {decimal}. Write all numbers of the column the same way.",
    "percent-mixed": "{value} and other values of the file do not agree on whether there is a percent sign. "
    "Write all of them with it, or none.",
    "percent-unit": "the vols have percent signs, and --vol-unit decimal says that they are decimals. Leave it out.",
    "currency-mixed": "{value} is in {sign}, and the value on {place} {first_line} in {first}. "
    "A history is in one money; give a file of one.",
    "not-finite": "{value} is not a finite number. Put in the value, or remove the row.",
    "missing-price": "the price is missing (found {value}). Every row of the price file needs its {column}; "
    "put in the price, or remove the row if it was not a trading day.",
    "missing-dividend": "the amount is missing (found {value}). Put in the cash per share, or remove the row.",
    "not-positive": "{value} is not above 0. {meaning} must be above 0; correct it, or remove the row.",
    "negative": "{value} is negative. {meaning} must be 0 or more; correct it.",
    "vol-out-of-range": "{value} read as {unit} is a vol of {percent:g}% a year; "
    "it must lie between {low:g}% and {high:g}%. Correct it, or say --vol-unit if the whole file is in the other unit.",
    "vol-unit-mixed": "{value} does not fit a file in {unit}: {rule}. "
    "Correct it; if it is right, say --vol-unit {unit}.",
    "vol-outlier": "{value} is {times:.3g} times {side} the median vol of the file, {median:g}; "
    "more than {limit:g} times means that percent and decimals are mixed. Correct it.",
    "vol-unit-unclear": "the unit of the vols is not plain: {count} values "
    "from {low:g} to {high:g}, median {median:g}. "
    "Say --vol-unit percent (20 is 20% a year) or --vol-unit decimal (0.20 is 20% a year).",
    "rate-out-of-range": "{value} percent a year is out of range; "
    "a rate must be above {low:g} and at most {high:g} percent. "
    "Rates are in percent a year (5.25 is 5.25%); correct it.",
    # a file against the price file
    "no-rows-in-span": "no price lies in the span asked for, {first} to {last}; "
    "the file runs from {file_first} to {file_last}. Move --from or --to.",
    "no-values-in-span": "no value of '{column}' can be used on the trading days {first} to {last}: "
    "its values run from {value_first} to {value_last}. Use a file that covers the prices.",
    "empty-column": "the column has no value at all. Fill it, or remove the column.",
    "gap-too-long": "no value of '{column}' from {start} to {end}, {days} calendar days, which leaves {count} "
    "(the first {first}) without one. A value is carried forward at most {limit} calendar days. {advice}",
    "never-together": "no trading day has a value of every series: {spans}. Use files that cover the same years.",
    "ex-date-not-a-trading-day": "{value} is not a trading day of the price file. An ex-date must be one; "
    "move the dividend to {next_day} if that was the first day without it, or add the missing price.",
    "dividends-twice": "dividends come both from column '{price_column}' of the price file and from this file. "
    "Give one of the two: remove the column, or leave out --dividends.",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """One thing wrong with one file.

    Attributes
    ----------
    file, kind : str
        Name of the file (no folders) and what it was read as: ``prices``, ``vol``, ``dividends``, ``rates``.
    line : int or None
        Line in the file; the first line is 1. The row where a file has no lines, as ``place`` says.
    column, value : str or None
        Name of the column as the file spells it, and the text found there.
    code : str
        A key of :data:`REASONS`.
    message : str
        What is wrong, the rule, and what to do.
    symbol : str or None
        Of a file of many symbols, the one it concerns.
    """

    file: str
    kind: Kind
    code: str
    message: str
    line: int | None = None
    column: str | None = None
    value: str | None = None
    symbol: str | None = None
    place: Place = "line"

    def __str__(self) -> str:
        place = [self.file]
        if self.symbol is not None:
            place.append(f"symbol {self.symbol}")
        if self.line is not None:
            place.append(f"{self.place} {self.line}")
        if self.column is not None:
            place.append(f"column {self.column}")
        return f"{', '.join(place)}: {self.message}"


class LoadError(Exception):
    """Anything that keeps a history from being loaded, stored or read."""


class StoreError(LoadError):
    """A stored history is unknown, unreadable, of another version, being written, or its name cannot be used."""


class AppendRefused(StoreError):
    """New days cannot be put after a stored history; it is as it was.

    Attributes
    ----------
    differences : tuple of (str, str)
        Every one found: the column (``date`` for a day that one of the two lacks), and a sentence.
    """

    def __init__(self, reason: str, differences: Iterable[tuple[str, str]] = ()) -> None:
        self.reason, self.differences = reason, tuple(differences)
        super().__init__(self.reason, self.differences)

    def __str__(self) -> str:
        lines = [self.reason]
        shown: Counter[str] = Counter()
        for column, sentence in self.differences:
            shown[column] += 1
            if shown[column] <= SHOWN_PER_CODE:
                lines.append(f"  {sentence}")
        lines += [
            f"  and {total - SHOWN_PER_CODE:,} more of {column}"
            for column, total in shown.items()
            if total > SHOWN_PER_CODE
        ]
        return "\n".join(lines)


class DataProblems(LoadError):
    """The files cannot be used.

    Attributes
    ----------
    problems : tuple of Problem
        In the order of the files and their lines; at most :data:`KEPT_PER_CODE` of one code and column.
    totals : dict
        Code -> number found, including those not kept.
    """

    def __init__(self, problems: Iterable[Problem], totals: Mapping[str, int] | None = None) -> None:
        self.problems = tuple(problems)
        self.totals = dict(totals) if totals is not None else dict(Counter(p.code for p in self.problems))
        super().__init__(self.problems, self.totals)

    def __str__(self) -> str:
        count = sum(self.totals.values())
        files = len({(p.kind, p.file) for p in self.problems})
        lines = [f"{count:,} problem{_s(count)} in {files} file{_s(files)}; nothing was loaded."]
        shown: Counter[str] = Counter()
        for problem in self.problems:
            shown[problem.code] += 1
            if shown[problem.code] <= SHOWN_PER_CODE:
                lines.append(f"  {problem}")
        for code, total in self.totals.items():
            if (rest := total - SHOWN_PER_CODE) > 0:
                lines.append(f"  and {rest:,} more of the same kind ({code})")
        return "\n".join(lines)


@dataclass(slots=True)
class Problems:
    """Collects problems over all files, so that they are reported in one go."""

    found: list[Problem] = field(default_factory=list)
    totals: Counter[str] = field(default_factory=Counter)
    symbol: str | None = None
    _kept: Counter[tuple[str, str, str, str | None]] = field(default_factory=Counter)

    def add(
        self,
        code: str,
        *,
        file: str,
        kind: Kind,
        line: int | None = None,
        column: str | None = None,
        value: str | None = None,
        place: Place = "line",
        **facts: Any,
    ) -> None:
        """Note one problem; `facts` fill the sentence of the code."""
        self.totals[code] += 1
        key = (kind, file, code, column)
        self._kept[key] += 1
        if self._kept[key] > KEPT_PER_CODE:
            return
        message = REASONS[code].format(**{"column": column, "value": quoted(value), "place": place, **facts})
        self.found.append(
            Problem(
                file=file, kind=kind, code=code, message=message, line=line, column=column, value=value,
                symbol=self.symbol, place=place,
            )
        )  # fmt: skip

    def count_rest(self, code: str, number: int) -> None:
        """Count problems of a code that are too many to note one by one."""
        self.totals[code] += number

    def any_in(self, kind: str, codes: Sequence[str]) -> bool:
        """Whether a file of this kind has a problem of one of the codes."""
        return any(p.kind == kind and p.code in codes for p in self.found)

    def raise_if_any(self) -> None:
        """Raise :class:`DataProblems` with everything found, sorted by file and line."""
        if self.found:
            kinds = list(FILES)
            found = sorted(self.found, key=lambda p: (kinds.index(p.kind), p.line or 0))
            raise DataProblems(found, self.totals)


def quoted(value: str | None) -> str:
    """Text of a file as a message shows it: quoted, control characters escaped, cut if long."""
    if value is None:
        return "nothing"
    if value == "":
        return "an empty cell"
    return repr(value if len(value) <= LONGEST_QUOTE else value[:LONGEST_QUOTE] + "...")


def _s(number: int) -> str:
    return "" if number == 1 else "s"
