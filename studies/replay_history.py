"""One overlay on one history -> an answer, and the answer as plain values (C14)."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from backtest import (
    Market,
    Overlay,
    Replay,
    Volatility,
    replay,
    replay_many,
)
from backtest.analytics import Attribution, Mixes, Performance, RollCosts, attribute, mixes, performance, roll_costs
from backtest.analytics.counterparty import Stress, counterparty_stress
from backtest.analytics.margin import Margin, margin
from backtest.analytics.performance import years_between
from backtest.analytics.sale import SaleInstead, sale_instead
from backtest.beside import Counterparty, Sale
from backtest.volatility import SMILE_LADDER

from .activity import activity_of
from .assumptions import assumptions_of, warnings_of
from .results import SCHEMA

Array = npt.NDArray[np.float64]

#: What the sale instead is called among figures and paths. It is no mix that is kept at its share, so resampling,
#: which would draw the charge of its first day many times or never, leaves it out.
SALE = "mix_sale"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SmileRung:
    """The same overlay repriced under one smile of the ladder."""

    replay: Replay
    figures: Performance
    mixes: Mixes
    same_beta_figures: Performance | None
    costs: RollCosts


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Answer:
    """Everything a replay of one overlay says.

    ``figures`` has ``overlay``, ``hold``, ``mix_*``, ``put_only`` and ``call_only``; None where a comparison
    does not exist (an overlay without calls has no ``call_only``). It has ``mix_sale`` where a sale was asked for.
    ``margin`` is None where no leg is sold, ``counterparty`` where none was asked for.
    """

    replay: Replay
    mixes: Mixes
    put_only: Replay | None
    call_only: Replay | None
    figures: dict[str, Performance | None]
    attribution: Attribution
    costs: RollCosts
    ladder: dict[str, SmileRung]
    assumptions: dict[str, str]
    warnings: tuple[str, ...]
    history_notes: tuple[str, ...]
    margin: Margin | None = None
    counterparty: Stress | None = None
    sale: SaleInstead | None = None

    @property
    def used_smile(self) -> str:
        """Name in ``ladder`` of the smile that the answer itself is priced under."""
        return next(name for name, rung in self.ladder.items() if rung.replay is self.replay)

    @property
    def paths(self) -> dict[str, Array]:
        """Growth of 1 of everything in ``figures`` that exists."""
        found = {"overlay": self.replay.wealth, "hold": self.replay.hold}
        found |= {f"mix_{name}": mix.wealth for name, mix in self.mixes.items() if mix is not None}
        found |= {} if self.sale is None else {SALE: self.sale.wealth}
        found |= {n: r.wealth for n, r in (("put_only", self.put_only), ("call_only", self.call_only)) if r is not None}
        return found


def answer(
    market: Market,
    overlay: Overlay,
    *,
    volatility: Volatility | None = None,
    start: object = None,
    end: object = None,
    history_notes: tuple[str, ...] = (),
    counterparty: Counterparty | None = None,
    sale: Sale | None = None,
) -> Answer:
    """Replay an overlay, all its comparisons and the smile ladder; and what is asked beside it.

    Raises
    ------
    BacktestError
        As :func:`backtest.replay_many`.
    """
    volatility = volatility or Volatility()
    smiles = dict(SMILE_LADDER)
    if volatility.smile.name not in smiles:
        smiles["own"] = volatility.smile
    quoted = [replace(volatility, smile=smile) for smile in smiles.values()]
    replays = replay_many(market, [overlay] * len(quoted), volatility=quoted, start=start, end=end)
    ladder = {name: _rung(found) for name, found in zip(smiles, replays, strict=True)}
    main = ladder[volatility.smile.name if volatility.smile.name in ladder else "own"]
    one_sided = {
        right: _one_sided(market, overlay, right, main.replay, volatility=volatility, end=end)
        for right in ("put", "call")
    }
    figures: dict[str, Performance | None] = {"overlay": main.figures, "hold": _figures(main.replay, main.replay.hold)}
    for name, mix in main.mixes.items():
        figures[f"mix_{name}"] = None if mix is None else _figures(main.replay, mix.wealth)
    sold = None if sale is None else _sale(main, sale)
    if sale is not None:
        figures[SALE] = None if sold is None else _figures(main.replay, sold.wealth)
    for right, found in one_sided.items():
        figures[f"{right}_only"] = None if found is None else _figures(main.replay, found.wealth)
    return Answer(
        replay=main.replay,
        mixes=main.mixes,
        put_only=one_sided["put"],
        call_only=one_sided["call"],
        figures=figures,
        attribution=attribute(main.replay),
        costs=main.costs,
        ladder=ladder,
        assumptions=assumptions_of(main.replay),
        warnings=tuple(warnings_of(main.replay)),
        history_notes=history_notes,
        margin=margin(main.replay),
        counterparty=None if counterparty is None else counterparty_stress(main.replay, counterparty),
        sale=sold,
    )


def _rung(found: Replay) -> SmileRung:
    mixed = mixes(found.wealth, hold=found.hold, rate_return=found.rate_return, delta=found.delta)
    same_beta = mixed.same_beta
    return SmileRung(
        replay=found,
        figures=_figures(found, found.wealth),
        mixes=mixed,
        same_beta_figures=None if same_beta is None else _figures(found, same_beta.wealth),
        costs=roll_costs(found),
    )


def _sale(main: SmileRung, sale: Sale) -> SaleInstead | None:
    mix = main.mixes.same_beta
    return sale_instead(
        sale,
        share=None if mix is None else mix.share,
        hold=main.replay.hold,
        rate_return=main.replay.rate_return,
    )


def _figures(found: Replay, wealth: Array) -> Performance:
    return performance(wealth, dates=found.dates, rate_return=found.rate_return, hold=found.hold)


def _one_sided(
    market: Market, overlay: Overlay, right: str, whole: Replay, *, volatility: Volatility, end: object
) -> Replay | None:
    """The overlay's own legs of one right, from the same inception (C10).

    A leg that names one of the other right still sees it, though it is not held.
    """
    legs = tuple(leg for leg in overlay.legs if leg.right == right)
    if all(leg.reference for leg in legs):
        return None
    if len(legs) == len(overlay.legs):
        return whole
    if any(leg.named_legs for leg in legs):
        legs = tuple(leg if leg.right == right else replace(leg, reference=True) for leg in overlay.legs)
    part = replace(overlay, legs=legs, name=f"{right} only")
    return replay(market, part, volatility=volatility, inception=whole.dates[0], end=end)


def summary(found: Answer) -> dict[str, Any]:
    """The summary of C14, version 1, as nested plain values; decimals, not percents."""
    made: dict[str, Any] = {
        "schema": SCHEMA,
        "name": found.replay.overlay.name,
        "inception": found.replay.dates[0],
        "end": found.replay.dates[-1],
        "years": years_between(found.replay.dates),
        "rolls": sum(len(leg.opened) for leg in found.replay.legs),
        "open_legs": sum(int(leg.schedule.live.sum()) for leg in found.replay.legs),
        "assumptions": found.assumptions,
    }
    for name, figures in found.figures.items():
        made[name] = _as_dict(figures)
    for name, mix in found.mixes.items():
        if mix is not None and made[f"mix_{name}"] is not None:
            made[f"mix_{name}"]["share_of_stock"] = mix.share
    if found.sale is not None:
        made[SALE] |= {"share_of_stock": found.sale.share, "charge": found.sale.charge}
    if found.margin is not None:
        made["margin"] = found.margin.as_dict()
    if found.counterparty is not None:
        made["counterparty"] = found.counterparty.as_dict()
    made["activity"] = activity_of(found.replay)
    made["roll_cost"] = found.costs.as_dict()
    made["attribution"] = found.attribution.annual()
    made["attribution_risk_shares"] = found.attribution.risk_shares()
    made["smile_ladder"] = {name: _rung_summary(found, name, rung) for name, rung in found.ladder.items()}
    made["warnings"] = list(found.warnings)
    made["history_notes"] = list(found.history_notes)
    return made


def _as_dict(figures: Performance | None) -> dict[str, Any] | None:
    return None if figures is None else {f.name: getattr(figures, f.name) for f in fields(figures)}


def _rung_summary(found: Answer, name: str, rung: SmileRung) -> dict[str, Any]:
    beaten = rung.same_beta_figures
    return {
        "used": rung.replay is found.replay,
        "annual_return": rung.figures.annual_return,
        "volatility": rung.figures.volatility,
        "sharpe": rung.figures.sharpe,
        "max_drawdown": rung.figures.max_drawdown,
        "beta": rung.figures.beta,
        "mix_same_beta_annual_return": None if beaten is None else beaten.annual_return,
        "mix_same_beta_sharpe": None if beaten is None else beaten.sharpe,
        "net_roll_cost_a_year": rung.costs.net_a_year,
    }


def daily_frame(found: Answer) -> pd.DataFrame:
    """``daily.parquet`` of C14: the replay's own frame with the mixes beside it."""
    frame = found.replay.to_frame().reset_index()
    paths = found.paths
    for place, name in enumerate(name for name in paths if name not in ("overlay", "hold")):
        frame.insert(3 + place, name, paths[name])
    return frame
