"""TOML -> Overlay and back; an error names file, line and key.

An overlay file holds the agreement (legs, account, costs) and, in ``[volatility]``,
how its options are priced. The normal form names every field, so that a file and
its normal form always mean the same and the round trip is exact.
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
from backtest.arguments import one_of
from backtest.overlay import ACCOUNTS
from backtest.strikes import STRIKE_RULES, StrikeRule
from backtest.volatility.smile import SMILE_LADDER, FlatSmile

from .errors import OverlayFileError
from .toml_text import KeyPath, KeyProblem, key_words, known_keys, line_of, parse_toml, read_toml_text, table_of, toml

#: Larger files are taken for a mistake.
LARGEST_FILE_BYTES = 1_000_000

TOP_KEYS = ("name", "account", "leg", "costs", "volatility")
LEG_KEYS = ("position", "right", "roll", "term", "phase", "shift_days", "ratio", "strike")
COST_KEYS = tuple(f.name for f in fields(Costs))
VOLATILITY_KEYS = ("smile", "quote", "source", "window", "markup", "put_shift", "call_shift")
SMILE_KEYS = ("rho", "eta", "gamma")
SOURCES = ("auto", "implied", "realised")


@dataclass(frozen=True, slots=True, kw_only=True)
class OverlayFile:
    """What an overlay file says."""

    overlay: Overlay
    volatility: Volatility


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
        raise OverlayFileError(
            file=file, line=line_of(text, problem.path), key=key_words(problem.path) or None, problem=problem.problem
        ) from None


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
    built = tuple(leg_from_value(leg, number) for number, leg in enumerate(legs))
    costs = costs_from_value(table.get("costs", {}))
    name = table.get("name", describe_legs(built))
    if not isinstance(name, str):
        raise KeyProblem(("name",), f"is {name!r}; it takes a text in quotes")
    account = account_from_value(table.get("account", "resize"))
    overlay = _build((), Overlay, name=name, account=account, legs=built, costs=costs)
    return OverlayFile(overlay=overlay, volatility=volatility_from_value(table.get("volatility", {})))


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


def overlay_to_table(overlay: Overlay, volatility: Volatility) -> dict[str, Any]:
    """The normal form: every field named, plain values only."""
    smile: str | dict[str, float] = volatility.smile.name
    if isinstance(volatility.smile, SSVISmile) and smile not in SMILE_LADDER:
        smile = {key: getattr(volatility.smile, key) for key in SMILE_KEYS}
    vol: dict[str, Any] = {"smile": smile, "quote": volatility.quote, "source": "auto"}
    if isinstance(volatility.source, RealisedVolatility):
        vol |= {"source": "realised", "window": volatility.source.window, "markup": volatility.source.markup}
    elif volatility.source is not None:
        vol["source"] = "implied"
    vol |= {"put_shift": volatility.put_shift, "call_shift": volatility.call_shift}
    return {
        "name": overlay.name,
        "account": overlay.account,
        "leg": [
            {
                "position": leg.position,
                "right": leg.right,
                "roll": leg.roll,
                "term": leg.term,
                "phase": leg.phase,
                "shift_days": leg.shift_days,
                "ratio": leg.ratio,
                "strike": _strike_to_table(leg.strike),
            }
            for leg in overlay.legs
        ],
        "costs": {f.name: getattr(overlay.costs, f.name) for f in fields(overlay.costs)},
        "volatility": vol,
    }


def overlay_to_toml(overlay: Overlay, volatility: Volatility) -> str:
    """The normal form as the text of an overlay file."""
    table = overlay_to_table(overlay, volatility)
    lines = [f"name = {toml(table['name'])}", f"account = {toml(table['account'])}"]
    for leg in table["leg"]:
        lines += ["", "[[leg]]", *(f"{key} = {toml(value)}" for key, value in leg.items())]
    for section in ("costs", "volatility"):
        lines += ["", f"[{section}]", *(f"{key} = {toml(value)}" for key, value in table[section].items())]
    return "\n".join(lines) + "\n"


ROLL_ADVERBS = {"month": "monthly", "quarter": "quarterly", "half": "half-yearly", "year": "yearly"}


def describe_legs(legs: tuple[Leg, ...]) -> str:
    """A plain name for an overlay, such as ``quarterly 95 put, monthly 110 call``."""
    words = []
    for leg in legs:
        strike = " ".join(f"{value:g}" for value in _strike_to_table(leg.strike).values())
        of_forward = " of forward" if "percent_of_forward" in _strike_to_table(leg.strike) else ""
        unusual = {("short", "put"): "sold ", ("long", "call"): "bought "}.get((leg.position, leg.right), "")
        ratio = "" if leg.ratio == 1 else f"{leg.ratio:g} x "
        words.append(f"{ratio}{ROLL_ADVERBS[leg.roll]} {strike}{of_forward} {unusual}{leg.right}")
    return ", ".join(words)


def account_from_value(value: Any) -> str:
    """An account by its word."""
    _build(("account",), one_of, "account", value, ACCOUNTS)
    return value


def costs_from_value(value: Any) -> Costs:
    """Costs from the table ``[costs]``."""
    path: KeyPath = ("costs",)
    return _build(path, Costs, **table_of(path, value, COST_KEYS))


def leg_from_value(value: Any, number: int) -> Leg:
    """A leg from its table, the ``number``-th ``[[leg]]`` counted from 0."""
    path: KeyPath = ("leg", number)
    given = table_of(path, value, LEG_KEYS)
    for needed in ("position", "right", "strike"):
        if needed not in given:
            raise KeyProblem(path, f"has no {needed}; a leg needs position, right and strike")
    arguments = {("term_months" if key == "term" else key): item for key, item in given.items()}
    arguments["strike"] = _strike((*path, "strike"), given["strike"])
    return _build(path, Leg, **arguments)


def _strike(path: KeyPath, value: Any) -> StrikeRule:
    rules = ", ".join(STRIKE_RULES)
    if not isinstance(value, dict) or len(value) != 1:
        raise KeyProblem(path, f"is {value!r}; it takes one rule, such as {{ percent_of_spot = 95 }}; rules: {rules}")
    ((rule, argument),) = value.items()
    known_keys(path, value, tuple(STRIKE_RULES))
    return _build(path, STRIKE_RULES[rule], argument)


def _strike_to_table(strike: StrikeRule) -> dict[str, float]:
    for name, rule in STRIKE_RULES.items():
        if type(strike) is rule:
            (only,) = fields(rule)
            return {name: getattr(strike, only.name)}
    raise OverlayError(f"strike rule {strike!r} has no name in an overlay file", field="strike")


def volatility_from_value(value: Any) -> Volatility:
    """How options are priced, from the table ``[volatility]``."""
    path: KeyPath = ("volatility",)
    given = table_of(path, value, VOLATILITY_KEYS)
    source = given.get("source", "auto")
    if source not in SOURCES:
        raise KeyProblem((*path, "source"), f"is {source!r}; it takes one of: {', '.join(SOURCES)}")
    for key in ("window", "markup"):
        if key in given and source != "realised":
            raise KeyProblem((*path, key), 'belongs to realised vol; add source = "realised" or leave it out')
    made: ImpliedSeries | RealisedVolatility | None = None
    if source == "implied":
        made = ImpliedSeries()
    elif source == "realised":
        made = _build(path, RealisedVolatility, **{k: given[k] for k in ("window", "markup") if k in given})
    smile = smile_from_value(given.get("smile", "index"), path=(*path, "smile"))
    quoted = {key: given[key] for key in ("quote", "put_shift", "call_shift") if key in given}
    return _build(path, Volatility, source=made, smile=smile, **quoted)


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
    return _build(path, SSVISmile, **value)


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


def _build(path: KeyPath, make: Any, *args: Any, **kwargs: Any) -> Any:
    """Make an object, turning its complaint into one that knows its place."""
    try:
        return make(*args, **kwargs)
    except OverlayError as error:
        inside = (
            error.field is not None and error.field != (path[-1] if path else None) and error.field not in STRIKE_RULES
        )
        raise KeyProblem((*path, error.field) if inside and error.field else path, str(error)) from None
