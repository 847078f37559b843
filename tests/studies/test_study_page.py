"""The page of a study read back: one file, every section, the figures of its overlays in cells and in its data.

Rung: identity (cells, data and counts are the overlays' figures, rounded or counted here a second time; mixes are
grown day by day) and behaviour (what a page must and must not hold).
"""

from __future__ import annotations

import base64
import hashlib
import json
import math
import re
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from markupsafe import Markup

from backtest import Market, replay
from backtest.analytics import performance
from data_loaders import History
from studies.assumptions import CAUTION
from studies.page.study import build_study_page
from studies.page.study_data import EXPLORED, rounded
from studies.page.study_view import mix_line, one_replay, views_of
from studies.study_answer import StudyAnswer, overlay_names, sentence_of
from studies.study_folder import write_study
from tests.studies.page.conftest import Node, read_page, table_of
from tests.studies.study_pages import (
    CALLS,
    COMMAND,
    LEAKS,
    OWN,
    PUTS,
    ROLLS,
    minus,
    same_ids,
    scripts,
    study_of,
    words_of,
)

SECTIONS = (
    "The answer", "What was tried", "The best and yours", "Over the axes", "What protection cost",
    "One axis at a time", "Does it last?", "How far the search alone explains it", "The overlays", "Cautions",
    "How to run it again",
)  # fmt: skip


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("store")


@pytest.fixture(scope="module")
def found(demo_history: History, store: Path) -> StudyAnswer:
    """Twelve overlays over three axes, with one's own."""
    return study_of(demo_history, store, ROLLS + PUTS + CALLS + OWN)


@pytest.fixture(scope="module")
def page(found: StudyAnswer) -> str:
    return build_study_page(found, command=COMMAND)


@pytest.fixture(scope="module")
def tree(page: str) -> Node:
    return read_page(page)


def number(cell: str) -> float:
    return float(cell.replace("−", "-").rstrip("%").replace(",", ""))


def data_of(root: Node) -> Any:
    return json.loads("".join(str(one) for one in root.having("id", "study-data").inside))


def test_every_section_is_there_in_its_order_and_can_be_jumped_to(tree: Node) -> None:
    sections = tree.all("section")
    assert tuple(section.one("h2").words for section in sections) == SECTIONS
    links = tree.one("nav").all("a")
    assert [link.words for link in links] == list(SECTIONS[1:])
    assert [link.attributes["href"] for link in links] == [f"#{section.attributes['id']}" for section in sections[1:]]
    assert same_ids(tree) == []
    assert tree.one("h1").words == "Which?"
    assert tree.having("id", "again").one("code").text == COMMAND


def test_the_page_is_one_file_whose_only_script_is_its_own(page: str, tree: Node) -> None:
    _, script = scripts(tree)
    assert [node.attributes for node in tree.all("script")] == [{"type": "application/json", "id": "study-data"}, {}]
    policy = tree.having("http-equiv", "Content-Security-Policy").attributes["content"]
    hashed = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    assert policy.split("; ")[:3] == [
        "default-src 'none'", "style-src 'unsafe-inline'", f"script-src 'sha256-{hashed}'",
    ]  # fmt: skip
    assert re.findall(r"https?://[^\s\"'<]*", page) == []
    assert re.findall(r"@import|url\((?!#)", page) == []
    for node in tree.walk():
        for name, value in node.attributes.items():
            assert name not in {"src", "srcset", "action", "data", "poster"}
            assert not name.startswith("on")
            assert not name.endswith("href") or value.startswith(("#", "data:image/png;base64,")) or value == "data:,"


def test_the_caution_is_said_once_and_nothing_leaks(tree: Node) -> None:
    said = words_of(tree)
    assert said.count(CAUTION) == 1
    assert LEAKS.findall(said) == []


def test_every_picture_says_what_it_shows(tree: Node) -> None:
    figures = tree.all("figure")
    # three maps, the frontier, boxes of the one roll axis, the halves
    assert len(figures) == len(tree.all("svg")) == 6
    for figure in figures:
        title, reading = figure.all("p")[0].words, figure.one("figcaption").words
        assert figure.one("svg").attributes["aria-label"] == f"{title}. {reading}"
        assert reading.endswith(".")


