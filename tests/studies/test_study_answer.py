"""What a study says of the best of many: worked out again from the daily returns of single replays, in plain loops.

Rung: twin (plain loops over days; scipy's rank correlation and normal law); hand-worked (sentences).
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from backtest import replay
from backtest.analytics.reality_check import RealityCheck
from backtest.analytics.selection import DeflatedSharpe
from backtest.errors import PlanError
from studies.batches import FIGURES, SPAN
from studies.errors import StudyFileError
from studies.expansion import Expansion
from studies.runner import market_of
from studies.study import Study, parse_study
from studies.study_answer import (
    GroupAnswer,
    Stability,
    StudyAnswer,
    overlay_names,
    rank_correlation,
    sentence_of,
    setting_word,
)
from studies.study_folder import run_study

from .small_studies import LEGS, axis, grid, grid_text, store_history

Array = np.ndarray[Any, np.dtype[np.float64]]


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one", first_year=2008, years=4)
    return folder


#: Puts from January, April, ... on are under way on the first day, a day in March; the first overlay is one of them.
PHASES = axis("phase", "leg.1.phase", "[1, 0]")


@pytest.fixture(scope="module", params=["same-beta mix", "hold"], ids=["mix", "hold"])
def found(request: pytest.FixtureRequest, store: Path) -> StudyAnswer:
    head = f'comparison = "{request.param}"\nresamples = 40\nown = {{ put = 97, call = 102, phase = 1 }}'
    return run_study(grid(4, 3, head=head, tail=PHASES), store=store)


def excess_of(found: StudyAnswer, number: int) -> tuple[Array, Array, Any]:
    """Daily excess returns of an overlay and of the hold on the common days, and the days they end on."""
    group = found.plan.groups[0]
    (point,) = Expansion(found.plan.study).many(group.points[number : number + 1])
    one = replay(market_of(found.plan, group), point.overlay, volatility=point.volatility, inception=group.span.first)
    assert len(one.dates) == group.span.days + 1
    own = [one.wealth[t] / one.wealth[t - 1] - 1 - one.rate_return[t] for t in range(1, len(one.dates))]
    hold = [one.hold[t] / one.hold[t - 1] - 1 - one.rate_return[t] for t in range(1, len(one.dates))]
    return np.array(own), np.array(hold), one.dates[1:]


def plain_sharpe(values: Array) -> float:
    return float(values.mean() / values.std(ddof=1) * math.sqrt(252))


def gains(found: StudyAnswer, begin: int, end: int) -> list[float]:
    """Sharpe ratio less the hold's of each overlay over returns ``begin`` to ``end`` of the common days."""
    made = []
    for number in range(found.plan.overlays):
        own, hold, _ = excess_of(found, number)
        made.append(plain_sharpe(own[begin:end]) - plain_sharpe(hold[begin:end]))
    return made


