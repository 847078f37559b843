"""The coming roll of an overlay as plain values, and told on the terminal."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import pandas as pd
from rich.console import Console
from rich.table import Table

from backtest.engine.coming import ComingLeg, ComingRoll, Holding, LiveOption
from backtest.engine.coming_package import Package, Stretch

from .assumptions import CAUTION, assumptions_of, warnings_of_settings
from .leg_words import gate_words
from .results import SCHEMA, plain
from .terminal import NOT_TO_BE_HAD, percent, ratio

#: Said once, beside the usual caution.
MODEL_VALUES = "Strikes, premiums and values are model values from past vols: check them against live quotes."
#: Finished options of each leg that are told.
LAST_ROLLS = 10
#: Columns of dates, and what these take.
DATED, DATE_LETTERS = ("rolls on", "expires", "opened", "ended"), 10
#: Assumptions of a replay that these numbers stand on.
STANDS_ON = ("volatility", "smile", "cost")


# ---------------------------------------------------------------- plain values


def next_roll(found: ComingRoll, *, history: str, holding: Holding | None = None) -> dict[str, Any]:
    """All that is said about a coming roll, as nested plain values; decimals, not percents, and ISO dates.

    What is ``of_spot`` is for one share and in parts of the newest close; money out of the pocket is below zero.
    """
    overlay, market, package = found.overlay, found.replay.market, found.package
    past = last_rolls(found)
    assumptions = assumptions_of(found.replay)
    told = {
        "schema": SCHEMA,
        "name": overlay.name,
        "history": history,
        "newest": found.newest,
        "spot": found.spot,
        "rate": math.expm1(market.rate[-1]),
        "dividend_yield": math.expm1(market.dividend_yield[-1]),
        "roll": None if package is None else package.date,
        "legs": [_leg(found, leg) for leg in found.legs],
        "package": None if package is None else _package(found, package),
        "holding": None if holding is None else _holding(found, holding),
        "past": past,
        "assumptions": {name: assumptions[name] for name in STANDS_ON},
        "warnings": _warnings(found, holding),
        "caution": f"{MODEL_VALUES} {CAUTION}",
    }
    made: dict[str, Any] = plain(told)
    return made


def _leg(found: ComingRoll, leg: ComingLeg) -> dict[str, Any]:
    agreed, option = leg.leg, leg.option
    gone_by = None if found.package is None else found.package.date
    return {
        "leg": leg.label,
        "position": agreed.position,
        "right": agreed.right,
        "ratio": agreed.held_ratio,
        "roll": leg.roll,
        "is_newest_day": bool(leg.roll == found.newest),
        "expiry": leg.expiry,
        "days": leg.days,
        "gate": None if agreed.gate is None else gate_words(agreed.gate),
        "opens": option is not None,
        "option": None
        if option is None
        else {
            "decided": option.decided,
            "strike": option.strike,
            "strike_of_spot": option.strike / found.spot,
            "flags": list(option.flags),
            "forward": option.forward,
            "vol": option.vol,
            "delta": option.delta,
            "premium": option.premium,
            "cost": option.cost,
            "after_cost": leg.after_cost,
            "cash_of_spot": leg.cash / found.spot,
        },
        "live": None
        if leg.live is None
        else _live(found, leg.live, stays=bool(gone_by is not None and leg.roll > gone_by)),
    }


def _live(found: ComingRoll, live: LiveOption, *, stays: bool) -> dict[str, Any]:
    return {
        "opened": live.opened,
        "expiry": live.expiry,
        "strike": live.strike,
        "strike_of_spot": live.strike / found.spot,
        "value": live.value,
        "delta": live.delta,
        "stays": stays,
    }


def _package(found: ComingRoll, package: Package) -> dict[str, Any]:
    low, high = package.lowest_and_highest
    return {
        "date": package.date,
        "opened": [leg.label for leg in found.rolling],
        "net": found.net,
        "net_of_spot": found.net / found.spot,
        "delta": package.delta,
        "first_expiry": package.expiry,
        "at_model_value": [option.label for option in package.later],
        "against_stock": [_stretch(stretch) for stretch in package.against_stock()],
        "against_cash": [_stretch(stretch) for stretch in package.against_cash()],
        "lowest_of_spot": low / found.spot,
        "highest_of_spot": high / found.spot,
    }


def _stretch(stretch: Stretch) -> dict[str, Any]:
    # no highest price is null
    return {"from": stretch.low, "to": stretch.high, "ahead": stretch.side}


def _holding(found: ComingRoll, holding: Holding) -> dict[str, Any]:
    labels = [leg.label for leg in found.legs]
    return {
        "money": holding.money,
        "shares": holding.shares,
        "multiplier": holding.multiplier,
        "contracts": dict(zip(labels, holding.contracts, strict=True)),
        "cash": dict(zip(labels, holding.cash, strict=True)),
        "net": holding.net,
    }


def last_rolls(found: ComingRoll, most: int = LAST_ROLLS) -> dict[str, dict[str, Any]]:
    """The last finished options of each leg that is held, oldest first, and the sum of what they brought.

    ``profit_of_spot`` is after costs, for one share, in parts of the spot at the open.
    """
    rolls: pd.DataFrame = found.replay.rolls_frame()
    done = rolls[rolls["closed"].notna()]
    told: dict[str, dict[str, Any]] = {}
    for leg in found.legs:
        if leg.leg.held_ratio == 0.0:
            continue
        own = done[done["leg"] == leg.label].tail(most)
        profit = own["profit"] / own["spot_open"]
        told[leg.label] = {
            "rolls": [
                {
                    "opened": opened.date().isoformat(),
                    "closed": closed.date().isoformat(),
                    "strike": strike,
                    "premium": premium,
                    "settled": settled,
                    "profit_of_spot": brought,
                }
                for opened, closed, strike, premium, settled, brought in zip(
                    own["opened"], own["closed"], own["strike"].tolist(), own["premium"].tolist(),
                    own["settled"].tolist(), profit.tolist(), strict=True,
                )
            ],
            "sum_of_spot": float(profit.sum()),
        }  # fmt: skip
    return told


def _warnings(found: ComingRoll, holding: Holding | None) -> list[str]:
    said = warnings_of_settings(found.replay.market, found.overlay, found.replay.volatility)
    legs = [leg for leg in found.legs if leg.leg.held_ratio > 0.0]
    if any(leg.leg.early is not None for leg in legs):
        said.append("early rules may replace an option before its roll date; that is not foreseen here")
    if any(leg.leg.gate is not None for leg in legs):
        said.append("gates are looked at again when the roll is decided; here they stand as they do on the newest day")
    for leg in legs:
        name = leg.label.replace("_", " ")
        if leg.option is not None and leg.leg.direction < 0 and leg.after_cost < 0:
            said.append(f"the {name} that is sold brings less than it costs to trade")
    if holding is not None:
        for leg, count in zip(found.legs, holding.contracts, strict=True):
            if leg.is_opened and count == 0:
                said.append(
                    f"a holding of {holding.money:,.0f} is too small for one contract of {holding.multiplier:g} "
                    f"({leg.label.replace('_', ' ')})"
                )
    if found.overlay.costs.settlement_fee > 0 and found.package is not None:
        said.append("settlement fees are left out of break-evens and end values")
    return said


# ---------------------------------------------------------------- on the terminal


def show_next(console: Console, told: Mapping[str, Any], *, picture: str | None = None) -> None:
    """Print what :func:`next_roll` gives; ``picture`` is the file that was written."""

    def say(text: str, style: str | None = None) -> None:
        console.print(text, style=style, highlight=False, markup=False, soft_wrap=True)

    say("")
    say(f"{told['name']}, on {told['history']}: the coming roll", style="bold")
    say(
        f"Newest data: {told['newest']}, close {told['spot']:,.2f}, rate {percent(told['rate'], 2)}, dividend yield "
        f"{percent(told['dividend_yield'], 2)}. Priced as if nothing moved until each roll."
    )
    say("")
    console.print(_legs_table(told))
    for line in _remarks(told):
        say(line)
    if any(leg["live"] for leg in told["legs"]):
        say("")
        say("Live now", style="bold")
        console.print(_live_table(told))
    if told["package"] is not None:
        say("")
        say(f"Share and options after the roll of {told['roll']}", style="bold")
        for line in _package_lines(told):
            say(f"  {line}")
        say(f"  Picture: {picture or 'not written; --picture FILE.png (or .svg) draws it'}")
    say("")
    say("What the rule's last rolls paid (after costs, in percent of spot at the open)", style="bold")
    for label, past in told["past"].items():
        _show_past(console, label, past)
    say("")
    say("What this stands on", style="bold")
    for what, words in told["assumptions"].items():
        say(f"  {what.replace('_', ' ')}: {words}")
    if told["warnings"]:
        say("Mind", style="bold")
    for warning in told["warnings"]:
        say(f"  {warning}")
    console.print()
    console.print(told["caution"], style="dim", highlight=False, markup=False)


def _legs_table(told: Mapping[str, Any]) -> Table:
    table = _table("", "rolls on", "expires", "strike", "of spot", "vol", "delta", "mid", "after cost")
    for leg in told["legs"]:
        option = leg["option"]
        cells = [NOT_TO_BE_HAD] * 6
        if option is not None:
            cells = [
                f"{option['strike']:,.2f}",
                percent(option["strike_of_spot"]),
                percent(option["vol"]),
                ratio(option["delta"]),
                f"{option['premium']:,.2f}",
                f"{option['after_cost']:,.2f}",
            ]
        table.add_row(_name(leg["leg"]), leg["roll"], leg["expiry"], *cells)
    return table


def _remarks(told: Mapping[str, Any]) -> Iterator[str]:
    """What is worth a word about a leg's coming roll."""
    today = [_name(leg["leg"]) for leg in told["legs"] if leg["is_newest_day"]]
    if today:
        yield f"The newest day is itself a roll date ({', '.join(today)}): that day's roll is shown."
    if not any(leg["opens"] and leg["ratio"] > 0 for leg in told["legs"]):
        yield "By today's data nothing would be opened."
    for leg in told["legs"]:
        name, option = _name(leg["leg"]), leg["option"]
        if option is None:
            yield f"{name}: its gate is off (it opens while {leg['gate']}): by today's data nothing would be opened."
            continue
        if leg["ratio"] == 0:
            yield f"{name}: not held, it only lends its strike and cost."
        if option["flags"]:
            yield f"{name}: {', '.join(option['flags'])}."
        if option["decided"] == told["newest"] != leg["roll"]:
            yield f"{name}: the newest close decides its strike."
    if any(leg["option"] and leg["option"]["decided"] != leg["roll"] for leg in told["legs"]):
        yield "Strikes are decided on the close of the trading day before each roll."


