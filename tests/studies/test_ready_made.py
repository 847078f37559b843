"""Ready-made overlays: each file says what it is for, replays on the demo's market, and does there what its name says.

Rung: identity (what a rule promises, asked of every option of a replay of 25 years).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import studies
from backtest import Market, Replay, Volatility, replay
from backtest.analytics.payoff import payoff_at_expiry
from backtest.calendar import BY_DELTA, BY_PROFIT
from data_loaders import History
from studies.errors import OverlayFileError, ResultsError
from studies.overlay_files import OverlayFile, overlay_to_toml, parse_overlay
from studies.overlay_words import overlay_lines
from studies.ready_made import (
    READY_MADE,
    overlay_text,
    ready_made_lines,
    ready_made_text,
    what_it_does,
    write_new,
)

FOLDER = Path(studies.__file__).parent / "overlays"
#: Kind of the demo's vols.
VOLATILITY = Volatility(quote="variance swap")


@pytest.fixture(scope="module")
def market(demo_history: History) -> Market:
    return Market.from_frame(demo_history.frame)


def agreed(name: str) -> OverlayFile:
    return parse_overlay(ready_made_text(name), file=name)


def replayed(name: str, market: Market) -> Replay:
    return replay(market, agreed(name).overlay, volatility=VOLATILITY)


# ---------------------------------------------------------------- the files


def test_the_list_is_the_folder() -> None:
    assert sorted(f"{name}.toml" for name in READY_MADE) == sorted(path.name for path in FOLDER.iterdir())
    assert len(set(READY_MADE)) == len(READY_MADE) == 15
    # words that mean something else after `rollband overlays`
    assert not {"list", "show", "check"} & set(READY_MADE)


@pytest.mark.parametrize("name", READY_MADE)
def test_a_file_says_what_it_is_for_and_what_to_change(name: str) -> None:
    lines = ready_made_text(name).splitlines()
    head = [line for line in lines if line.startswith("#")]
    assert lines[: len(head)] == head  # all of it at the top
    assert 2 <= len(head) <= 3
    assert head[1].startswith("# To change: ")
    assert len(what_it_does(ready_made_text(name))) <= 84
    assert max(map(len, lines)) <= 120
    assert lines[len(head)].startswith('name = "')


@pytest.mark.parametrize("name", READY_MADE)
def test_a_file_is_an_overlay_that_can_be_written_told_and_drawn(name: str) -> None:
    found = agreed(name)
    assert parse_overlay(overlay_to_toml(found.overlay, found.volatility)) == found
    assert len(overlay_lines(found)) >= len(found.overlay.legs)
    payoff = payoff_at_expiry(found.overlay, found.volatility)
    assert np.isfinite(payoff.values).all()
    assert [option.flags for option in payoff.options] == [0] * len(found.overlay.legs)


def test_names_of_the_overlays_differ() -> None:
    """A results folder is named after them."""
    assert len({agreed(name).overlay.name for name in READY_MADE}) == len(READY_MADE)


def test_the_list_has_a_line_each() -> None:
    lines = ready_made_lines()
    assert [line.split()[0] for line in lines] == list(READY_MADE)
    width = max(map(len, READY_MADE)) + 2
    assert [line[width:] for line in lines] == [what_it_does(ready_made_text(name)) for name in READY_MADE]


def test_a_name_that_is_none() -> None:
    with pytest.raises(
        OverlayFileError, match=r"^bnd: no ready-made overlay has this name; did you mean band\? All are"
    ):
        ready_made_text("bnd")
    with pytest.raises(OverlayFileError, match=r"^xyzzy: no ready-made overlay has this name; there are: put-only, "):
        overlay_text("xyzzy")
    with pytest.raises(OverlayFileError, match="there is no such file"):
        overlay_text("no.toml")


def test_a_path_is_no_name() -> None:
    for name in ("../overlays/band", "overlays/band", "", "BAND"):
        with pytest.raises(OverlayFileError):
            ready_made_text(name)


def test_a_file_that_is_there_stays(tmp_path: Path) -> None:
    there = tmp_path / "mine.toml"
    write_new(there, "first\n")
    with pytest.raises(ResultsError, match="is there already and stays as it is"):
        write_new(there, "second\n")
    assert there.read_text(encoding="utf-8") == "first\n"
    (tmp_path / "link.toml").symlink_to(tmp_path / "nowhere.toml")
    with pytest.raises(ResultsError, match="is there already"):
        write_new(tmp_path / "link.toml", "through it\n")
    assert not (tmp_path / "nowhere.toml").exists()
    with pytest.raises(ResultsError, match=r"cannot write .*no_folder"):
        write_new(tmp_path / "no_folder" / "mine.toml", "first\n")


# ---------------------------------------------------------------- on the demo's market


@pytest.mark.parametrize("name", READY_MADE)
def test_it_replays_on_the_demo_market(name: str, market: Market) -> None:
    made = replayed(name, market)
    assert np.isfinite(made.wealth).all()
    assert (made.wealth > 0).all()
    assert len(made) > 5000
    for leg in made.legs:
        assert len(leg.opened) >= 15
        assert np.isfinite(leg.profit).all()


def test_band_strikes(market: Market) -> None:
    made = replayed("band", market)
    put, call = made.legs
    np.testing.assert_allclose(put.strike, 0.95 * made.spot[put.opened], rtol=1e-15)
    np.testing.assert_allclose(call.strike, 1.10 * made.spot[call.opened], rtol=1e-15)
    assert 2.9 < len(call.strike) / len(put.strike) < 3.1


@pytest.mark.parametrize("name", ["zero-cost-band", "put-spread-and-call"])
def test_nothing_is_paid_at_any_roll(name: str, market: Market) -> None:
    made = replayed(name, market)
    paid = sum(leg.signed_ratio * leg.premium + leg.leg.ratio * leg.open_cost for leg in made.legs)
    solved = made.legs[-1].strike_flags == 0
    assert solved.sum() > 90
    assert np.abs(paid[solved] / made.spot[made.legs[0].opened][solved]).max() < 1e-10


def test_deltas_and_mirror(market: Market) -> None:
    for leg in replayed("delta-band", market).legs:
        np.testing.assert_allclose(np.abs(leg.delta), 0.25, rtol=1e-10)
    put, call = replayed("mirrored-band", market).legs
    np.testing.assert_allclose(call.strike * put.strike, call.forward**2, rtol=1e-14)


def test_half_of_the_shares_are_covered(market: Market) -> None:
    assert [leg.signed_ratio for leg in replayed("half-covered-band", market).legs] == [1.0, -0.5]


def test_tranches_roll_on_different_days(market: Market) -> None:
    made = replayed("laddered-band", market)
    for right in ("put", "call"):
        tranches = [leg for leg in made.legs if leg.leg.right == right]
        assert sum(leg.leg.ratio for leg in tranches) == pytest.approx(1.0, rel=1e-15)
        days = [set(leg.opened[1:].tolist()) for leg in tranches]
        assert len(days) == 3
        assert sum(map(len, days)) == len(days[0] | days[1] | days[2])


def test_nothing_is_held_into_its_last_week(market: Market) -> None:
    made = replayed("week-before-expiry-band", market)
    for leg in made.legs:
        closed, expiry = made.dates[leg.closed], leg.schedule.expiry_day.astype("datetime64[D]")
        inside = leg.done & (expiry <= made.dates[-1])
        left = np.searchsorted(made.dates, expiry[inside]) - np.searchsorted(made.dates, closed[inside])
        assert set(left.tolist()) == {5}
        assert not leg.schedule.settles.any()
        assert (leg.exit_cost[inside] > 0).any()


def test_a_year_long_put_is_sold_with_nine_months_left(market: Market) -> None:
    made = replayed("one-year-put", market)
    (put,) = made.legs
    opened, closed = made.dates[put.opened], made.dates[put.closed]
    expiry = put.schedule.expiry_day.astype("datetime64[D]")
    full = put.done & ~put.schedule.stub
    months = (expiry.astype("datetime64[M]") - opened.astype("datetime64[M]")).astype(int)[full]
    left = (expiry.astype("datetime64[M]") - closed.astype("datetime64[M]")).astype(int)[full]
    assert (set(months.tolist()), set(left.tolist())) == ({12}, {9})


def test_a_strike_is_not_lowered_while_it_is_under_the_price(market: Market) -> None:
    made = replayed("ratcheting-put", market)
    (put,) = made.legs
    spot = made.spot[put.opened][1:]
    under = put.strike[:-1] < spot
    assert (put.strike[1:][under] >= put.strike[:-1][under]).all()
    lowered_by_rule = under & (0.95 * spot < put.strike[:-1])
    assert lowered_by_rule.any()
    np.testing.assert_array_equal(put.strike[1:][lowered_by_rule], put.strike[:-1][lowered_by_rule])


def test_puts_are_replaced_for_both_reasons(market: Market) -> None:
    (put,) = replayed("early-replacing-put", market).legs
    assert {BY_DELTA, BY_PROFIT} <= set(put.schedule.reason.tolist())


@pytest.mark.parametrize("name", ["trend-gated-put", "low-vol-put"])
def test_puts_are_bought_while_the_gate_is_on(name: str, market: Market) -> None:
    made = replayed(name, market)
    (put,) = made.legs
    first = len(market) - len(made)
    days = put.opened + first
    if name == "trend-gated-put":
        on = [market.spot[day] < market.spot[day - 199 : day + 1].mean() for day in days]
    else:
        on = [market.vol_quotes[0, day] < np.median(market.vol_quotes[0, day - 755 : day + 1]) for day in days]
    assert all(on)
    # and the gate kept some from being bought
    rolls = len(replayed("put-only" if name == "low-vol-put" else "call-only", market).legs[0].opened)
    assert len(days) < 0.8 * rolls
