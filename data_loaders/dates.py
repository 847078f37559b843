"""Columns of text -> dates, whatever way they are written; the form is found from the whole column.

A column has one form. What the numbers mean is taken from all its cells together: ``13/01/2020`` shows that the day
comes first. Where they fit two forms alike and would give other dates, neither is taken (:attr:`DatesRead.unclear`).
Times and time zones are left out: the date is the one that is written.
"""

from __future__ import annotations

import datetime as dt
import re
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from .cells import Dates, Lines, Mask, civil_dates, dates_from_text, outside_range, to_numpy

#: Two-digit years from this one on are of the 1900s, those below it of the 2000s.
PIVOT = 69
#: The spreadsheet systems of day numbers: the day before day 1, and day 0. The first one counts a 29 February 1900.
_LAST_OF_1899, _FIRST_OF_1904, _LEAP_BUG = np.datetime64("1899-12-31"), np.datetime64("1904-01-01"), 60
#: Cells from which the forms that a column may have are picked; all cells then decide between them.
_SAMPLE = 2000

Numbers = npt.NDArray[np.int64]
Family = Literal["numbers", "names", "compact", "serial"]

_MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
_LONG_MONTHS = (
    "january", "february", "march", "april", "may", "june", "july", "august", "september", "october", "november",
    "december",
)  # fmt: skip
_MONTH_NAMES = dict(zip(_MONTHS, range(1, 13))) | dict(zip(_LONG_MONTHS, range(1, 13))) | {"sept": 9}

_CLOCK = r"(?P<time>[0-2]?\d:[0-5]\d(?::[0-6]\d(?:[.,]\d+)?)?(?: ?[AaPp]\.?[Mm]\.?)?)"
_ZONE = r"(?P<zone>Z|[A-Z]{2,5}|[+-]\d{2}(?::?\d{2})?)"
_TIME = rf"(?:(?:T|,? ){_CLOCK}(?: ?{_ZONE})?)?$"
_MIDNIGHT = r"^(?:0?0:00(?::00(?:[.,]0+)?)?(?: ?[Aa]\.?[Mm]\.?)?|12:00(?::00(?:[.,]0+)?)? ?[Aa]\.?[Mm]\.?)$"
_WEEKDAY = r"^(?:(?i:mon|tue|wed|thu|fri|sat|sun)[a-z]*[,.]? +)?"
_NAME = r"(?P<m>[A-Za-z]{3,9})\.?"
_ORDINAL = r"(?:st|nd|rd|th)?"


@dataclass(frozen=True, slots=True, kw_only=True)
class DateForm:
    """One way of writing dates.

    ``order`` is of the letters y, m, d; ``mark`` stands between numbers; ``years`` digits have the years; ``loose``
    allows one-digit days and months; ``timed`` a time other than midnight; ``system`` is of spreadsheet numbers.
    """

    family: Family = "numbers"
    order: str = "ymd"
    mark: str = "-"
    years: int = 4
    loose: bool = False
    timed: bool = False
    system: int = 1900

    @property
    def name(self) -> str:
        """As ``--date-format`` takes it.

        >>> DateForm(order="dmy", mark="/").name, DateForm(family="names", order="dmy", years=2).name
        ('DD/MM/YYYY', 'DD-MON-YY')
        """
        if self.family == "serial":
            return "SERIAL" if self.system == 1900 else "SERIAL-1904"
        parts = {"y": "Y" * self.years, "m": "MON" if self.family == "names" else "MM", "d": "DD"}
        mark = {"numbers": self.mark, "names": "-", "compact": ""}[self.family]
        return mark.join(parts[letter] for letter in self.order)

    @property
    def example(self) -> str:
        """20 March 2008 in this form."""
        if self.family == "serial":
            return "39527" if self.system == 1900 else "38065"
        month = "MAR" if self.family == "names" else "03"
        mark = {"numbers": self.mark, "names": "-", "compact": ""}[self.family]
        parts = {"y": "2008"[-self.years :], "m": month, "d": "20"}
        return mark.join(parts[letter] for letter in self.order)

    @property
    def pattern(self) -> str:
        """Regular expression with the groups y, m, d (or n), time and zone."""
        year = rf"(?P<y>\d{{{self.years}}})"
        if self.family == "serial":
            return r"^(?P<n>\d{1,6})(?:[.,]\d+)?$"
        if self.family == "compact":
            parts = {"y": year, "m": r"(?P<m>\d{2})", "d": r"(?P<d>\d{2})"}
            return "^" + "".join(parts[letter] for letter in self.order) + r"(?:\.0+)?" + _TIME
        if self.family == "names":
            day = rf"(?P<d>\d{{1,2}}){_ORDINAL}"
            parts = {"y": year, "m": _NAME, "d": day}
            first, second, third = (parts[letter] for letter in self.order)
            # letters part the numbers: 03JAN2020 will do, Jan 32020 will not
            apart = r"[ \-/.,]+" if self.order == "mdy" else r"[ \-/.,]*"
            return _WEEKDAY + first + r"[ \-/.,]*" + second + apart + third + _TIME
        digits = r"\d{1,2}" if self.loose else r"\d{2}"
        parts = {"y": year, "m": rf"(?P<m>{digits})", "d": rf"(?P<d>{digits})"}
        return "^" + re.escape(self.mark).join(parts[letter] for letter in self.order) + _TIME


