"""TOML -> Overlay and back; an error names file, line and key.

An overlay file holds the agreement (legs, account, costs) and, in ``[volatility]``,
how its options are priced. The normal form names every field, so that a file and
its normal form always mean the same and the round trip is exact.
"""

from __future__ import annotations

import difflib
import json
import re
import tomllib
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
from backtest.strikes import STRIKE_RULES, StrikeRule
from backtest.volatility.smile import SMILE_LADDER, FlatSmile

from .errors import OverlayFileError

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


class _KeyProblem(Exception):
    """A problem at a path of keys, before file and line are known."""

    def __init__(self, path: tuple[str | int, ...], problem: str) -> None:
        super().__init__(problem)
        self.path, self.problem = path, problem


def read_overlay_file(path: Path) -> OverlayFile:
    """Read an overlay file.

    Raises
    ------
    OverlayFileError
        If the file cannot be read, is no TOML, has an unknown key, or a value outside its limits.
    """
    try:
        if not path.is_file():
            problem = "is a folder, not a file" if path.is_dir() else "there is no such file"
            raise OverlayFileError(file=path.name, line=None, key=None, problem=problem)
        if path.stat().st_size > LARGEST_FILE_BYTES:
            raise OverlayFileError(
                file=path.name,
                line=None,
                key=None,
                problem=f"larger than {LARGEST_FILE_BYTES:,} bytes: no overlay file",
            )
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise OverlayFileError(file=path.name, line=None, key=None, problem=f"cannot be read: {error}") from None
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
    try:
        table = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # not only the parser's own: also a number of 5,000 digits
        found = re.search(r"line (\d+)", str(error))
        line = int(found.group(1)) if found else None
        raise OverlayFileError(file=file, line=line, key=None, problem=f"not valid TOML: {error}") from None
    try:
        return overlay_from_table(table)
    except _KeyProblem as problem:
        key = ".".join(_key_word(part) for part in problem.path)
        raise OverlayFileError(
            file=file, line=_line_of(text, problem.path), key=key or None, problem=problem.problem
        ) from None


def overlay_from_table(table: Mapping[str, Any]) -> OverlayFile:
    """An overlay from the parsed table, as :func:`overlay_to_table` writes it."""
    _known_keys((), table, TOP_KEYS)
    legs = table.get("leg", [])
    if not isinstance(legs, list) or not legs:
        raise _KeyProblem(("leg",), "an overlay needs at least one [[leg]]")
    built = tuple(_leg(("leg", number), leg) for number, leg in enumerate(legs))
    costs = _table(("costs",), table.get("costs", {}), COST_KEYS)
    name = table.get("name", describe_legs(built))
    if not isinstance(name, str):
        raise _KeyProblem(("name",), f"is {name!r}; it takes a text in quotes")
    made_costs = _build(("costs",), Costs, **costs)
    overlay = _build(
        (),
        Overlay,
        name=name,
        account=table.get("account", "resize"),
        legs=built,
        costs=made_costs,
    )
    return OverlayFile(overlay=overlay, volatility=_volatility(table.get("volatility", {})))


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
    lines = [f"name = {_toml(table['name'])}", f"account = {_toml(table['account'])}"]
    for leg in table["leg"]:
        lines += ["", "[[leg]]", *(f"{key} = {_toml(value)}" for key, value in leg.items())]
    for section in ("costs", "volatility"):
        lines += ["", f"[{section}]", *(f"{key} = {_toml(value)}" for key, value in table[section].items())]
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


def _key_word(part: str | int) -> str:
    """A key as it is shown: tables of a list count from 1, odd characters are escaped, long keys cut."""
    if isinstance(part, int):
        return str(part + 1)
    shown = part if part.isprintable() else repr(part)[1:-1]
    return shown if len(shown) <= 60 else f"{shown[:57]}..."


def _leg(path: tuple[str | int, ...], value: Any) -> Leg:
    given = _table(path, value, LEG_KEYS)
    for needed in ("position", "right", "strike"):
        if needed not in given:
            raise _KeyProblem(path, f"has no {needed}; a leg needs position, right and strike")
    arguments = {("term_months" if key == "term" else key): item for key, item in given.items()}
    arguments["strike"] = _strike((*path, "strike"), given["strike"])
    return _build(path, Leg, **arguments)


def _strike(path: tuple[str | int, ...], value: Any) -> StrikeRule:
    rules = ", ".join(STRIKE_RULES)
    if not isinstance(value, dict) or len(value) != 1:
        raise _KeyProblem(path, f"is {value!r}; it takes one rule, such as {{ percent_of_spot = 95 }}; rules: {rules}")
    ((rule, argument),) = value.items()
    _known_keys(path, value, tuple(STRIKE_RULES))
    return _build(path, STRIKE_RULES[rule], argument)


def _strike_to_table(strike: StrikeRule) -> dict[str, float]:
    for name, rule in STRIKE_RULES.items():
        if type(strike) is rule:
            (only,) = fields(rule)
            return {name: getattr(strike, only.name)}
    raise OverlayError(f"strike rule {strike!r} has no name in an overlay file", field="strike")


