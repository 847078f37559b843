"""What a user says about a file where its own contents do not settle it: the options of ``rollband load``."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

from .dates import AskedDates, asked_dates
from .schema import FILES, Kind, tenor_days

Decimal = Literal["point", "comma"]


class ReadingError(ValueError):
    """An option about a file that makes no sense; ``option`` names it."""

    def __init__(self, option: str, problem: str) -> None:
        self.option = option
        super().__init__(problem)


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """What is said about one file; everything left out is found from the file.

    Attributes
    ----------
    date_format : str or None
        ``DD/MM/YYYY``, ``MM/DD/YYYY``, ``YYYYMMDD``, ``SERIAL``, ``SERIAL-1904`` and so on
        (:func:`~data_loaders.dates.asked_dates`).
    decimal : {"point", "comma"} or None
    columns : tuple of (role, name)
        The file's column for a role, whatever it is called: ``(("close", "Schluss"),)``.
    symbol_column, symbol : str or None
        Of a file that holds many series one below the other: the column that tells them apart, and the one wanted.
    """

    date_format: str | None = None
    decimal: Decimal | None = None
    columns: tuple[tuple[str, str], ...] = ()
    symbol_column: str | None = None
    symbol: str | None = None

    def __post_init__(self) -> None:
        if self.decimal not in (None, "point", "comma"):
            raise ReadingError("--decimal", f"the decimal mark is 'point' or 'comma', not {self.decimal!r}")
        self.dates()

    def dates(self) -> AskedDates | None:
        """The form of dates that is asked for."""
        if self.date_format is None:
            return None
        try:
            return asked_dates(self.date_format)
        except ValueError as error:
            raise ReadingError("--date-format", str(error)) from None

    @classmethod
    def from_stored(cls, entry: Mapping[str, Any]) -> Reading:
        """From the metadata of a stored history, where tuples have become lists."""
        return cls(**{**entry, "columns": tuple((role, name) for role, name in entry.get("columns", ()))})


#: Nothing is said.
PLAIN = Reading()


def readings(
    *,
    columns: Sequence[str] = (),
    date_formats: Sequence[str] = (),
    decimals: Sequence[str] = (),
    symbol_column: str | None = None,
    symbol: str | None = None,
) -> dict[Kind, Reading]:
    """Options as typed -> what is said about each kind of file.

    ``close=Schluss`` names a column of the price file, ``vol.vol=IV`` or ``vol.30=IV30`` one of the vol file.
    ``DD/MM/YYYY`` and ``comma`` are for all files, ``vol=DD/MM/YYYY`` and ``vol=comma`` for one.

    Raises
    ------
    ReadingError
        For an option that makes no sense.

    Examples
    --------
    >>> said = readings(columns=["close=Schluss", "vol.vol=IV"], decimals=["comma", "vol=point"])
    >>> said["prices"].columns, said["prices"].decimal, said["vol"].columns, said["vol"].decimal
    ((('close', 'Schluss'),), 'comma', (('vol', 'IV'),), 'point')
    """
    mapped = _columns(columns)
    dates, marks = _by_kind("--date-format", date_formats), _by_kind("--decimal", decimals)
    return {
        kind: Reading(
            date_format=dates[kind], decimal=marks[kind], columns=mapped[kind],  # type: ignore[arg-type]  # it is checked
            symbol_column=symbol_column, symbol=symbol,
        )
        for kind in FILES
    }  # fmt: skip


def _columns(given: Sequence[str]) -> dict[Kind, tuple[tuple[str, str], ...]]:
    mapped: dict[Kind, list[tuple[str, str]]] = {kind: [] for kind in FILES}
    for text in given:
        target, sign, name = text.partition("=")
        before, point, role = target.strip().rpartition(".")
        kind = before if point else "prices"
        if not sign or not name.strip():
            raise ReadingError("--map", f"{text!r} has to be ROLE=NAME, for example close=Schluss or vol.vol=IV")
        if kind not in FILES:
            raise ReadingError("--map", f"{text!r}: there is no file {kind!r}; it is one of {', '.join(FILES)}")
        role = _role(kind, role, text)
        if role in dict(mapped[kind]):
            already = dict(mapped[kind])[role]
            raise ReadingError("--map", f"{text!r}: '{role}' of the {kind} file is already {already!r}")
        if taken := [other for other, used in mapped[kind] if used == name.strip()]:
            raise ReadingError("--map", f"{text!r}: {name.strip()!r} of the {kind} file is already its '{taken[0]}'")
        mapped[kind].append((role, name.strip()))
    return {kind: tuple(pairs) for kind, pairs in mapped.items()}


def _role(kind: Kind, role: str, text: str) -> str:
    schema = FILES[kind]
    roles = [schema.date.role, *(column.role for column in schema.value_columns)]
    if role in roles:
        return role
    if schema.tenors and (days := tenor_days(role)) is not None:
        return f"vol_{days}"
    tenors = ", or a tenor in days such as 30" if schema.tenors else ""
    hint = f" (of the {role} file it would be {role}.{role}=...)" if kind == "prices" and role in FILES else ""
    raise ReadingError("--map", f"{text!r}: the {kind} file has {', '.join(roles)}{tenors}, no {role!r}{hint}")


def _by_kind(option: str, given: Sequence[str]) -> dict[Kind, str | None]:
    """A value for all files, or one after ``KIND=`` for that file alone, which goes before."""
    general: str | None = None
    own: dict[Kind, str | None] = {}
    for text in given:
        before, sign, value = text.rpartition("=")
        if sign and before not in FILES:
            raise ReadingError(option, f"{text!r}: there is no file {before!r}; it is one of {', '.join(FILES)}")
        if (before in own) if sign else (general is not None):
            raise ReadingError(option, f"{text!r}: it is given twice{f' for {before}' if sign else ''}")
        if sign:
            own[before] = value.strip()  # type: ignore[index]  # one of the kinds
        else:
            general = value.strip()
    return {kind: own.get(kind, general) for kind in FILES}