def test_the_answer_is_the_sentence_of_the_study(found: StudyAnswer, tree: Node) -> None:
    (group,) = found.groups
    said = tree.having("id", "answer").having("class", "lead").words
    assert said == minus(sentence_of(group, overlay_names(found)))
    keys = [row.words for row in tree.having("class", "keys").all("div")]
    assert keys[0] == "Overlays tried 12 2 × 3 × 2"
    assert f" {group.deflated.probability:.0%} " in keys[3]


def test_the_best_are_ranked_and_ones_own_has_its_rank(found: StudyAnswer, tree: Node) -> None:
    rows = table_of(tree, "Ranked by information ratio")[1:]
    frame, own = found.overlays, found.groups[0].own
    order = frame["information_ratio"].sort_values(ascending=False).index
    assert own is not None
    for place, (row, index) in enumerate(zip(rows, order[:5], strict=False), start=1):
        one = frame.loc[index]
        assert row == [
            str(place), one["put roll"], f"{one['put strike']}", f"{one['call strike']}",
            minus(f"{100 * one['annual_return']:.1f}%"), minus(f"{100 * one['return_less_hold']:+.2f}"),
            minus(f"{one['sharpe']:.2f}"), minus(f"{one['sharpe_less_mix']:+.2f}"),
            minus(f"{100 * one['max_drawdown']:.1f}%"), minus(f"{100 * one['drawdown_removed']:+.1f}"),
            minus(f"{one['information_ratio']:+.2f}"),
        ]  # fmt: skip
    rank = int((frame["information_ratio"] > frame["information_ratio"][own]).sum()) + 1
    assert rows[5][:4] == [f"yours ({rank} of 12)", "quarter", "95", "110"]
    assert rows[6][0] == "hold"
    assert number(rows[6][4]) == pytest.approx(100 * frame["hold_annual_return"][own], abs=0.05)


def test_the_long_table_has_every_overlay_and_what_it_is_sorted_by(found: StudyAnswer, tree: Node) -> None:
    table = tree.having("id", "overlays").one("table")
    heads = table.all("th")[:13]
    assert [head.attributes.get("aria-sort") for head in heads] == [None] * 12 + ["descending"]
    rows = table.one("tbody").all("tr")
    assert len(rows) == 12
    keys = [[cell.attributes["data-key"] for cell in row.all("th", "td")] for row in rows]
    ratios = [float(key[-1]) for key in keys]
    assert ratios == sorted(ratios, reverse=True)
    by_rank = found.overlays.sort_values("information_ratio", ascending=False)
    for column, field in ((4, "annual_return"), (5, "return_less_hold"), (6, "volatility"), (11, "beta")):
        np.testing.assert_allclose([float(key[column]) for key in keys], by_rank[field], rtol=1e-5)
    # the places of axis values, so that rolls sort as the study has them
    assert {(row.all("td")[0].words, key[1]) for row, key in zip(rows, keys, strict=True)} == {
        ("quarter", "0"), ("half", "1"),
    }  # fmt: skip
    (strong,) = (n for n, row in enumerate(rows) if row.attributes.get("class") == "strong")
    assert [cell.words for cell in rows[strong].all("td")[:3]] == ["quarter", "95", "110"]


def test_the_data_are_the_figures_of_the_overlays(found: StudyAnswer, tree: Node) -> None:
    data = data_of(tree)
    group = data["groups"]["g1"]
    assert group["axes"] == [
        {"name": "put roll", "labels": ["quarter", "half"]}, {"name": "put strike", "labels": ["85", "90", "95"]},
        {"name": "call strike", "labels": ["105", "110"]},
    ]  # fmt: skip
    assert group["at"] is None
    assert (group["own"], group["best"]) == (found.groups[0].own, found.groups[0].best)
    assert [figure["field"] for figure in data["figures"]] == [figure.field for figure in EXPLORED]
    for field, values in group["values"].items():
        for shown, value in zip(values, found.overlays[field], strict=True):
            assert abs(shown - value) <= 0.5001 * 10.0 ** (math.floor(math.log10(abs(value))) - 3)


