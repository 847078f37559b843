"""TOML -> Overlay and back; an error names file, line and key.

An overlay file holds the agreement (legs, account, costs), in ``[volatility]`` how its options are priced, and in
``[counterparty]`` and ``[sale]`` what is asked beside it. The normal form names every field that plays a part, so that
a file and its normal form always mean the same and the round trip is exact.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from backtest import (
    Costs,
    ImpliedSeries,
    Leg,
    Overlay,
    OverlayError,
    PercentOfSpot,
    RealisedVolatility,
    SSVISmile,
    Volatility,
)
from backtest.arguments import number, one_of, whole_number
from backtest.beside import Counterparty, Sale
from backtest.gates import gate_to_table
from backtest.overlay import ACCOUNTS
from backtest.volatility.smile import SMILE_LADDER, FlatSmile
from backtest.volatility.sources import ImpliedSurface, Source

from .errors import OverlayFileError
from .leg_files import NONE, OPTIONAL, build, gate_from_value, leg_from_value, leg_to_table, without_none
from .leg_words import describe_legs
from .toml_text import (
    KeyPath,
    KeyProblem,
    key_words,
    known_keys,
    nearest_line,
    parse_toml,
    plain,
    read_toml_text,
    table_of,
    toml,
)

#: Larger files are taken for a mistake.
LARGEST_FILE_BYTES = 1_000_000

TOP_KEYS = (
    "name", "account", "decide_lag", "portfolio", "crossed", "gate", "leg", "costs", "volatility", "counterparty",
    "sale",
)  # fmt: skip
#: Fields of a volatility that are written in a way of their own.
_NAMED = ("smile", "quote", "source")
#: Tables of their own in the text of a file; what comes before them is written key by key.
SECTIONS = ("costs", "volatility", "counterparty", "sale")
COST_KEYS = tuple(f.name for f in fields(Costs))
#: Keys of ``[volatility]`` that belong to realised vol.
REALISED_KEYS = tuple(f.name for f in fields(RealisedVolatility))
VOLATILITY_KEYS = (
    "smile", "quote", "source", *REALISED_KEYS, *(f.name for f in fields(Volatility) if f.name not in _NAMED),
)  # fmt: skip
SMILE_KEYS = ("rho", "eta", "gamma")
#: Where vols come from, by the word of it; realised vol has keys of its own.
REALISED = "realised"
SOURCES: dict[str, Source | None] = {"auto": None, "implied": ImpliedSeries(), "surface": ImpliedSurface()}
COUNTERPARTY_KEYS = tuple(f.name for f in fields(Counterparty))
SALE_KEYS = tuple(f.name for f in fields(Sale))


@dataclass(frozen=True, slots=True, kw_only=True)
class OverlayFile:
    """What an overlay file says; the last two are asked beside a replay, and None where they are not."""

    overlay: Overlay
    volatility: Volatility
    counterparty: Counterparty | None = None
    sale: Sale | None = None


def read_overlay_file(path: Path) -> OverlayFile:
    """Read an overlay file.

    Raises
    ------
    OverlayFileError
        If the file cannot be read, is no TOML, has an unknown key, or a value outside its limits.
    """
    text = read_toml_text(path, error=OverlayFileError, what="overlay file", largest=LARGEST_FILE_BYTES)
    return parse_overlay(text, file=path.name)


def parse_overlay(text: str, *, file: str = "overlay") -> OverlayFile:
    """Parse the text of an overlay file; see :func:`read_overlay_file`.

    Examples
    --------
    >>> found = parse_overlay('''
    ... [[leg]]
    ... position = "long"
    ... right = "put"
    ... strike = { percent_of_spot = 95 }
    ... ''')
    >>> found.overlay.name, found.overlay.legs[0].roll, found.volatility.smile.name
    ('quarterly 95 put', 'quarter', 'index')
    """
    table = parse_toml(text, file=file, error=OverlayFileError)
    try:
        return overlay_from_table(table)
    except KeyProblem as problem:
        line = nearest_line(text, problem.path)
        key = key_words(problem.path) or None
        raise OverlayFileError(file=file, line=line, key=key, problem=problem.problem) from None


def overlay_from_table(table: Mapping[str, Any]) -> OverlayFile:
    """An overlay from the parsed table, as :func:`overlay_to_table` writes it.

    Raises
    ------
    KeyProblem
        At the path of what is wrong.
    """
    known_keys((), table, TOP_KEYS)
    legs = table.get("leg", [])
    if not isinstance(legs, list) or not legs:
        raise KeyProblem(("leg",), "an overlay needs at least one [[leg]]")
    built = tuple(leg_from_value(leg, place) for place, leg in enumerate(legs))
    name = table.get("name", describe_legs(built))
    if not isinstance(name, str):
        raise KeyProblem(("name",), f"is {name!r}; it takes a text in quotes")
    overlay = build(
        (),
        Overlay,
        name=name,
        account=account_from_value(table.get("account", "resize")),
        decide_lag=lag_from_value(table.get("decide_lag", 0)),
        portfolio=portfolio_from_value(table.get("portfolio", NONE)),
        crossed=table.get("crossed", False),
        gate=gate_from_value(table.get("gate", NONE)),
        legs=built,
        costs=costs_from_value(table.get("costs", {})),
    )
    return OverlayFile(
        overlay=overlay,
        volatility=volatility_from_value(table.get("volatility", {})),
        counterparty=_beside("counterparty", table, Counterparty, COUNTERPARTY_KEYS),
        sale=_beside("sale", table, Sale, SALE_KEYS),
    )


def shorthand_overlay(
    *,
    put: float | None,
    call: float | None,
    put_roll: str = "quarter",
    call_roll: str = "quarter",
    put_term: int | None = None,
    call_term: int | None = None,
) -> OverlayFile:
    """A put bought and a call sold at percents of spot, either of them left out with None.

    Raises
    ------
    OverlayError
        If neither is given, or a number is outside its limits.
    """
    legs = []
    if put is not None:
        strike = PercentOfSpot(put)
        legs.append(Leg(position="long", right="put", strike=strike, roll=put_roll, term_months=put_term))
    if call is not None:
        strike = PercentOfSpot(call)
        legs.append(Leg(position="short", right="call", strike=strike, roll=call_roll, term_months=call_term))
    return OverlayFile(overlay=Overlay(name=describe_legs(tuple(legs)), legs=tuple(legs)), volatility=Volatility())


def overlay_to_table(
    overlay: Overlay, volatility: Volatility, *, counterparty: Counterparty | None = None, sale: Sale | None = None
) -> dict[str, Any]:
    """The normal form, plain values only: every field named, but for what is not given and has no default."""
    table: dict[str, Any] = {"name": overlay.name, "account": overlay.account, "decide_lag": overlay.decide_lag}
    if overlay.portfolio is not None:
        table["portfolio"] = overlay.portfolio
    if overlay.crossed:
        table["crossed"] = True
    if overlay.gate is not None:
        table["gate"] = gate_to_table(overlay.gate)
    table |= {
        "leg": [leg_to_table(leg) for leg in overlay.legs],
        "costs": {key: getattr(overlay.costs, key) for key in COST_KEYS},
        "volatility": volatility_to_table(volatility),
    }
    if counterparty is not None:
        table["counterparty"] = plain((), {key: getattr(counterparty, key) for key in COUNTERPARTY_KEYS})
    if sale is not None:
        table["sale"] = {key: getattr(sale, key) for key in SALE_KEYS}
    return table


def volatility_to_table(volatility: Volatility) -> dict[str, Any]:
    """The table ``[volatility]`` with every field; those of realised vol only with it."""
    smile: str | dict[str, float] = volatility.smile.name
    if isinstance(volatility.smile, SSVISmile) and smile not in SMILE_LADDER:
        smile = {key: getattr(volatility.smile, key) for key in SMILE_KEYS}
    source = volatility.source
    word = next((word for word, known in SOURCES.items() if known == source), REALISED)
    vol: dict[str, Any] = {"smile": smile, "quote": volatility.quote, "source": word}
    if isinstance(source, RealisedVolatility):
        told = {key: getattr(source, key) for key in REALISED_KEYS}
        vol |= {key: value for key, value in told.items() if value is not None}
    return vol | {key: getattr(volatility, key) for key in VOLATILITY_KEYS if key not in (*_NAMED, *REALISED_KEYS)}


def overlay_to_toml(
    overlay: Overlay, volatility: Volatility, *, counterparty: Counterparty | None = None, sale: Sale | None = None
) -> str:
    """The normal form as the text of an overlay file."""
    return table_to_toml(overlay_to_table(overlay, volatility, counterparty=counterparty, sale=sale))


def table_to_toml(table: Mapping[str, Any], *, above: str = "") -> str:
    """The table of an overlay as text; ``above`` is put before the name of every table in it, such as ``overlay.``."""
    lines = [f"{key} = {toml(value)}" for key, value in table.items() if key not in ("leg", *SECTIONS)]
    for leg in table["leg"]:
        lines += ["", f"[[{above}leg]]", *(f"{key} = {toml(value)}" for key, value in leg.items())]
    for section in SECTIONS:
        if section in table:
            lines += ["", f"[{above}{section}]", *(f"{key} = {toml(value)}" for key, value in table[section].items())]
    return "\n".join(lines) + "\n"


def account_from_value(value: Any) -> str:
    """An account by its word."""
    build(("account",), one_of, "account", value, ACCOUNTS)
    return value


def lag_from_value(value: Any) -> int:
    """Trading days between a decision and its trade."""
    build(("decide_lag",), whole_number, "decide_lag", value, least=0, most=1, unit=" (trading day)")
    return value


def portfolio_from_value(value: Any) -> float | None:
    """Money at inception; None for the word."""
    if value == NONE:
        return None
    build(("portfolio",), number, "portfolio", value, least=1.0, unit=" (money)")
    return value


def costs_from_value(value: Any) -> Costs:
    """Costs from the table ``[costs]``."""
    path: KeyPath = ("costs",)
    return build(path, Costs, **table_of(path, value, COST_KEYS))


def _beside(key: str, table: Mapping[str, Any], make: Any, keys: tuple[str, ...]) -> Any:
    """What a table of its own asks; None without one."""
    return build((key,), make, **table_of((key,), table[key], keys)) if key in table else None


def volatility_from_value(value: Any) -> Volatility:
    """How options are priced, from the table ``[volatility]``."""
    path: KeyPath = ("volatility",)
    given = without_none(table_of(path, value, VOLATILITY_KEYS), OPTIONAL["volatility"])
    source = given.pop("source", "auto")
    words = (*SOURCES, REALISED)
    if source not in words:
        raise KeyProblem((*path, "source"), f"is {source!r}; it takes one of: {', '.join(words)}")
    realised = {key: given.pop(key) for key in REALISED_KEYS if key in given}
    if realised and source != REALISED:
        problem = 'belongs to realised vol; add source = "realised" or leave it out'
        raise KeyProblem((*path, next(iter(realised))), problem)
    made = build(path, RealisedVolatility, **realised) if source == REALISED else SOURCES[source]
    smile = smile_from_value(given.pop("smile", "index"), path=(*path, "smile"))
    return build(path, Volatility, source=made, smile=smile, **given)


def smile_from_value(value: Any, *, path: KeyPath = ("smile",)) -> FlatSmile | SSVISmile:
    """A smile from its word, or from a table of its three parameters."""
    if isinstance(value, str) and value in SMILE_LADDER:
        return SMILE_LADDER[value]
    words = ", ".join(SMILE_LADDER)
    if not isinstance(value, dict):
        raise KeyProblem(path, f"is {value!r}; it takes one of: {words}, or {{ rho = , eta = , gamma = }}")
    known_keys(path, value, SMILE_KEYS)
    missing = [key for key in SMILE_KEYS if key not in value]
    if missing:
        raise KeyProblem(path, f"lacks {', '.join(missing)}; a smile of one's own takes rho, eta and gamma")
    return build(path, SSVISmile, **value)


def smile_from_option(text: str) -> FlatSmile | SSVISmile:
    """A smile from its word, or from three numbers ``RHO,ETA,GAMMA``.

    Raises
    ------
    OverlayError
        If it is neither, or the numbers are not admissible.
    """
    parts = text.split(",")
    value: Any = text
    if len(parts) == len(SMILE_KEYS):
        try:
            value = {key: float(part) for key, part in zip(SMILE_KEYS, parts, strict=True)}
        except ValueError:
            value = text
    try:
        return smile_from_value(value)
    except KeyProblem as problem:
        words = problem.problem.replace("{ rho = , eta = , gamma = }", "three numbers RHO,ETA,GAMMA")
        raise OverlayError(f"--smile {words}", field="smile") from None