def _live_table(told: Mapping[str, Any]) -> Table:
    table = _table("", "opened", "expires", "strike", "of spot", "worth", "delta", "then")
    for leg in told["legs"]:
        live = leg["live"]
        if live is None:
            continue
        then = "stays live" if live["stays"] else f"ends {leg['roll']}"
        table.add_row(
            _name(leg["leg"]), live["opened"], live["expiry"], f"{live['strike']:,.2f}",
            percent(live["strike_of_spot"]), f"{live['value']:,.2f}", ratio(live["delta"]), then,
        )  # fmt: skip
    return table


def _package_lines(told: Mapping[str, Any]) -> Iterator[str]:
    package, holding = told["package"], told["holding"]
    parts = []
    for leg in told["legs"]:
        if leg["leg"] in package["opened"]:
            verb = "costs" if leg["position"] == "long" else "brings"
            many = "" if leg["ratio"] == 1 else f"{leg['ratio']:.3g} x "
            parts.append(f"{many}{_name(leg['leg'])} {verb} {leg['option']['after_cost']:,.2f}")
    net = _net(package["net"], f"{abs(package['net']):,.2f} a share")
    yield f"{net}, {percent(abs(package['net_of_spot']), 2)} of spot: {', '.join(parts)}"
    if holding is not None:
        opens = {leg["leg"] for leg in told["legs"] if leg["opens"] and leg["ratio"] > 0}
        contracts = [f"{_name(label)}: {count}" for label, count in holding["contracts"].items() if label in opens]
        net = _net(holding["net"], f"{abs(holding['net']):,.0f}")
        yield (
            f"For {holding['money']:,.0f}: {holding['shares']:,.1f} shares; contracts of {holding['multiplier']:g}, "
            f"{', '.join(contracts)}; {net.lower()}"
        )
    yield f"Delta of share and options at the open: {ratio(package['delta'])}"
    later = [_name(label) for label in package["at_model_value"]]
    at = f", {', '.join(later)} at model value under unchanged vols" if later else ""
    yield f"At the first expiry, {package['first_expiry']}{at}:"
    for other, name in (("against_stock", "the share alone"), ("against_cash", "cash")):
        yield f"  against {name}: {stretch_words(package[other], told['spot'])}"
    yield (
        f"  worth {percent(package['lowest_of_spot'])} to {percent(package['highest_of_spot'])} of the newest close, "
        "where the share ends at 60% to 140% of it"
    )


