"""What an overlay file says, in plain words: a line for each leg, and one for each thing that holds for all of them."""

from __future__ import annotations

from backtest import Costs, ImpliedSeries, Overlay, RealisedVolatility, SSVISmile, Volatility
from backtest.beside import WORST_PUT_PAYOFF, Counterparty, Sale
from backtest.volatility.smile import SMILE_LADDER
from backtest.volatility.sources import ImpliedSurface

from .leg_words import gate_sentence, leg_sentence
from .overlay_files import OverlayFile

ACCOUNT_WORDS = {
    "resize": "all wealth into whole packages at every roll of the longest leg",
    "cash": "fixed shares, premiums and settlements through a cash account",
}


def overlay_lines(said: OverlayFile) -> list[str]:
    """The lines of an overlay file's reading, the legs first."""
    overlay = said.overlay
    cost = option_cost_words(overlay.costs)
    lines = [f"leg {number}: {leg_sentence(leg)}; {cost}" for number, leg in enumerate(overlay.legs, start=1)]
    if overlay.gate is not None:
        without = [str(number) for number, leg in enumerate(overlay.legs, start=1) if leg.gate is None]
        lines.append(f"gate of {_legs(without)}: {gate_sentence(overlay.gate)}")
    lines += [f"account: {_account(overlay)}", f"decided: {_decided(overlay)}"]
    lines += ["crossed: a sold call may lie under a bought put"] if overlay.crossed else []
    lines.append(f"volatility: {_volatility(said.volatility)}")
    lines += [f"counterparty: {_counterparty(said.counterparty)}"] if said.counterparty is not None else []
    lines += [f"sale instead: {_sale(said.sale)}"] if said.sale is not None else []
    return lines


def option_cost_words(costs: Costs) -> str:
    """What it costs to trade an option, such as ``costs a half-spread of 0.5 vol points``."""
    spreads = [f"{costs.half_spread_vol:g} vol points"]
    spreads += [f"{costs.half_spread_percent:g}% of mid"] if costs.half_spread_percent else []
    spreads += [f"{costs.half_spread_min:g} in price"] if costs.half_spread_min else []
    said = f"costs a half-spread of {spreads[0] if len(spreads) == 1 else 'the largest of ' + ', '.join(spreads)}"
    said += f"; {costs.commission:g} a contract besides" if costs.commission else ""
    return said + (f"; {costs.settlement_fee:g} a contract when exercised" if costs.settlement_fee else "")


def _account(overlay: Overlay) -> str:
    costs, said = overlay.costs, ACCOUNT_WORDS[overlay.account]
    if overlay.portfolio is not None:
        said += f"; {overlay.portfolio:,.15g} at inception, options in whole contracts of {costs.multiplier:g} shares"
    said += f"; stock traded costs {costs.stock_bps:g} basis points" if costs.stock_bps else ""
    return said + (
        f"; cash below zero pays {costs.borrow_spread:g}% a year over the rate" if costs.borrow_spread else ""
    )


def _decided(overlay: Overlay) -> str:
    return "at the close before the trade" if overlay.decide_lag else "at the close at which it is traded"


def _volatility(volatility: Volatility) -> str:
    said = _source(volatility)
    if volatility.term_structure == "mean reverting":
        said += f"; longer options return to the mean vol at {volatility.kappa:g} a year"
    for right, shift in (("puts", volatility.put_shift), ("calls", volatility.call_shift)):
        said += f"; {right} {shift:+g} vol points" if shift else ""
    return said


def _source(volatility: Volatility) -> str:
    smile, source = volatility.smile, volatility.source
    laid = f"smile {smile.name}"
    if isinstance(smile, SSVISmile) and smile.name not in SMILE_LADDER:
        laid = f"smile of one's own (rho {smile.rho:g}, eta {smile.eta:g}, gamma {smile.gamma:g})"
    if isinstance(source, ImpliedSurface):
        return "the quoted surface, with its own smile"
    if isinstance(source, RealisedVolatility):
        how = "" if source.estimator == "close" else f" ({source.estimator}"
        how += "" if source.half_life is None else f", half-life {source.half_life} days"
        how += f"{')' if how else ''}{'' if source.markup == 1 else f' times {source.markup:g}'}"
        how += f" {source.markup_points:+g} vol points" if source.markup_points else ""
        return f"{laid} on realised vol of {source.window} days{how}"
    words = {"variance swap": "read as a variance-swap quote", "at the money": "read as at-the-money vol"}
    which = "implied vol" if isinstance(source, ImpliedSeries) else "implied vol, or realised where there is none"
    return f"{laid} on {which}, {words[volatility.quote]}"


def _counterparty(counterparty: Counterparty) -> str:
    when = "on the day on which the bought puts are worth most"
    if counterparty.default != WORST_PUT_PAYOFF:
        when = f"on {', '.join(map(str, counterparty.default))}"
    return f"defaults {when} and pays {100 * counterparty.recovery:g}%"


def _sale(sale: Sale) -> str:
    return (
        f"{sale.gain_percent:g}% of the shares' value is gain, taxed at {sale.tax_percent:g}%; selling costs "
        f"{sale.cost_bps:g} basis points"
    )


def _legs(numbers: list[str]) -> str:
    if not numbers:
        return "no leg, as each has its own"
    return f"leg {numbers[0]}" if len(numbers) == 1 else f"legs {', '.join(numbers[:-1])} and {numbers[-1]}"
