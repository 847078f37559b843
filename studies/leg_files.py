"""One ``[[leg]]`` of an overlay file and the tables in it (strike, early, gate) -> a Leg, and back."""

from __future__ import annotations

import re
from dataclasses import fields
from typing import Any

from backtest import Adjusted, Early, Gate, Leg, OverlayError
from backtest.gates import GATE_KEYS, gate_from_table, gate_to_table
from backtest.strikes import STRIKE_KEYS, STRIKE_RULES, StrikeRule, strike_from_table, strike_to_table

from .toml_text import KeyPath, KeyProblem, known_keys, table_of

LEG_KEYS = (
    "position", "right", "strike", "roll", "roll_day", "every", "term", "term_days", "phase", "shift_days",
    "close_before", "settlement", "ratio", "ladder", "stagger", "early", "gate", "reference",
)  # fmt: skip
EARLY_KEYS = tuple(f.name for f in fields(Early))
#: Keys that follow from the roll unless they are given.
TERM_KEYS = ("term", "term_days")
#: A word for what is else left out (no gate, no early rules, no lowest strike), for the values of an axis.
NONE = "none"
#: Keys that may be left out and have no value then.
OPTIONAL = {
    "leg": ("every", *TERM_KEYS, "early", "gate"),
    "strike": tuple(f.name for f in fields(Adjusted) if f.default is None),
    "early": tuple(f.name for f in fields(Early) if f.default is None),
    "volatility": ("half_life",),
}

#: Fields of a leg by the key that they have in a file, where the two differ.
_FIELDS = {"term": "term_months"}
_LEG_NUMBER = re.compile(r"leg (\d+)")


def leg_from_value(value: Any, number: int) -> Leg:
    """A leg from its table, the ``number``-th ``[[leg]]`` counted from 0."""
    path: KeyPath = ("leg", number)
    given = without_none(table_of(path, value, LEG_KEYS), OPTIONAL["leg"])
    for needed in ("position", "right", "strike"):
        if needed not in given:
            raise KeyProblem(path, f"has no {needed}; a leg needs position, right and strike")
    arguments = {_FIELDS.get(key, key): item for key, item in given.items()}
    arguments["strike"] = strike_from_value((*path, "strike"), given["strike"])
    if "early" in given:
        arguments["early"] = early_from_value((*path, "early"), given["early"])
    if "gate" in given:
        arguments["gate"] = gate_from_value(given["gate"], path=(*path, "gate"))
    return build(path, Leg, **arguments)


def leg_to_table(leg: Leg) -> dict[str, Any]:
    """Every field of a leg that plays a part with its roll, plain values only; no early rules or gate, no key."""
    values: dict[str, Any] = {key: getattr(leg, _FIELDS.get(key, key)) for key in LEG_KEYS}
    values["strike"] = strike_to_table(leg.strike)
    if leg.roll == "days":
        del values["roll_day"]
    if leg.early is not None:
        told = {key: getattr(leg.early, key) for key in EARLY_KEYS}
        values["early"] = {key: value for key, value in told.items() if value is not None}
    if leg.gate is not None:
        values["gate"] = gate_to_table(leg.gate)
    return {key: value for key, value in values.items() if value is not None}


def strike_from_value(path: KeyPath, value: Any) -> StrikeRule:
    """A strike rule, with what is laid around it, from its table."""
    if isinstance(value, dict):
        known_keys(path, value, STRIKE_KEYS)
    if not isinstance(value, dict) or sum(key in STRIKE_RULES for key in value) != 1:
        rules = ", ".join(STRIKE_RULES)
        raise KeyProblem(path, f"is {value!r}; it takes one rule, such as {{ percent_of_spot = 95 }}; rules: {rules}")
    return build(path, strike_from_table, without_none(value, OPTIONAL["strike"]))


def early_from_value(path: KeyPath, value: Any) -> Early:
    """Early rules from their table."""
    return build(path, Early, **without_none(table_of(path, value, EARLY_KEYS), OPTIONAL["early"]))


def gate_from_value(value: Any, *, path: KeyPath = ("gate",)) -> Gate | None:
    """A gate from its table; None for the word."""
    return None if value == NONE else build(path, gate_from_table, table_of(path, value, GATE_KEYS))


def without_none(table: dict[str, Any], optional: tuple[str, ...]) -> dict[str, Any]:
    """A copy of a table without those of some keys that have the word for nothing."""
    return {key: value for key, value in table.items() if not (value == NONE and key in optional)}


def build(path: KeyPath, make: Any, *args: Any, **kwargs: Any) -> Any:
    """Make an object, turning its complaint into one that knows its place.

    A complaint about a field is at the key of that name below ``path``; one about ``leg 2`` is at that leg.
    """
    try:
        return make(*args, **kwargs)
    except OverlayError as error:
        raise KeyProblem(_place(path, error.field), str(error)) from None


def _place(path: KeyPath, field: str | None) -> KeyPath:
    if field is None or path[-1:] == (field,):
        return path
    leg = _LEG_NUMBER.fullmatch(field)
    return (*path, field) if leg is None else ("leg", int(leg[1]) - 1)