def test_left_out_overlays_have_their_place_and_missing_figures_none(
    demo_history: History, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")
    rule = 'resamples = 0\nleave_out = ["put strike == 90 and call strike == 105"]'
    found = study_of(demo_history, store, PUTS + CALLS, first=rule)
    root = read_page(build_study_page(found, command=COMMAND))
    group = data_of(root)["groups"]["g1"]
    assert group["at"] == [0, 1, 3, 4, 5]  # by hand: 90 and 105 is the third of six
    assert group["own"] is None
    assert "1 of 6 combinations, wherever put strike == 90 and call strike == 105" in words_of(root)
    assert rounded(np.array([float("nan"), -0.000123456, 98765.4])) == [None, -0.0001235, 98770.0]


def test_maps_are_medians_over_the_other_axes(found: StudyAnswer) -> None:
    (view,) = views_of(found, overlay_names(found))
    frame = found.overlays
    for field in ("sharpe_less_mix", "drawdown_removed"):
        grid = view.median_grid(0, 1, view.figure(field))
        for across, roll in enumerate(("quarter", "half")):
            for down, strike in enumerate((85, 90, 95)):
                chosen = frame[(frame["put roll"] == roll) & (frame["put strike"] == strike)][field]
                assert len(chosen) == 2
                assert grid[down, across] == pytest.approx(np.median(chosen), rel=1e-14)


def test_one_s_own_is_replayed_on_the_days_of_its_row(demo_history: History, found: StudyAnswer) -> None:
    (view,) = views_of(found, overlay_names(found))
    one = one_replay(found, view)
    assert view.group.own is not None
    row = found.overlays.iloc[view.group.own]
    assert one.overlay.legs[0].strike.percent == 95  # type: ignore[attr-defined]
    # by hand: the third Fridays of March and of June 1999; by itself a quarterly one begins with the first
    alone = replay(Market.from_frame(demo_history.frame), one.overlay, volatility=one.volatility)
    assert (str(alone.dates[0]), str(one.dates[0])) == ("1999-03-19", "1999-06-18")
    assert (one.dates[0], one.dates[-1]) == (view.group.first, view.group.last)
    assert (pd.Timestamp(one.dates[0]), pd.Timestamp(one.dates[-1])) == (row["inception"], row["end"])
    figures = performance(one.wealth, dates=one.dates, rate_return=one.rate_return, hold=one.hold)
    for name in ("annual_return", "volatility", "max_drawdown", "beta"):
        assert row[name] == pytest.approx(getattr(figures, name), rel=1e-12), name


def test_mixes_are_grown_day_by_day_and_counted_against(found: StudyAnswer, tree: Node) -> None:
    (view,) = views_of(found, overlay_names(found))
    one = one_replay(found, view)
    line = mix_line(one)
    assert line is not None
    hold, cash, dates = one.hold, one.rate_return, one.dates
    years = int((dates[-1] - dates[0]).astype(int)) / 365.25
    ends: dict[float, tuple[float, float]] = {}
    for share in (1.0, 0.4):
        wealth = top = 1.0
        deepest = 0.0
        for day in range(1, len(hold)):
            wealth *= 1 + cash[day] + share * (hold[day] / hold[day - 1] - 1 - cash[day])
            top = max(top, wealth)
            deepest = min(deepest, wealth / top - 1)
        ends[share] = (wealth ** (1 / years) - 1, deepest)
    at = int(np.flatnonzero(np.isclose(line.share, 0.4))[0])
    assert line.cost[at] == pytest.approx(ends[1.0][0] - ends[0.4][0], abs=1e-12)
    assert line.removed[at] == pytest.approx(ends[0.4][1] - ends[1.0][1], abs=1e-12)
    assert (line.cost[0], line.removed[0]) == (0.0, 0.0)
    frame = found.overlays
    inside = frame[(frame["drawdown_removed"] >= 0) & (frame["drawdown_removed"] <= line.removed.max())]
    order = np.argsort(line.removed)
    of_mix = np.interp(inside["drawdown_removed"], line.removed[order], line.cost[order])
    under = int((-inside["return_less_hold"] < of_mix).sum())
    assert f"as mild a deepest fall: {under} of the {len(inside)} that" in tree.having("id", "cost").words


def test_the_search_is_told_with_its_numbers(found: StudyAnswer, tree: Node) -> None:
    (group,) = found.groups
    section = tree.having("id", "search")
    assert group.check is not None
    rows = table_of(section, "Chance that luck alone")[1:]
    assert [row[1] for row in rows] == [
        f"{100 * p:.0f}%" if p >= 1 / 60 else "under 1.7%"
        for p in (group.check.white, group.check.spa_consistent, group.check.spa_lower, group.check.spa_upper)
    ]  # fmt: skip
    assert f"Hurdle {group.deflated.hurdle * math.sqrt(252):+.2f}: " in section.words
    names = overlay_names(found)
    walked = table_of(section, "Walk-forward")[1:]
    assert len(walked) == len(group.steps) > 3
    for row, step in zip(walked, group.steps, strict=True):
        assert row == [
            f"{step.chosen_from} to {step.chosen_to}", str(step.judged_to), minus(f"{step.inside:+.2f}"),
            minus(f"{step.outside:+.2f}"), minus(f"{step.median_out:+.2f}"), f"{100 * step.better_out:.0f}%",
            names[step.chosen],
        ]  # fmt: skip
    lasting = table_of(tree, "Rank correlation of the overlays")[1:]
    assert lasting[0] == ["first half to second half", minus(f"{group.halves.rank_correlation:+.2f}")]


def test_roll_days_show_how_far_one_rule_spreads(
    demo_history: History, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    days = '[[axis]]\nname = "day"\nfields = ["leg.1.shift_days", "leg.2.shift_days"]\nvalues = [0, 7, 14, 21]\n'
    monkeypatch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")
    own = '[own]\nday = 0\n"call strike" = 110\n'
    found = study_of(demo_history, store, days + CALLS + own, first="resamples = 0")
    root = read_page(build_study_page(found, command=COMMAND))
    gains = found.overlays[found.overlays["call strike"] == 110]["sharpe_less_mix"].to_numpy()
    shown = (gains[0], gains.min(), np.median(gains), gains.max())
    row = table_of(root.having("id", "days"), "One rule on every roll day")[1]
    assert row == [
        "Sharpe less mix's", *(minus(f"{value:+.2f}") for value in shown), f"{np.ptp(gains):.2f}",
        f"{(gains > gains[0]).sum()} of 4",
    ]  # fmt: skip
    wide = found.overlays.groupby("call strike")["sharpe_less_mix"].agg(np.ptp).median()
    assert f"roll day lie {wide:.2f} of Sharpe ratio (median of 2 settings)" in root.having("id", "days").words


def test_beyond_its_limit_there_are_no_data(found: StudyAnswer, monkeypatch: pytest.MonkeyPatch) -> None:
    for limit, value in (("MOST_EXPLORED", 11), ("MOST_BYTES", 500)):
        with monkeypatch.context() as patch:
            patch.setattr(f"studies.page.study_data.{limit}", value)
            patch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: Markup("<svg></svg>"))
            root = read_page(build_study_page(found, command=COMMAND))
        assert len(scripts(root)) == 1
        assert "comes with studies of up to 12,000 overlays" in root.having("id", "map").words
        assert len(root.having("id", "map").all("svg")) == 3


def test_a_folder_has_the_page_and_the_pictures(found: StudyAnswer, page: str, tmp_path: Path) -> None:
    write_study(found, tmp_path, command=COMMAND)
    assert (tmp_path / "study.html").read_text("utf-8") == page  # the same answer gives the same bytes
    pictures = sorted(path.name for path in tmp_path.glob("*.png"))
    assert pictures == ["boxes.png", "frontier.png", "halves.png", "heat_map.png"]
    assert all((tmp_path / name).read_bytes().startswith(b"\x89PNG") for name in pictures)