def _volatility(value: Any) -> Volatility:
    path: tuple[str | int, ...] = ("volatility",)
    given = _table(path, value, VOLATILITY_KEYS)
    source = given.get("source", "auto")
    if source not in SOURCES:
        raise _KeyProblem((*path, "source"), f"is {source!r}; it takes one of: {', '.join(SOURCES)}")
    for key in ("window", "markup"):
        if key in given and source != "realised":
            raise _KeyProblem((*path, key), 'belongs to realised vol; add source = "realised" or leave it out')
    made: ImpliedSeries | RealisedVolatility | None = None
    if source == "implied":
        made = ImpliedSeries()
    elif source == "realised":
        made = _build(path, RealisedVolatility, **{k: given[k] for k in ("window", "markup") if k in given})
    smile = smile_from_value(given.get("smile", "index"), path=(*path, "smile"))
    quoted = {key: given[key] for key in ("quote", "put_shift", "call_shift") if key in given}
    return _build(path, Volatility, source=made, smile=smile, **quoted)


def smile_from_value(value: Any, *, path: tuple[str | int, ...] = ("smile",)) -> FlatSmile | SSVISmile:
    """A smile from its word, or from a table of its three parameters."""
    if isinstance(value, str) and value in SMILE_LADDER:
        return SMILE_LADDER[value]
    words = ", ".join(SMILE_LADDER)
    if not isinstance(value, dict):
        raise _KeyProblem(path, f"is {value!r}; it takes one of: {words}, or {{ rho = , eta = , gamma = }}")
    _known_keys(path, value, SMILE_KEYS)
    missing = [key for key in SMILE_KEYS if key not in value]
    if missing:
        raise _KeyProblem(path, f"lacks {', '.join(missing)}; a smile of one's own takes rho, eta and gamma")
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
    except _KeyProblem as problem:
        words = problem.problem.replace("{ rho = , eta = , gamma = }", "three numbers RHO,ETA,GAMMA")
        raise OverlayError(f"--smile {words}", field="smile") from None


def _build(path: tuple[str | int, ...], make: Any, *args: Any, **kwargs: Any) -> Any:
    """Make an object, turning its complaint into one that knows its place."""
    try:
        return make(*args, **kwargs)
    except OverlayError as error:
        inside = (
            error.field is not None and error.field != (path[-1] if path else None) and error.field not in STRIKE_RULES
        )
        raise _KeyProblem((*path, error.field) if inside and error.field else path, str(error)) from None


def _table(path: tuple[str | int, ...], value: Any, keys: tuple[str, ...]) -> dict[str, Any]:
    if not isinstance(value, dict):
        raise _KeyProblem(path, f"is {value!r}; it takes a table with keys: {', '.join(keys)}")
    _known_keys(path, value, keys)
    return value


def _known_keys(path: tuple[str | int, ...], table: Mapping[str, Any], keys: tuple[str, ...]) -> None:
    for key in table:
        if key not in keys:
            near = difflib.get_close_matches(key, keys, n=1)
            hint = f"; did you mean {near[0]}?" if near else "."
            raise _KeyProblem((*path, key), f"unknown key{hint} Known here: {', '.join(keys)}")


#: A value that spans more lines than this is not looked through for its place.
LONGEST_VALUE_LINES = 200


def _line_of(text: str, path: tuple[str | int, ...]) -> int | None:
    """Line on which a key path is written, counted from 1; None if it cannot be told.

    The parser itself is asked: the line is the first that names the key and after which the file, cut off
    there, holds the path. So comments, quoted look-alikes and dotted keys need no grammar of our own.
    """
    lines = text.split("\n")
    key = next((part for part in reversed(path) if isinstance(part, str)), None)
    if key is None:
        return None
    for number, line in enumerate(lines):
        if key not in line:
            continue
        for stop in range(number + 1, min(number + LONGEST_VALUE_LINES, len(lines)) + 1):
            try:
                table = tomllib.loads("\n".join(lines[:stop]))
            except (ValueError, RecursionError):
                continue  # cut off inside a value
            if _holds(table, path):
                return _within(lines, key, path, number, stop)
            break
    return None


def _within(lines: list[str], key: str, path: tuple[str | int, ...], first: int, stop: int) -> int:
    """Line inside a value of several lines: for the third table of a list, the third that names the key."""
    naming = [number for number in range(first, stop) if key in lines[number]]
    index = next((part for part in path if isinstance(part, int)), 0)
    in_header = lines[first].lstrip().startswith("[") or len(naming) == 1
    return naming[0 if in_header else min(index, len(naming) - 1)] + 1


def _holds(table: Any, path: tuple[str | int, ...]) -> bool:
    for part in path:
        if isinstance(part, int):
            if not isinstance(table, list) or part >= len(table):
                return False
        elif not isinstance(table, dict) or part not in table:
            return False
        table = table[part]
    return True


def _toml(value: Any) -> str:
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_toml(item)}" for key, item in value.items()) + " }"
    if isinstance(value, str):
        # JSON's escapes are TOML's, but for the delete character, which TOML wants escaped
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    # a number of numpy's would write its type as well
    return repr(value.item() if hasattr(value, "item") else value)
