"""In words: what a replay stands on, and what about it may mislead."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from backtest import ImpliedSeries, Market, Overlay, RealisedVolatility, Replay, SSVISmile, Volatility
from backtest.analytics.performance import years_between
from backtest.engine.checks import long_term_warning
from backtest.volatility import SMILE_LADDER

from .activity import activity_of, activity_words

Array = npt.NDArray[np.float64]

#: Cautions of the trade, said once in every report (defer to licensed advice).
CAUTION = (
    "Option prices here are model prices on past volatilities, not quotes; the past is not the future. Options carry "
    "risks that are described in the risk documents of your exchange; tax and regulation are local. Ask a licensed "
    "adviser before you trade."
)

#: More borrowed money than this share of wealth is remarked on.
MOST_BORROWED = 0.25
#: The first year of a history knows only part of a year of dividends.
DIVIDEND_WINDOW_DAYS = 365


def assumptions_of(found: Replay) -> dict[str, str]:
    """In words, what the numbers stand on."""
    market, volatility, costs = found.market, found.volatility, found.overlay.costs
    source = volatility.source_for(market)
    if isinstance(source, RealisedVolatility):
        markup = "" if source.markup == 1 else f", times {source.markup:g}"
        vol = f"realised close-to-close of {source.window} trading days{markup}, taken as the at-the-money vol"
    else:
        tenors = ", ".join(f"{int(days)}" for days in market.vol_tenor_days)
        read = {"variance swap": "variance-swap quote", "at the money": "at-the-money vol"}[volatility.quote]
        vol = f"implied, {tenors} days, read as {read}"
    smile = volatility.smile
    parameters = ""
    if isinstance(smile, SSVISmile):
        parameters = f" (SSVI rho {smile.rho:g}, eta {smile.eta:g}, gamma {smile.gamma:g})"
    spreads = [f"{costs.half_spread_vol:g} vol points"]
    if costs.half_spread_percent:
        spreads.append(f"{costs.half_spread_percent:g}% of mid")
    if costs.half_spread_min:
        spreads.append(f"{costs.half_spread_min:g} in price")
    cost = "half-spread " + (spreads[0] if len(spreads) == 1 else "the largest of " + ", ".join(spreads))
    if costs.commission:
        cost += f"; commission {costs.commission:g} a contract of {costs.multiplier:g}"
    if costs.settlement_fee:
        cost += f"; settlement fee {costs.settlement_fee:g} a contract"
    if costs.stock_bps:
        cost += f"; stock {costs.stock_bps:g} basis points"
    if costs.borrow_spread:
        cost += f"; cash below zero pays {costs.borrow_spread:g}% a year above the rate"
    account = {
        "resize": "all wealth into whole packages at every roll of the longest leg",
        "cash": "fixed shares, premiums and settlements through a cash account at the riskless rate",
    }[found.overlay.account]
    if found.overlay.portfolio is not None:
        account += f"; {found.overlay.portfolio:,.15g} at inception, options in whole contracts of {costs.multiplier:g}"
    window = found.window
    rate, carry = market.rate[window], market.dividend_yield[window]
    return {
        "volatility": vol,
        "smile": f"{smile.name if smile.name in SMILE_LADDER else 'own'}{parameters}",
        "cost": cost,
        "account": account,
        "settlement": _settlement(found.overlay),
        **({"decided": "at the close of the day before each trade"} if found.overlay.decide_lag else {}),
        "rate": _span(np.expm1(rate)),
        "dividend_yield": _span(np.expm1(carry)),
        **activity_words(activity_of(found)),
    }


def _settlement(overlay: Overlay) -> str:
    close = "at the close of the expiry date (afternoon settlement)"
    at_open = [number for number, leg in enumerate(overlay.legs, start=1) if leg.settlement == "open"]
    if not at_open:
        return close
    morning = "at the open of the expiry date (morning settlement)"
    if len(at_open) == len(overlay.legs):
        return morning
    return f"{morning} for leg {', '.join(map(str, at_open))}, the others {close}"


def _span(values: Array) -> str:
    low, high = (f"{100 * v + 0.0:.2f}%" for v in (values.min(), values.max()))
    return f"{low} throughout" if low == high else f"{low} to {high} a year"


def _crossed_days(found: Replay) -> int:
    """Days on which the highest put bought lies above the lowest call sold: a band turned inside out."""
    puts = [leg.daily_strike for leg in found.legs if leg.leg.right == "put" and leg.signed_ratio > 0]
    calls = [leg.daily_strike for leg in found.legs if leg.leg.right == "call" and leg.signed_ratio < 0]
    if not puts or not calls:
        return 0
    return int(np.count_nonzero(np.max(puts, axis=0) > np.min(calls, axis=0)))


def warnings_of_settings(market: Market, overlay: Overlay, volatility: Volatility) -> list[str]:
    """Those of :func:`warnings_of` that follow from what was agreed and the kind of vols there are."""
    said = []
    if (long_term := long_term_warning(market, overlay, volatility)) is not None:
        said.append(long_term)
    source = volatility.source_for(market)
    if isinstance(source, RealisedVolatility):
        said.append(
            "options are priced off realised volatility; real ones are commonly dearer than the past was volatile"
        )
    elif isinstance(source, ImpliedSeries) and volatility.quote == "at the money":
        said.append(
            "the vol series is read as at-the-money vol; if it is an index of the variance-swap kind, say "
            "--vol-quote variance-swap, or options come out about a fifth too dear in vol"
        )
    return said


def _holding_warnings(found: Replay) -> list[str]:
    """What is not held at all, and what is held on borrowed money."""
    said = []
    legs = [leg for leg in found.legs if leg.leg.held_ratio > 0.0]
    if not legs:
        said.append("no leg is held: the overlay is the hold, whatever the verdict makes of differences of nothing")
    for leg in legs:
        none = int(np.count_nonzero(leg.count == 0.0))
        if none:
            said.append(
                f"the portfolio is too small for one contract of the {leg.label.replace('_', ' ')} on {none} of "
                f"{len(found)} days: its premiums and payoffs on these days were nobody's"
            )
    # the first day's cash lacks the costs that its wealth is counted before
    debt = -found.cash[1:] / found.wealth[1:]
    if debt.size and np.nanmax(debt, initial=0.0) > MOST_BORROWED:
        day = int(np.nanargmax(debt))
        said.append(
            f"cash falls to minus {debt[day]:.0%} of wealth (on {found.dates[day + 1]}): it stands on borrowed "
            "money, which a broker may not lend"
        )
    return said


def warnings_of(found: Replay) -> list[str]:
    """Plain sentences about what may mislead."""
    market = found.market
    said = warnings_of_settings(market, found.overlay, found.volatility)
    paid = np.flatnonzero(market.dividend != 0)
    known_from = market.dates[0] + np.timedelta64(DIVIDEND_WINDOW_DAYS, "D")
    if paid.size and found.dates[0] < known_from and np.ptp(market.dividend_yield) > 0:
        said.append(
            f"dividends are known from {market.dates[0]} only: until {known_from} forwards use less than a year of them"
        )
    if not market.dividend.any():
        said.append("no dividends are known: hold and overlay both go without them")
    if not np.nan_to_num(market.rate).any():
        said.append("no rate is known: cash earns nothing and forwards carry no interest")
    if years_between(found.dates) < 1:
        said.append("less than a year: returns are totals, not annualised")
    for leg in found.legs:
        settled = leg.close_value[~leg.schedule.live]
        if leg.leg.right == "put" and leg.leg.direction > 0 and not (settled > 0).any():
            name = leg.label.replace("_", " ")
            said.append(f"no {name} paid off in this window: it says nothing about protection")
        below = int(np.count_nonzero((leg.leg.direction < 0) & (leg.premium < leg.open_cost)))
        if below:
            said.append(
                f"{below} of {len(leg.premium)} sold options ({leg.label}) brought less than they cost to trade"
            )
    said += _holding_warnings(found)
    if (crossed := _crossed_days(found)) > 0:
        said.append(f"on {crossed} of {len(found)} days the bought put's strike lies above the sold call's")
    if not np.isfinite(found.wealth).all():
        lost = found.dates[int(np.argmax(~np.isfinite(found.wealth)))]
        said.append(f"the overlay loses everything on {lost}: figures after that day do not exist")
    return said