ISO = DateForm()


@dataclass(frozen=True, slots=True)
class AskedDates:
    """What ``--date-format`` says: an order of day, month and year, or numbers without marks."""

    family: Family
    order: str = "ymd"
    years: int = 4
    system: int = 1900


@dataclass(frozen=True, slots=True, kw_only=True)
class Unclear:
    """Two forms that fit as many cells, and a cell that they read differently.

    ``other_date`` is None where `other` cannot read that cell; then it alone can read the one of ``other_row``.
    """

    form: DateForm
    other: DateForm
    row: int
    date: np.datetime64
    other_date: np.datetime64 | None
    other_row: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DatesRead:
    """A column of dates.

    Attributes
    ----------
    dates : ndarray of datetime64[D], shape (row,)
        1970-01-01 where there is none.
    bad, outside, too_late : bool ndarray, shape (row,)
        Cells that are no date of the form; dates outside the range of the schema; two-digit years that come out
        after today.
    form : DateForm
        The one of the column, :data:`ISO` if it has none.
    settled_by : int or None
        Row that only this form can read, where there was another to choose from.
    unclear : Unclear or None
        Two forms that fit alike; then neither is meant to be used.
    """

    dates: Dates
    bad: Mask
    outside: Mask
    too_late: Mask
    form: DateForm
    settled_by: int | None = None
    unclear: Unclear | None = None


def asked_dates(text: str) -> AskedDates:
    """``--date-format`` as typed; a mark between the parts stands for any.

    Raises
    ------
    ValueError
        If it is none of the forms we know.

    Examples
    --------
    >>> asked_dates("dd/mm/yyyy").order, asked_dates("%m-%d-%y").order, asked_dates("serial-1904").system
    ('dmy', 'mdy', 1904)
    """
    known = text.strip().upper()
    for percent, plain in (("%D", "DD"), ("%M", "MM"), ("%B", "MON"), ("%Y", "YYYY" if "%Y" in text else "YY")):
        known = known.replace(percent, plain)
    if known == "ISO":
        known = ISO.name
    if known in ("SERIAL", "SERIAL-1900", "SERIAL-1904"):
        return AskedDates("serial", system=1904 if known.endswith("1904") else 1900)
    parts = re.fullmatch(r"(DD?|MON|MM?|YYYY|YY)([-/. ]?)(DD?|MON|MM?|YYYY|YY)\2(DD?|MON|MM?|YYYY|YY)", known)
    order = "".join(part[0].lower() for part in parts.group(1, 3, 4)) if parts else ""
    if parts is None or order not in ("ymd", "dmy", "mdy"):
        raise ValueError(
            f"{text!r} is no form of dates: give the order of day, month and year, such as DD/MM/YYYY, MM/DD/YYYY, "
            "DD-MM-YY or YYYYMMDD, or SERIAL or SERIAL-1904 for the day numbers of a spreadsheet"
        )
    years = 4 if "YYYY" in known else 2
    if "MON" in known:
        return AskedDates("names", order, years)
    return AskedDates("numbers" if parts[2] else "compact", order, years)


