"""The days on which the overlays of a study stand: the same ones for all of one history and one window.

Rung: identity (rows that must agree to the bit, whatever rolls); twin (each overlay replayed by itself from its own
first roll day; the slow twin of plain loops where options are under way on the first day); hand-worked (first days,
edges, the hold).
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from backtest import Leg, Market, Overlay, PercentOfSpot, Volatility, replay
from backtest.analytics.block_length import optimal_block_length
from backtest.engine.result import Replay
from data_loaders.store import read_history
from studies import runner
from studies.batches import FIGURES, columns_of, common_span, replay_batch
from studies.expansion import Expansion, Point, points
from studies.runner import Group, StudyPlan, market_of, plan_study, run_plan
from tests.reference.slow_prices import history_from_frame
from tests.reference.slow_twin import replay_slowly

from .small_studies import LEGS, axis, store_history
from .test_batches import AXES, study_of


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one", years=4)
    return folder


def own_replays(plan: StudyPlan, group: Group) -> list[Replay]:
    """Every overlay of a group replayed by itself from its own first roll day on, as if it were the only one."""
    market = market_of(plan, group)
    return [
        replay(market, point.overlay, volatility=point.volatility, start=point.start, end=point.end)
        for point in Expansion(plan.study).many(group.points)
    ]


def rows_of(group: Group) -> slice:
    return slice(group.first_row, group.first_row + len(group.points))


# ---------------------------------------------------------------- the same days for all


def test_every_overlay_of_a_window_stands_on_the_same_days(store: Path) -> None:
    plan = plan_study(study_of(LEGS + AXES, comparison="same-beta mix"), store=store)
    columns = run_plan(plan).columns
    assert len(plan.groups) == 2
    # by hand: a put that rolls by the quarter begins in March or September, a call that does by the half year in June
    # or December, on the third Friday; in June 2008 a storm closes this market from Tuesday the 17th to that Friday
    starts, firsts = ("2008-01-01", "2009-07-01"), (["2008-03-20", "2008-06-16"], ["2009-09-18", "2009-12-18"])
    for group, start, hand in zip(plan.groups, starts, firsts, strict=True):
        own = np.unique([found.dates[0] for found in own_replays(plan, group)])
        assert [str(day) for day in own] == hand
        assert group.span.first == own[-1]
        assert group.span.last == market_of(plan, group).dates[-1]
        assert np.unique(columns["inception"][rows_of(group)]).tolist() == [group.span.first]
        assert np.unique(columns["end"][rows_of(group)]).tolist() == [group.span.last]
        assert columns["inception"][rows_of(group)].min() >= np.datetime64(start)


def hold_by_hand(days: pd.DataFrame) -> dict[str, float]:
    """A close over the one before, the day's dividend put into shares at that close (C10); its figures by C11."""
    wealth, excess = [1.0], []
    for (_, before), (_, after) in pairwise(days.iterrows()):
        grown = after["close"] / before["close"] * (1.0 + after["dividend"] / after["close"])
        passed = (after.name - before.name).days / 365.0
        excess.append(grown - (1.0 + before["rate"]) ** passed)
        wealth.append(wealth[-1] * grown)
    years = (days.index[-1] - days.index[0]).days / 365.25
    return {
        "hold_annual_return": wealth[-1] ** (1.0 / years) - 1.0,
        "hold_volatility": np.std([after / before - 1.0 for before, after in pairwise(wealth)], ddof=1) * 252**0.5,
        "hold_sharpe": np.mean(excess) / np.std(excess, ddof=1) * 252**0.5,
        "hold_max_drawdown": min(value / max(wealth[: day + 1]) - 1.0 for day, value in enumerate(wealth)),
    }