def stretch_words(stretches: Sequence[Mapping[str, Any]], spot: float) -> str:
    """Where the package is ahead and where behind, with break-evens as prices and as moves from today's close.

    Examples
    --------
    >>> stretch_words([{"from": 0.0, "to": 93.0, "ahead": 1}, {"from": 93.0, "to": None, "ahead": -1}], 100.0)
    'ahead below 93.00 (-7.0%), behind above'
    """
    words = {1: "ahead", 0: "level", -1: "behind"}
    if len(stretches) == 1:
        return f"{words[stretches[0]['ahead']]} at every price"
    said = []
    for place, stretch in enumerate(stretches):
        word, end = words[stretch["ahead"]], stretch["to"]
        if end is None or not math.isfinite(end):
            said.append(f"{word} above")
            continue
        until = f"{end:,.2f} ({100 * (end / spot - 1):+.1f}%)"
        said.append(f"{word} {'below' if place == 0 else 'from there to'} {until}")
    return ", ".join(said)


def _show_past(console: Console, label: str, past: Mapping[str, Any]) -> None:
    rolls = past["rolls"]
    if not rolls:
        console.print(f"{_name(label)}: no option has ended yet", highlight=False, markup=False, soft_wrap=True)
        return
    table = _table(_name(label), "opened", "ended", "strike", "premium", "settled or sold", "profit")
    for roll in rolls:
        table.add_row(
            "", roll["opened"], roll["closed"], f"{roll['strike']:,.2f}", f"{roll['premium']:,.2f}",
            f"{roll['settled']:,.2f}", _signed(roll["profit_of_spot"]),
        )  # fmt: skip
    table.add_row("", f"sum of {len(rolls)}", "", "", "", "", _signed(past["sum_of_spot"]), style="bold")
    console.print(table)


def _table(first: str, *titles: str) -> Table:
    # nine columns of prices and dates have to fit 80 letters
    table = Table(box=None, padding=(0, 1, 0, 0), pad_edge=False)
    table.add_column(first, no_wrap=True)
    for title in titles:
        least = DATE_LETTERS if title in DATED else len(max(title.split(), key=len))
        table.add_column(title, justify="right", min_width=least)
    return table


def _name(label: str) -> str:
    return label.replace("_", " ")


def _net(value: float, amount: str) -> str:
    return f"Net {'credit' if value >= 0 else 'debit'} {amount}"


def _signed(value: float) -> str:
    shown = percent(value, 2)
    return f"+{shown}" if value > 0 and shown != percent(0.0, 2) else shown


def picture_title(told: Mapping[str, Any]) -> str:
    """The title of the picture: the overlay's name and the history."""
    return f"{told['name']}, on {told['history']}" if told["name"] else str(told["history"])
