"""The name of each strike rule in an overlay file: the one place to enter a new one."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields
from typing import Any

from ..errors import OverlayError
from .adjusted import Adjusted
from .linked import Financed, Mirrored
from .percent import Deviations, PercentOfForward, PercentOfSpot
from .solved import Delta, PremiumPercent
from .state import StrikeRule

#: The name of each rule in an overlay file, with its class; the class's first field takes the number.
STRIKE_RULES: dict[str, type[Any]] = {
    "percent_of_spot": PercentOfSpot,
    "percent_of_forward": PercentOfForward,
    "deviations": Deviations,
    "delta": Delta,
    "premium_percent": PremiumPercent,
    "financed_share": Financed,
    "mirrored_leg": Mirrored,
}
#: Further fields of a rule, by the key that they have in a file.
RULE_KEYS: dict[str, dict[str, str]] = {"financed_share": {"of_legs": "legs"}}
#: Keys of what is laid around a rule.
LIMIT_KEYS = tuple(f.name for f in fields(Adjusted) if f.name != "rule")
#: All keys of a strike.
STRIKE_KEYS = (*STRIKE_RULES, *(key for keys in RULE_KEYS.values() for key in keys), *LIMIT_KEYS)


def strike_from_table(table: Mapping[str, Any]) -> StrikeRule:
    """A strike rule from its table in an overlay file.

    Raises
    ------
    OverlayError
        With ``field``: the key that is wrong, or None for the whole.

    Examples
    --------
    >>> strike_from_table({"percent_of_spot": 95})
    PercentOfSpot(percent=95)
    >>> strike_from_table({"delta": 0.25, "ratchet": True}).rule
    Delta(delta=0.25)
    """
    named = [key for key in table if key in STRIKE_RULES]
    if len(named) != 1:
        what = f"names {' and '.join(named)}" if named else "names no rule"
        raise OverlayError(f"{what}; it takes one of: {', '.join(STRIKE_RULES)}")
    (name,) = named
    extra = RULE_KEYS.get(name, {})
    for key in table:
        if key not in (name, *extra, *LIMIT_KEYS):
            owner = next((rule for rule, keys in RULE_KEYS.items() if key in keys), None)
            if owner is None:
                raise OverlayError(f"{key} is no key of a strike", field=key)
            raise OverlayError(f"{key} belongs to {owner}; leave it out beside {name}", field=key)
    arguments = {field: table[key] for key, field in extra.items() if key in table}
    rule: StrikeRule = STRIKE_RULES[name](table[name], **arguments)
    limits = {key: table[key] for key in LIMIT_KEYS if key in table}
    return Adjusted(rule=rule, **limits) if limits else rule


def strike_to_table(rule: StrikeRule) -> dict[str, Any]:
    """The table of a strike rule, limits that are not set left out.

    Raises
    ------
    OverlayError
        If the rule is not in the catalogue.
    """
    inner: Any = rule.rule if isinstance(rule, Adjusted) else rule
    for name, kind in STRIKE_RULES.items():
        if type(inner) is kind:
            first = next(iter(kind.__dataclass_fields__))
            table: dict[str, Any] = {name: getattr(inner, first)}
            for key, field in RULE_KEYS.get(name, {}).items():
                value = getattr(inner, field)
                table[key] = list(value) if isinstance(value, tuple) else value
            if isinstance(rule, Adjusted):
                limits = {key: getattr(rule, key) for key in LIMIT_KEYS}
                table |= {key: value for key, value in limits.items() if value is not None and value is not False}
            return table
    raise OverlayError(f"strike rule {rule!r} has no name in an overlay file", field="strike")