@pytest.mark.parametrize(("batch", "batches"), [(7, 14), (runner.BATCH, 2)])
def test_the_hold_is_the_same_in_all_rows_to_the_last_bit(
    store: Path, monkeypatch: pytest.MonkeyPatch, batch: int, batches: int
) -> None:
    """Nothing of an overlay shows in the hold beside it: not its rolls, its account, its vol, nor its batch."""
    monkeypatch.setattr("studies.runner.BATCH", batch)
    lines = [
        axis("roll", "leg.1.roll", '["month", "quarter", "year"]'),
        axis("shift", ["leg.1.shift_days", "leg.2.shift_days"], "[-3, 0, 5, 10]"),
        axis("account", "account", '["resize", "cash"]'),
        axis("vol", "volatility.source", '["implied", "realised"]'),
        axis("from", "window.from", '["2008-01-01", "2009-07-01"]'),
    ]
    plan = plan_study(study_of(LEGS + "".join(lines), comparison="hold"), store=store)
    columns = run_plan(plan).columns
    assert (len(plan.groups), len(plan.batches)) == (2, batches)
    frame = read_history(store, "one").frame
    for group in plan.groups:
        hand = hold_by_hand(frame.loc[str(group.span.first) : str(group.span.last)])
        assert set(hand) == {name for name in FIGURES if name.startswith("hold_")}
        for name, value in hand.items():
            values = columns[name][rows_of(group)].astype(np.float64)
            assert len(values) == 48
            assert np.unique(values.view(np.uint64)).size == 1, name
            assert values[0] == pytest.approx(value, abs=1e-12), name
        # each from its own first roll day on would be beside another hold
        own = own_replays(plan, group)
        assert len({found.dates[0] for found in own}) == len({found.hold[-1] for found in own}) > 8
        assert max(found.dates[0] for found in own) == group.span.first
    one, other = (columns["hold_annual_return"][group.first_row] for group in plan.groups)
    assert one != other


# ---------------------------------------------------------------- spans


def frame_from(first: str, days: int) -> pd.DataFrame:
    index = pd.bdate_range(first, periods=days, name="date")
    rng = np.random.default_rng(3)
    close = 100 * np.exp(np.cumsum(rng.normal(0, 0.01, days)))
    return pd.DataFrame({"close": close, "vol": 0.2}, index=index)


def market_from(first: str, days: int) -> Market:
    return Market.from_frame(frame_from(first, days), rate=0.02)


def put(roll: str, **more: object) -> Leg:
    return Leg(position="long", right="put", roll=roll, strike=PercentOfSpot(95), **more)  # type: ignore[arg-type]


def point(*legs: Leg) -> Point:
    return Point(overlay=Overlay(legs=legs), volatility=Volatility())