def test_the_walk_forward_chooses_before_and_judges_after(found: StudyAnswer) -> None:
    (group,) = found.groups
    days = found.plan.groups[0].span.days
    _, _, dates = excess_of(found, 0)
    cuts = [days * part // 8 for part in range(9)]
    assert len(group.steps) == 7
    for step, begin, end in zip(group.steps, cuts[1:-1], cuts[2:], strict=True):
        inside, outside = gains(found, 0, begin), gains(found, begin, end)
        chosen = inside.index(max(inside))
        assert step.chosen == chosen
        assert step.inside == pytest.approx(inside[chosen], abs=1e-9)
        assert step.outside == pytest.approx(outside[chosen], abs=1e-9)
        assert step.median_out == pytest.approx(sorted(outside)[11] / 2 + sorted(outside)[12] / 2, abs=1e-9)
        assert step.better_out == sum(value > outside[chosen] for value in outside) / 24
        # the last day of which a return was looked at, and the last on which it was judged
        assert (step.chosen_from, step.chosen_to, step.judged_to) == (group.first, dates[begin - 1], dates[end - 1])
    assert len({step.chosen for step in group.steps}) > 1


def test_the_halves_and_the_decades(found: StudyAnswer) -> None:
    (group,) = found.groups
    days = found.plan.groups[0].span.days
    middle = days * 4 // 8
    _, _, dates = excess_of(found, 0)
    turn = int(np.count_nonzero(dates < np.datetime64("2010-01-01")))
    assert 0 < turn < days
    for stability, cut in ((group.halves, middle), (group.decades[0], turn)):
        first, second = gains(found, 0, cut), gains(found, cut, days)
        np.testing.assert_allclose(stability.first, first, atol=1e-9)
        np.testing.assert_allclose(stability.second, second, atol=1e-9)
        assert stability.rank_correlation == pytest.approx(stats.spearmanr(first, second).statistic, abs=1e-12)
    assert (group.halves.first_name, group.halves.second_name) == ("first half", "second half")
    assert [(one.first_name, one.second_name) for one in group.decades] == [("2000s", "2010s")]


def test_the_best_and_the_reader_s_own(found: StudyAnswer) -> None:
    (group,) = found.groups
    ratios = found.overlays["information_ratio"].to_list()
    assert group.best == ratios.index(max(ratios))
    assert (group.tried, group.ruined, group.rows) == (24, 0, slice(0, 24))
    assert group.own is not None
    assert [found.overlays[name].iloc[group.own] for name in ("put", "call", "phase")] == [97, 102, 1]
    assert (group.history, group.last) == ("one", excess_of(found, 0)[2][-1])
    assert group.check is not None
    assert (group.check.tried, group.check.resamples) == (24, 40)


def test_the_days_are_those_from_the_latest_of_all_first_roll_days_on(found: StudyAnswer) -> None:
    (group,) = found.groups
    market = market_of(found.plan, found.plan.groups[0])
    every = Expansion(found.plan.study).many(found.plan.groups[0].points)
    own = {str(replay(market, one.overlay, volatility=one.volatility).dates[0]) for one in every}
    # by hand: the third Friday of January, and of March the day before Good Friday
    assert own == {"2008-01-18", "2008-03-20"}
    assert str(group.first) == "2008-03-20"
    assert {str(day.date()) for day in found.overlays["inception"]} == {"2008-03-20"}
    assert {str(day.date()) for day in found.overlays["end"]} == {str(market.dates[-1])} == {str(group.last)}


def test_the_deflated_sharpe_ratio_is_that_of_the_paper(found: StudyAnswer) -> None:
    """Bailey and Lopez de Prado (2014), equations for the hurdle and the probability."""
    (group,) = found.groups
    assert group.best is not None
    daily = []
    for number in range(24):
        own, hold, _ = excess_of(found, number)
        share = np.cov(own, hold)[0, 1] / hold.var(ddof=1) if found.plan.study.comparison == "same-beta mix" else 1.0
        difference = own - share * hold
        daily.append(difference.mean() / difference.std(ddof=1))
        if number == group.best:
            best = difference
    normal = stats.norm.ppf
    hurdle = np.std(daily, ddof=1) * (
        (1 - np.euler_gamma) * normal(1 - 1 / 24) + np.euler_gamma * normal(1 - 1 / (24 * np.e))
    )
    ratio, skew, kurtosis = max(daily), stats.skew(best), stats.kurtosis(best) + 3
    spread = math.sqrt(1 - skew * ratio + (kurtosis - 1) / 4 * ratio**2)
    probability = stats.norm.cdf((ratio - hurdle) * math.sqrt(len(best) - 1) / spread)
    assert group.deflated.hurdle == pytest.approx(hurdle, rel=1e-8)
    assert group.deflated.probability == pytest.approx(probability, rel=1e-7)


def test_tables_have_a_row_an_overlay(found: StudyAnswer) -> None:
    blocks = len(found.plan.groups[0].span.edges) - 1
    assert found.overlays.columns.tolist() == ["number", "history", "put", "call", "phase", *SPAN, *FIGURES]
    assert found.periods.columns.tolist() == [
        "number",
        *(f"{name}_{block}" for block in range(1, blocks + 1) for name in ("growth", "total", "square")),
    ]
    assert len(found.overlays) == len(found.periods) == 24
    assert overlay_names(found)[:2] == ["put 96, call 101, phase 1", "put 96, call 101, phase 0"]


@pytest.mark.parametrize("name", ["sharpe", "history", "number", "inception", "information_ratio"])
def test_an_axis_with_the_name_of_a_column_is_refused_before_anything_is_done(name: str) -> None:
    text = grid_text(2, 2).replace("name = 'call'", f"name = '{name}'")
    with pytest.raises(StudyFileError) as refused:
        parse_study(text)
    problem = f"{name} is the name of a column of the results; give the axis another"
    assert str(refused.value) == f"study, line 21, axis.2.name: {problem}"


# ---------------------------------------------------------------- studies with little to say


def little(store: Path, text: str) -> GroupAnswer:
    study: Study = parse_study(f'question = "Which?"\nhistories = ["one"]\nresamples = 20\n{text}')
    (group,) = run_study(study, store=store).groups
    return group


def test_one_overlay(store: Path) -> None:
    group = little(store, LEGS + axis("put", "leg.1.strike.percent_of_spot", "[95]"))
    assert (group.tried, group.best, group.own) == (1, 0, None)
    assert group.deflated.hurdle == 0
    assert math.isnan(group.halves.rank_correlation)
    assert all(step.chosen == 0 and step.better_out == 0 and step.outside == step.median_out for step in group.steps)
    assert sentence_of(group, ["put 95"]).startswith("The only overlay (put 95) can")


def test_nothing_but_ruin(store: Path) -> None:
    group = little(store, LEGS.replace("110", "102") + axis("ratio", "leg.2.ratio", "[60, 61]"))
    assert (group.tried, group.ruined, group.best, group.steps) == (2, 2, None, ())
    assert group.distinguished is None
    assert sentence_of(group, ["a", "b"]) == (
        "No overlay of this study can be compared: none has a return that varies against its comparison."
    )


def test_overlays_that_are_their_own_comparison(store: Path) -> None:
    """Of no option at all nothing is left but the hold."""
    group = little(
        store, LEGS.replace("95 }", "95 }\nratio = 0") + axis("ratio", "leg.2.ratio", "[0, 0.0001]")
    )  # fmt: skip
    assert (group.tried, group.ruined, group.best) == (2, 0, 1)
    assert group.check is not None
    assert group.check.constant == 1


@pytest.mark.parametrize(("end", "days"), [("2008-04-15", 17), ("2008-03-31", 6), ("2008-03-26", 3), ("2008-03-25", 2)])
@pytest.mark.parametrize("resamples", [0, 20])
def test_few_days(store: Path, end: str, days: int, resamples: int) -> None:
    """Fewer returns than a test takes, and then than there are blocks: nothing is claimed of them."""
    text = LEGS + axis("put", "leg.1.strike.percent_of_spot", "[95, 96]") + axis("to", "window.to", f'["{end}"]')
    found = run_study(
        parse_study(f'question = "Which?"\nhistories = ["one"]\nresamples = {resamples}\n{text}'), store=store
    )  # fmt: skip
    (group,) = found.groups
    # Thursday 2008-03-20, the day before Good Friday and so the last before the third Friday
    assert str(group.first) == "2008-03-20"
    assert (found.plan.groups[0].span.days, str(group.last)) == (days, end)
    assert len(found.periods.columns) == 1 + 3 * min(days, 8)
    assert group.distinguished is None
    said = sentence_of(group, ["a", "b"])
    # a line through two returns leaves nothing over
    assert said.endswith(
        "the days are too few." if days > 2 else "none has a return that varies against its comparison."
    )


def test_no_day_at_all(store: Path) -> None:
    text = LEGS + axis("put", "leg.1.strike.percent_of_spot", "[95]") + axis("to", "window.to", '["2008-03-20"]')
    with pytest.raises(PlanError, match=r"^history 'one': no roll date of the longest leg"):
        little(store, text)


# ---------------------------------------------------------------- words


@pytest.mark.parametrize(
    ("first", "second", "expected"),
    [
        ([1, 2, 3, 4], [10, 20, 30, 40], 1.0),
        ([1, 2, 3, 4], [4, 3, 2, 1], -1.0),
        # ranks 1 2 3 4 and 2 1 4 3: 1 - 6 (1 + 1 + 1 + 1) / (4 15)
        ([1, 2, 3, 4], [20, 10, 40, 30], 0.6),
        ([1, 2], [1, 2], math.nan),
        ([1, 1, 1], [1, 2, 3], math.nan),
        ([1, 2, 3], [5, 5, 5], math.nan),
    ],
)
def test_rank_correlation(first: list[float], second: list[float], expected: float) -> None:
    assert rank_correlation(np.array(first, float), np.array(second, float)) == pytest.approx(expected, nan_ok=True)


def answer(
    *, spa: float = 0.01, probability: float = 0.99, tried: int = 1200, best: int | None = 1, check: bool = True
) -> GroupAnswer:
    nan, none = math.nan, np.array([])
    values: dict[str, Any] = dict.fromkeys(("white", "spa_lower", "spa_upper", "best_mean", "best_statistic"), nan)
    drawn = RealityCheck(
        **values, spa_consistent=spa, best=best, best_studentised=best, tried=tried, missing=0, constant=0, days=500,
        resamples=200, block_length=5.0,
    )  # fmt: skip
    same = Stability(first_name="", second_name="", first=none, second=none, rank_correlation=nan)
    return GroupAnswer(
        history="one", first=np.datetime64("2008-01-01"), last=np.datetime64("2010-01-01"), rows=slice(0, tried),
        tried=tried, ruined=0, best=best, own=None, deflated=DeflatedSharpe(hurdle=0.1, probability=probability),
        check=drawn if check else None, steps=(), halves=same, decades=(),
    )  # fmt: skip


CAN, CANNOT = "The best of 1,200 (b) can be told from luck:", "The best of 1,200 (b) cannot be told from luck:"
FEW = "The best of 1,200 (b) cannot be tested: the days are too few."
LUCK = "a search as wide as this finds one as good by luck with a chance of"
SKILL = "after so many trials the probability that it has any advantage at all is"


@pytest.mark.parametrize(
    ("group", "distinguished", "said"),
    [
        (answer(), True, f"{CAN} {LUCK} 1% and {SKILL} 99%."),
        (answer(spa=0.06), False, f"{CANNOT} {LUCK} 6% and {SKILL} 99%."),
        (
            answer(probability=0.94), False,
            f"{CANNOT} {LUCK} 1% and {SKILL} 94%.",
        ),
        (answer(spa=0.05, probability=0.95), True, f"{CAN} {LUCK} 5% and {SKILL} 95%."),
        (answer(spa=0.0502), False, f"{CANNOT} {LUCK} 5.0% and {SKILL} 99%."),
        (answer(spa=0.049, probability=0.954), True, f"{CAN} {LUCK} 4.9% and {SKILL} 95.4%."),
        (answer(probability=0.9459), False, f"{CANNOT} {LUCK} 1% and {SKILL} 94.6%."),
        # never rounded to certainty
        (answer(spa=0.005, probability=0.9999), True, f"{CAN} {LUCK} 0.5% and {SKILL} over 99%."),
        (answer(spa=0.9999, probability=0.0001), False, f"{CANNOT} {LUCK} over 99% and {SKILL} under 0.1%."),
        # no resample of 200 was as good
        (answer(spa=0.0), True, f"{CAN} {LUCK} under 0.5% and {SKILL} 99%."),
        (answer(check=False), True, f"{CAN} {SKILL} 99%."),
        # days too few to be resampled are too few for any claim
        (answer(spa=math.nan, probability=0.99), None, FEW),
        (answer(probability=math.nan, spa=0.5), False, f"{CANNOT} {LUCK} 50%."),
        (answer(check=False, probability=math.nan), None, FEW),
        (answer(tried=1, best=0), True, f"The only overlay (a) can be told from luck: {LUCK} 1% and {SKILL} 99%."),
    ],
)  # fmt: skip
def test_the_sentence_says_what_the_figures_do(group: GroupAnswer, distinguished: bool | None, said: str) -> None:
    assert group.distinguished is distinguished
    assert sentence_of(group, ["a", "b"]) == said


@pytest.mark.parametrize(
    ("value", "word"),
    [(95, "95"), (95.0, "95"), (0.5, "0.5"), ("quarter", "quarter"), (np.float64(102.5), "102.5"), (np.int64(7), "7")],
)
def test_a_setting_in_words(value: object, word: str) -> None:
    assert setting_word(value) == word


def test_the_settings_of_a_group_stand_beside_its_history(store: Path) -> None:
    head, tail = "resamples = 0", axis("from", "window.from", '["2008-01-01", "2009-06-01"]')
    found = run_study(grid(2, 2, head=head, tail=tail), store=store)
    assert [group.rows for group in found.groups] == [slice(0, 4), slice(4, 8)]
    for group, start in zip(found.groups, ("2008-01-01", "2009-06-01"), strict=True):
        mine: pd.DataFrame = found.overlays.iloc[group.rows]
        assert set(mine["from"]) == {start}
        assert set(mine["inception"]) == {pd.Timestamp(group.first)}
        assert mine["information_ratio"].idxmax() == group.best
        assert group.check is None
