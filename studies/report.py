"""Beyond the headline figures: findings, resampling and verdict of an answer, as a page and as plain values."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from backtest.analytics.performance import daily_excess, years_between
from backtest.analytics.resampling import Inference, independent_payoffs, paired_bootstrap
from backtest.analytics.robustness import BreakEvens, RollDayLuck
from backtest.analytics.roll_costs import payoffs_at_close
from backtest.analytics.verdict import Clause, Difference, Evidence, verdict

from .findings import Findings, find
from .replay_history import SALE, Answer

Array = npt.NDArray[np.float64]

#: Histories drawn unless the user says otherwise: percentile ends are then good to about a twentieth of the interval.
RESAMPLES = 2_000
SEED = 1
NAN = float("nan")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Report:
    """Everything that is said about an answer."""

    answer: Answer
    findings: Findings
    inference: Inference
    clauses: tuple[Clause, ...]
    seed: int


def make_report(
    found: Answer,
    *,
    seed: int = SEED,
    resamples: int = RESAMPLES,
    progress: Callable[[str], None] = lambda step: None,
) -> Report:
    """Work out findings, resampling and verdict; ``progress`` is told what is being done.

    The same answer, seed and number of resamples give the same numbers.

    Raises
    ------
    BacktestError
        If ``resamples`` is under 1.
    """
    findings = find(found, progress=progress)
    inference = infer(found, seed=seed, resamples=resamples, progress=progress)
    return Report(
        answer=found,
        findings=findings,
        inference=inference,
        clauses=verdict(evidence_of(found, findings, inference)),
        seed=seed,
    )


def infer(
    found: Answer, *, seed: int, resamples: int, progress: Callable[[str], None] = lambda step: None
) -> Inference:
    """Overlay, hold and mixes drawn together from the days of the replay (C13)."""
    replay = found.replay
    drawn = {name: path for name, path in found.paths.items() if not (name.endswith("_only") or name == SALE)}
    returns = {name: path[1:] / path[:-1] - 1.0 for name, path in drawn.items()}
    overlay = returns.pop("overlay")
    return paired_bootstrap(
        overlay_returns=overlay,
        hold_excess=daily_excess(replay.hold, replay.rate_return),
        cash=replay.rate_return[1:],
        comparisons=returns,
        rng=np.random.default_rng(seed),
        resamples=resamples,
        progress=lambda done, all_of_them: progress(f"drawing the history again: {done:,} of {all_of_them:,}"),
    )


def evidence_of(found: Answer, findings: Findings, inference: Inference) -> Evidence:
    """The numbers of the verdict; NaN where one cannot be had."""
    own, hold = found.figures["overlay"], found.figures["hold"]
    against_hold, against_mix = (inference.comparisons.get(name) for name in ("hold", "mix_same_beta"))
    headline_return = NAN if own is None or hold is None else own.annual_return - hold.annual_return
    return Evidence(
        years=years_between(found.replay.dates),
        put_payoffs=put_payoffs(found),
        overlay_drawdown=NAN if own is None else own.max_drawdown,
        hold_drawdown=NAN if hold is None else hold.max_drawdown,
        probability_shallower=NAN if against_hold is None else against_hold.probability_shallower,
        return_difference=_difference(against_hold, "annual_return", headline_return),
        sharpe_difference=_difference(against_mix, "sharpe", findings.ladder_gains.get(found.used_smile, NAN)),
        same_delta_difference=_difference(inference.comparisons.get("mix_same_delta"), "sharpe", NAN),
        smile_differences=findings.ladder_gains,
        used_smile=found.used_smile,
        break_even=findings.break_evens.sharpe_all_legs,
        roll_day_differences=findings.luck.sharpe_gain.tolist(),
        roll_day_returns=findings.luck.annual_return.tolist(),
        without_worst=[
            one.sharpe.get("overlay", NAN) - one.sharpe.get("mix_same_beta", NAN)
            for one in findings.without_worst
            if one.left_out is not None
        ],
    )


def put_payoffs(found: Answer) -> int | None:
    """Separate times that the bought put which paid most often paid; None without a bought put.

    Puts of one overlay pay in the same falls, so their counts are not added up.
    """
    counts = [
        independent_payoffs(payoffs_at_close(found.replay, leg))
        for leg in found.replay.legs
        if leg.leg.right == "put" and leg.signed_ratio > 0
    ]
    return max(counts, default=None)


def report_summary(report: Report) -> dict[str, Any]:
    """What a report adds to the summary of C14."""
    inference = report.inference
    return {
        "verdict": [asdict(clause) for clause in report.clauses],
        "inference": {
            "method": "paired stationary bootstrap of daily returns",
            "seed": report.seed,
            "resamples": inference.resamples,
            "level": inference.level,
            "days": inference.days,
            "block_length": inference.block_length,
            "block_lengths": dict(inference.block_lengths),
            "put_payoffs": put_payoffs(report.answer),
            "overlay": asdict(inference.overlay),
            "overlay_less": {name: asdict(one) for name, one in inference.comparisons.items()},
            "reason": inference.reason,
        },
        "roll_day_luck": _luck(report.findings.luck),
        "break_even": _break_evens(report.findings.break_evens),
    }


def _difference(comparison: Any, figure: str, otherwise: float) -> Difference:
    """As resampled; the headline figures' own difference without an interval where nothing was."""
    interval = None if comparison is None else getattr(comparison, figure)
    if interval is None or not np.isfinite(interval.value):
        return Difference(value=otherwise, low=NAN, high=NAN)
    return Difference(value=interval.value, low=interval.low, high=interval.high)


def _luck(luck: RollDayLuck) -> dict[str, Any]:
    made: dict[str, Any] = {"roll_days": len(luck.offsets)}
    for name in ("annual_return", "sharpe", "sharpe_gain", "max_drawdown"):
        values = getattr(luck, name)
        known = values[np.isfinite(values)]
        made[name] = {
            "own": values[0],
            "share_below_own": luck.rank(name) if np.isfinite(values[0]) else None,
            "lowest": known.min() if known.size else None,
            "median": np.median(known) if known.size else None,
            "highest": known.max() if known.size else None,
            "laddered": getattr(luck, f"ladder_{name}", None),
        }
    return made


def _break_evens(turning: BreakEvens) -> dict[str, Any]:
    return {name: asdict(getattr(turning, name)) for name in turning.__slots__}