def test_the_common_days_begin_with_the_last_inception_and_are_cut_at_decades() -> None:
    # from Monday 2009-06-01: a monthly overlay begins on Friday 2009-06-19, a yearly one on 2009-12-18
    market = market_from("2009-06-01", 600)
    span = common_span(market, [point(put("month")), point(put("year"))], comparison="hold")
    assert (str(span.first), str(span.last)) == ("2009-12-18", str(market.dates[-1]))
    days = int(np.count_nonzero(market.dates > span.first))
    assert span.days == days
    # 8 equal parts, and 9 weekday returns (12-21 to 12-31) before the first one over a day of 2010
    equal = [days * part // 8 for part in range(9)]
    assert span.edges.tolist() == sorted({*equal, 9})
    assert [span.edges[place] for place in span.equal] == equal
    assert span.decades == (("2000s", 0, 1), ("2010s", 1, 9))


def test_the_block_length_is_the_longest_of_the_differences_over_the_common_days() -> None:
    market = market_from("2009-06-01", 600)
    asked = [point(put("month")), point(put("year")), point(put("quarter", ratio=2.0))]
    span = common_span(market, asked, comparison="hold")
    lengths = []
    for one in asked:
        found = replay(market, one.overlay)
        difference = np.diff(found.wealth) / found.wealth[:-1] - np.diff(found.hold) / found.hold[:-1]
        lengths.append(optimal_block_length(difference[-span.days :]))
    assert span.block_length == pytest.approx(max(lengths), rel=1e-9)
    assert max(lengths) > 1.0


@pytest.mark.parametrize("at_once", [1, 2, 500])
def test_how_many_are_asked_at_once_does_not_matter(monkeypatch: pytest.MonkeyPatch, at_once: int) -> None:
    market = market_from("2009-06-01", 600)
    asked = [point(put("month")), point(put("year")), point(put("quarter", ratio=2.0))]
    whole = common_span(market, asked, comparison="same-beta mix")
    monkeypatch.setattr("studies.batches.ASKED_AT_ONCE", at_once)
    part = common_span(market, asked, comparison="same-beta mix")
    assert (part.first, part.last, part.block_length) == (whole.first, whole.last, whole.block_length)
    np.testing.assert_array_equal(part.edges, whole.edges)


def test_options_are_under_way_on_a_first_day_that_is_no_roll_day() -> None:
    """A stub (C3): the option that the rule would hold by then, opened that day at that day's strike and price."""
    frame = frame_from("2009-06-01", 600)
    market = Market.from_frame(frame, rate=0.02)
    span = common_span(market, [point(put("month")), point(put("year"))], comparison="hold")
    # by the quarter from January on: its own first roll day would be 2009-07-17
    both = [point(put("month")), point(put("quarter", phase=1), put("month", ratio=0.5))]
    first, held = "2009-12-18", ["2010-01-15", "2010-04-16", "2010-07-16"]
    columns, _ = replay_batch(market, both, span, comparison="hold", draws=None)
    assert [str(day) for day in columns["inception"]] == [str(span.first)] * 2 == [first] * 2
    day = span.first.item()
    twin = replay_slowly(history_from_frame(frame, rate=0.02), both[1].overlay, Volatility(), inception=day)
    # by hand: what the leg holds, and until when
    rolls = [row for row in twin.rolls if row["leg"] == "put_1"][:3]
    assert [str(row["opened"]) for row in rolls] == [first, *held[:2]]
    assert [str(row["expiry"]) for row in rolls] == held
    assert rolls[0]["strike"] == pytest.approx(0.95 * frame["close"][first], rel=1e-14)
    years = (twin.days[-1] - twin.days[0]).days / 365.25
    assert columns["annual_return"][1] == pytest.approx(twin.wealth[-1] ** (1 / years) - 1, abs=1e-12)
    deepest = min(value / max(twin.wealth[: at + 1]) - 1 for at, value in enumerate(twin.wealth))
    assert columns["max_drawdown"][1] == pytest.approx(deepest, abs=1e-12)
    for block, (begin, end) in enumerate(pairwise(span.edges.tolist()), start=1):
        assert columns[f"growth_{block}"][1] == pytest.approx(twin.wealth[end] / twin.wealth[begin], rel=1e-12)
    # and it changes nothing of the one beside it
    alone, _ = replay_batch(market, both[:1], span, comparison="hold", draws=None)
    for name in columns_of(span):
        np.testing.assert_array_equal(columns[name][:1], alone[name], err_msg=name)


@pytest.mark.parametrize(
    ("late", "begins"),
    [
        # from Monday 2009-06-01 on: third Fridays of December, and of June a week later; then 40 weekdays on
        (put("year"), "2009-12-18"),
        (put("month", shift_days=5), "2009-06-26"),
        (put("month", roll_day="last trading day"), "2009-06-30"),
        (put("days", every=100, phase=40), "2009-07-27"),
    ],
    ids=["roll", "shift", "roll day", "days"],
)
def test_an_overlay_that_begins_after_the_common_days_is_an_error(late: Leg, begins: str) -> None:
    """The plan did not allow for it: it would stand on days on which it had not begun."""
    market = market_from("2009-06-01", 600)
    span = common_span(market, [point(put("month"))], comparison="hold")
    says = f"^an overlay's own first roll day is {begins}, and the common days begin on 2009-06-19$"
    with pytest.raises(AssertionError, match=says):
        replay_batch(market, [point(put("month")), point(late)], span, comparison="hold", draws=None)
    # a leg that opens later than the one by which the package is resized is no reason
    replay_batch(market, [point(put("year", ratio=0.0), put("month"))], span, comparison="hold", draws=None)


def test_an_overlay_that_decides_a_day_before_begins_later_where_the_roll_is_the_first_day() -> None:
    market = market_from("2009-06-19", 600)  # a Friday of rolls
    asked = [point(put("month"))]
    lagging = Point(overlay=Overlay(legs=(put("month"),), decide_lag=1), volatility=Volatility())
    span = common_span(market, asked, comparison="hold")
    assert str(span.first) == "2009-06-19"
    assert str(common_span(market, [*asked, lagging], comparison="hold").first) == "2009-07-17"
    with pytest.raises(AssertionError, match="own first roll day is 2009-07-17"):
        replay_batch(market, [lagging], span, comparison="hold", draws=None)


DAYS = """
[[overlay.leg]]
position = "long"
right = "put"
roll = "days"
every = 63
phase = 62
shift_days = 10
strike = { percent_of_spot = 95 }
"""
REALISED = '[overlay.volatility]\nsource = "realised"\n'


@pytest.mark.parametrize(
    ("legs", "lines", "rare"),
    [
        (LEGS, axis("roll", "leg.1.roll", '["month", "quarter", "year"]'), "roll == 'year'"),
        (LEGS, axis("phase", "leg.1.phase", "[0, 1, 2]"), "phase == 0"),
        (LEGS, axis("shift", ["leg.1.shift_days", "leg.2.shift_days"], "[-3, 0, 3]"), "shift == 3"),
        # of the quarterly put nothing is held in the others: the monthly call opens first
        (LEGS, axis("ratio", "leg.1.ratio", "[0, 0.5]"), "ratio == 0.5"),
        (LEGS, axis("vol", "volatility.source", '["implied", "realised"]'), "vol == 'realised'"),
        # a vol of 63 days is there before the roll of June 2008, one of 250 is not
        (LEGS, REALISED + axis("window", "volatility.window", "[63, 250]"), "window == 250"),
        (LEGS, axis("day", "leg.1.roll_day", '["third friday", "last trading day"]'), "day == 'last trading day'"),
        (LEGS, axis("before", "leg.1.close_before", "[0, 3]"), "before == 0"),
        # of a put that is never held, as of one of ratio nought
        (LEGS, axis("reference", "leg.1.reference", "[false, true]"), "reference == 'false'"),
        # by days from the file's first: on its 73rd by 100, on its 10th by 63
        (DAYS, axis("every", "leg.1.every", "[63, 100]"), "every == 100"),
        # on the first day itself, for which a decision of the day before is not there
        (DAYS.replace("62", "53"), axis("lag", "decide_lag", "[0, 1]"), "lag == 1"),
    ],
    ids=["roll", "phase", "shift", "ratio", "source", "window", "roll day", "close before", "reference", "days", "lag"],
)
def test_the_common_days_allow_for_every_overlay_of_the_study(store: Path, legs: str, lines: str, rare: str) -> None:
    """An overlay for each first day is asked when the study is planned, also where one alone begins so late."""
    many = axis("put", "leg.1.strike.percent_of_spot", "{ from = 60, to = 99, step = 1 }")
    study = study_of(f'leave_out = ["{rare} and put != 83"]\n' + legs + many + lines, comparison="hold")
    plan = plan_study(study, store=store)
    (group,) = plan.groups
    begins = np.array([found.dates[0] for found in own_replays(plan, group)])
    last = np.flatnonzero(begins == begins.max())
    assert len(last) == 1
    assert group.span.first == begins.max()
    assert set(run_plan(plan).columns["inception"].tolist()) == {begins.max().item()}
    # it is not among those that are asked for the block length, spread evenly over all
    assert last[0] not in np.linspace(0, len(begins) - 1, 12).astype(int)


def test_not_every_overlay_is_asked_when_a_study_is_planned(store: Path) -> None:
    many = axis("put", "leg.1.strike.percent_of_spot", "{ from = 80, to = 99, step = 1 }")
    ratios = axis("ratio", "leg.1.ratio", "{ from = 0, to = 1, step = 0.1 }")
    smiles = axis("smile", "volatility.smile", '["flat", "mild", "index", "steep"]')
    study = study_of(LEGS + many + ratios + smiles, comparison="hold")
    # of 880: one with a put and one without, and the 12 for the block length
    assert len(points(study)) == 880
    assert len(runner._asked(study, points(study))) <= 14