def read_dates(column: pa.Array, asked: AskedDates | None = None) -> DatesRead:
    """Dates of a column of text; `asked` decides where the column could be read in more than one way."""
    if asked is None or asked.family in ("numbers", "names"):
        dates, bad, outside = dates_from_text(column)
        if not bad.any():
            return DatesRead(dates=dates, bad=bad, outside=outside, too_late=np.zeros_like(bad), form=ISO)
    text = pc.utf8_trim_whitespace(column)
    if asked is not None and asked.family in ("serial", "compact"):
        form = DateForm(family=asked.family, order=asked.order, years=asked.years, system=asked.system)
        return _read(text, replace(form, timed=_mostly_timed(text, form)))
    shape = _commonest_shape(text)
    if shape is None:
        return _read(text, ISO)
    if shape.family == "numbers" and shape.order == "ymd" and shape.years == 4:
        mark = re.escape(shape.mark)
        padded = _count(text, rf"^\d{{4}}{mark}(?:0\d{mark}\d\d|\d\d{mark}0\d)(?:\D|$)")
        single = _count(text, rf"^\d{{4}}{mark}(?:\d{mark}\d|\d\d{mark}\d(?:\D|$))")
        shape = replace(shape, loose=single > padded)
    shape = replace(shape, timed=_mostly_timed(text, shape))
    if shape.family == "serial":
        return _serial(text, shape)
    if shape.family != "numbers" or shape.order == "ymd":
        return _read(text, shape)
    orders = ("dmy", "mdy") if shape.years == 4 else ("dmy", "mdy", "ymd")
    if asked is not None and asked.order in orders:
        return _read(text, replace(shape, order=asked.order))
    return _best(text, [replace(shape, order=order) for order in orders])


def _shapes() -> list[DateForm]:
    """Forms as far as they can be told from one cell."""
    marks = "-/. "
    last = [
        DateForm(order="dmy", mark=mark, years=years, loose=True) for mark in marks for years in (4, 2)
    ]  # any order of day and month
    names = [DateForm(family="names", order=order, years=years) for order in ("dmy", "mdy") for years in (4, 2)]
    return [
        *(DateForm(order="ymd", mark=mark, loose=True) for mark in marks),
        *last,
        *names,
        DateForm(family="names", order="ymd"),
        DateForm(family="compact"),
        DateForm(family="serial"),
    ]


def _commonest_shape(text: pa.Array) -> DateForm | None:
    """The form that most cells have, the first cell's where two are as common; None if no cell has any."""
    sample = text.filter(pc.not_equal(text, ""))[:_SAMPLE]
    # five digits: 1927 to 2173; fewer would be row numbers
    patterns = {form: r"^[1-9]\d{4}(?:[.,]\d+)?$" if form.family == "serial" else form.pattern for form in _shapes()}
    found = {form: pattern for form, pattern in patterns.items() if _count(sample, pattern)}
    if len(found) <= 1:
        return next(iter(found), None)
    counts = {form: _count(text, pattern) for form, pattern in found.items()}
    most = max(counts.values())
    best = [form for form, count in counts.items() if count == most]
    firsts = [int(np.argmax(to_numpy(pc.match_substring_regex(text, found[form])))) for form in best]
    return best[int(np.argmin(firsts))]


def _count(text: pa.Array, pattern: str) -> int:
    return int(pc.sum(pc.match_substring_regex(text, pattern)).as_py() or 0)


def _mostly_timed(text: pa.Array, form: DateForm) -> bool:
    """Whether most cells of a form have a time other than midnight, or a zone."""
    if form.family == "serial":
        return False
    parts = _parts(text, form)
    return 2 * int(np.count_nonzero(_has_time(parts))) > int(np.count_nonzero(parts["matched"]))


def _parts(text: pa.Array, form: DateForm) -> dict[str, Any]:
    """The groups of a form's pattern as arrays of text; ``matched`` says which cells have it."""
    found = pc.extract_regex(text, form.pattern)
    groups = {found.type.field(i).name: pc.struct_field(found, i) for i in range(found.type.num_fields)}
    return {**groups, "matched": to_numpy(pc.is_valid(found))}


def _has_time(parts: dict[str, Any]) -> Mask:
    time, zone = pc.fill_null(parts["time"], ""), pc.fill_null(parts["zone"], "")
    midnight = pc.or_(pc.equal(time, ""), pc.match_substring_regex(time, _MIDNIGHT))
    return ~to_numpy(midnight) | to_numpy(pc.not_equal(zone, ""))


def _read(text: pa.Array, form: DateForm) -> DatesRead:
    """All cells in one form."""
    parts = _parts(text, form)
    bad = ~parts["matched"]
    if form.family == "serial":
        number = _integers(parts["n"])
        dates, never = _serial_dates(number, form.system)
        bad |= never
    else:
        if not form.timed:
            bad |= _has_time(parts)
        year, day = _integers(parts["y"]), _integers(parts["d"])
        if form.years == 2:
            year = year + np.where(year < PIVOT, 2000, 1900)
        month = _months(parts["m"]) if form.family == "names" else _integers(parts["m"])
        dates, impossible = civil_dates(year, month, day)
        bad |= impossible
    dates[bad] = np.datetime64("1970-01-01")
    outside = ~bad & outside_range(dates)
    too_late = ~bad & (dates > np.datetime64(_today(), "D")) if form.years == 2 else np.zeros_like(bad)
    return DatesRead(dates=dates, bad=bad, outside=outside, too_late=too_late, form=form)


def _best(text: pa.Array, forms: list[DateForm]) -> DatesRead:
    """The form in which most cells are dates; unclear where two that give other dates are as good."""
    tried = [_read(text, form) for form in forms]
    good = [~(read.bad | read.outside | read.too_late) for read in tried]
    counts = [int(np.count_nonzero(one)) for one in good]
    order = sorted(range(len(tried)), key=lambda i: -counts[i])
    best = order[0]
    for other in order[1:]:
        differs = good[best] & (~good[other] | (tried[best].dates != tried[other].dates))
        if counts[other] == counts[best] and differs.any():
            both = differs & good[other]
            row = int(np.argmax(both if both.any() else differs))
            unclear = Unclear(
                form=forms[best],
                other=forms[other],
                row=row,
                date=tried[best].dates[row],
                other_date=tried[other].dates[row] if both.any() else None,
                other_row=None if both.any() else int(np.argmax(good[other] & ~good[best])),
            )
            return replace(tried[best], unclear=unclear)
    settling = good[best] & ~good[order[1]]
    return replace(tried[best], settled_by=int(np.argmax(settling)) if settling.any() else None)


def _serial(text: pa.Array, form: DateForm) -> DatesRead:
    """Spreadsheet numbers of the 1900 system, unless only the 1904 one puts all days on weekdays."""
    read, other = _read(text, form), _read(text, replace(form, system=1904))
    weekend, weekend_1904 = _weekend(read.dates[~read.bad]), _weekend(other.dates[~other.bad])
    if not weekend.any() or weekend_1904.any():
        return read
    row = int(np.flatnonzero(~read.bad)[np.argmax(weekend)])
    dates = {"date": read.dates[row], "other_date": other.dates[row]}
    return replace(read, unclear=Unclear(form=form, other=other.form, row=row, **dates))


def _serial_dates(number: Numbers, system: int) -> tuple[Dates, Mask]:
    """Dates of spreadsheet numbers, and those that are of no day that ever was."""
    if system == 1904:
        dates: Dates = _FIRST_OF_1904 + number
        return dates, np.zeros(len(number), dtype=np.bool_)
    # day 60 is the 29 February 1900 of the program that all others follow; later ones are one too high for it
    dates = _LAST_OF_1899 + np.where(number > _LEAP_BUG, number - 1, number)
    return dates, (number < 1) | (number == _LEAP_BUG)


def _weekend(dates: Dates) -> Mask:
    """Saturdays and Sundays; 1970-01-01 was a Thursday."""
    return np.asarray((dates.astype(np.int64) + 3) % 7 >= 5)


def _integers(column: pa.Array) -> Numbers:
    return to_numpy(pc.cast(pc.fill_null(column, "1"), pa.int64()))


def _months(column: pa.Array) -> Numbers:
    """Numbers of months named in English, 0 where the name is none."""
    names = pa.array(list(_MONTH_NAMES))
    position: Lines = to_numpy(pc.fill_null(pc.index_in(pc.utf8_lower(pc.fill_null(column, "")), value_set=names), -1))
    return np.append(np.array(list(_MONTH_NAMES.values()), dtype=np.int64), 0)[position]


def _today() -> dt.date:
    return dt.date.today()
