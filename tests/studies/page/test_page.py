"""The HTML report read back: one file, every section, and the figures of the answer in its cells.

Rung: identity (the cells are the answer's figures, rounded here a second time; bars that must sum) and behaviour
(what a page must and must not hold).
"""

from __future__ import annotations

import math
import re
from typing import Any

import numpy as np
import pytest

from studies.assumptions import CAUTION
from studies.page.build import build_report
from studies.page.costs import steps, yearly_flows
from studies.replay_history import daily_frame
from studies.report import Report
from tests.studies.page.conftest import COMMAND, HISTORY, NAME, Node, read_page, table_of

#: Titles in the order of the page.
SECTIONS = (
    "Verdict", "What was assumed", "Headline figures", "Growth and drawdown", "The band over time",
    "Same-risk contest", "Falls and rallies", "What it cost", "Attribution", "How far it leans on the prices", "Luck",
    "Years and months", "Best and worst periods", "Rolling figures", "Each roll", "Data health", "Cautions",
    "How to run it again",
)  # fmt: skip
#: Attributes whose value a browser would go and fetch.
FETCHING = {"src", "srcset", "action", "data", "poster", "ping", "background"}
#: What a value that cannot be had looks like where nobody looked.
LEAKS = re.compile(r"(?<![A-Za-z])(nan|NaN|inf|Infinity|None|NaT|null|undefined)(?![A-Za-z])")


def minus(text: str) -> str:
    """With the minus sign of the page, and none on zero."""
    return text.lstrip("+-") if set(text) <= set("+-0.,%") else text.replace("-", "−")


def percent(value: float, digits: int = 1, sign: str = "") -> str:
    """A decimal in percent, as a reader would round it."""
    return minus(f"{100 * value:{sign}.{digits}f}%")


def reaches_outside(text: str) -> list[str]:
    """Everything in a page that would fetch, run or send something."""
    root = read_page(text)
    found = [f"<{node.tag}>" for node in root.all("script", "iframe", "object", "embed", "base", "form", "video")]
    for node in root.walk():
        for name, value in node.attributes.items():
            points_out = name.endswith("href") and not value.startswith("#") and value != "data:,"
            if points_out or name in FETCHING or name.startswith("on"):
                found.append(f"{name}={value}")
    found += re.findall(r"@import[^;]*", text) + re.findall(r"url\((?!#)[^)]*\)", text)
    return found + re.findall(r"https?://[^\s\"'<]*", text)


def test_the_page_is_one_file_that_reaches_nowhere(page: str) -> None:
    assert reaches_outside(page) == []
    policy = read_page(page).having("http-equiv", "Content-Security-Policy").attributes["content"]
    assert policy.split("; ")[0] == "default-src 'none'"
    assert "script" not in policy


@pytest.mark.parametrize(
    "put_in",
    [
        '<img src="a.png">', '<img srcset="a.png 2x">', "<script>1</script>", '<p onclick="a()">b</p>',
        '<a href="https://there.test/">b</a>', '<link rel="stylesheet" href="a.css">',
        '<p style="background: url(a.png)">b</p>', "<style>@import 'a.css';</style>", '<iframe srcdoc="a"></iframe>',
        "<p>http://there.test</p>",
    ],
)  # fmt: skip
def test_such_a_page_would_be_found(page: str, put_in: str) -> None:
    assert reaches_outside(page.replace("<main>", f"<main>{put_in}", 1)) != []


def test_every_section_is_there_in_its_order(tree: Node) -> None:
    sections = tree.all("section")
    assert tuple(section.one("h2").words for section in sections) == SECTIONS
    assert [section.attributes["id"] for section in sections[:2]] == ["verdict", "assumed"]
    for section in sections:
        assert len(section.words) > len(section.one("h2").words) + 20
    links = tree.one("nav").all("a")
    assert [link.words for link in links] == list(SECTIONS[1:])
    assert [link.attributes["href"] for link in links] == [f"#{section.attributes['id']}" for section in sections[1:]]


def test_name_history_and_command_stand_where_they_are_looked_for(report: Report, tree: Node, page: str) -> None:
    assert tree.one("h1").words == NAME
    assert re.search(r"<title>(.*?)</title>", page)[1] == f"{NAME}, {HISTORY}"  # type: ignore[index]
    days = report.answer.replay.dates
    assert f"on {HISTORY} , {days[0]} to {days[-1]}, 7.8 years" in tree.one("header").words  # 2009-03-20 to 2016-12-30
    assert tree.having("id", "again").one("code").text == COMMAND
    assert tree.one("html").attributes["lang"] == "en"


def test_every_picture_says_what_it_shows(tree: Node) -> None:
    figures = tree.all("figure")
    assert len(figures) == len(tree.all("svg")) >= 10
    titles = [figure.all("p")[0].words for figure in figures]
    assert len(set(titles)) == len(titles)
    for figure, title in zip(figures, titles, strict=True):
        drawing, reading = figure.one("svg"), figure.one("figcaption").words
        assert drawing.attributes["role"] == "img"
        assert reading.endswith(".")
        assert len(reading) > 25
        assert drawing.attributes["aria-label"] == f"{title}. {reading}"
        assert drawing.all("path")
        assert drawing.all("text")


def test_ids_are_unique_and_every_reference_finds_its_own(tree: Node) -> None:
    ids = [node.attributes["id"] for node in tree.walk() if "id" in node.attributes]
    assert len(ids) == len(set(ids))
    assert len(ids) > len(SECTIONS)
    used = {value[1:] for node in tree.walk() for name, value in node.attributes.items() if name.endswith("href")}
    used |= {one for node in tree.walk() for v in node.attributes.values() for one in re.findall(r"url\(#([^)]*)\)", v)}
    assert used - {"ata:,"} <= set(ids)


def test_tables_have_heads_with_scopes_and_full_rows(tree: Node) -> None:
    tables = tree.all("table")
    assert len(tables) > 15
    for table in tables:
        head = table.one("thead").all("th")
        assert {cell.attributes.get("scope") for cell in head} == {"col"}
        assert table.one("thead").all("td") == []
        rows = table.one("tbody").all("tr")
        assert rows
        for row in rows:
            first, *others = row.all("th", "td")
            assert (first.tag, first.attributes.get("scope")) == ("th", "row")
            assert {cell.tag for cell in others} == {"td"}
            assert len(others) == len(head) - 1
    regions = [node for node in tree.walk() if node.attributes.get("role") == "region"]
    assert len(regions) == len(tables)
    assert all(region.attributes["aria-label"] and region.attributes["tabindex"] == "0" for region in regions)


def test_nothing_that_cannot_be_had_leaks_into_words(tree: Node) -> None:
    assert LEAKS.findall(tree.words) == []
    written = [value for node in tree.walk() for value in node.attributes.values()]
    assert [value for value in written if LEAKS.search(value)] == []


def test_the_caution_is_said_once(tree: Node) -> None:
    assert tree.words.count(CAUTION) == 1
    assert CAUTION in tree.having("id", "cautions").words
    for part in ("the past is not the future", "risk documents", "licensed adviser", "tax and regulation"):
        assert tree.words.count(part) == 1


def test_headline_cells_are_the_figures_of_the_answer(report: Report, tree: Node) -> None:
    found = report.answer
    head, *rows = table_of(tree, "Overlay, hold and what holding less stock")
    assert head[1:] == [
        "return a year", "volatility a year", "Sharpe ratio", "maximum drawdown", "worst 5% of months", "beta",
        "stock share",
    ]  # fmt: skip
    shares = {f"mix_{name}": mix.share for name, mix in found.mixes.items() if mix is not None} | {"hold": 1.0}
    assert [row[0] for row in rows] == [
        "overlay", "hold", "same-beta mix", "same-volatility mix", "same-return mix", "same-drawdown mix",
        "same-delta mix", "put only", "call only",
    ]  # fmt: skip
    for row, (name, figures) in zip(rows, found.figures.items(), strict=True):
        assert figures is not None
        assert row[1:] == [
            percent(figures.annual_return), percent(figures.volatility), minus(f"{figures.sharpe:.2f}"),
            percent(figures.max_drawdown), percent(figures.expected_shortfall_monthly), minus(f"{figures.beta:.2f}"),
            percent(shares[name], 0) if name in shares else "",
        ]  # fmt: skip
    # the same at the top, large
    keys = [row.words for row in tree.having("class", "keys").all("div")]
    own, hold = found.figures["overlay"], found.figures["hold"]
    assert own is not None
    assert hold is not None
    assert keys[0] == f"Return a year {percent(own.annual_return)} hold {percent(hold.annual_return)}"
    assert keys[1] == f"Deepest fall {percent(own.max_drawdown)} hold {percent(hold.max_drawdown)}"
    assert keys[4] == f"1 grew to {found.replay.wealth[-1]:.2f} hold {found.replay.hold[-1]:.2f}"


def test_more_cells_are_the_figures_of_the_answer(report: Report, tree: Node) -> None:
    found, findings = report.answer, report.findings
    own = found.figures["overlay"]
    assert own is not None
    figures = {row[0]: row[1] for row in table_of(tree, "All figures")}
    assert figures["its trough"] == str(own.max_drawdown_trough)
    assert figures["Ulcer index"] == percent(own.ulcer)
    assert figures["capture, months the hold fell"] == minus(f"{own.capture_down:.2f}")
    ladder = table_of(tree, "One overlay under each smile")
    for row, (name, rung) in zip(ladder[1:], found.ladder.items(), strict=True):
        assert row[0] == (f"{name} (used here)" if name == "index" else name)
        assert row[5] == minus(f"{findings.ladder_gains[name]:+.2f}")
        assert row[6] == percent(rung.costs.net_a_year, 2, "+")
    roll_days = {row[0]: row[1:] for row in table_of(tree, "The same rule on every possible roll day")}
    returns = findings.luck.annual_return
    assert returns.size == 63
    assert roll_days["return a year"] == [
        percent(returns[0]), f"{(returns < returns[0]).sum()} of 63", percent(returns.min()),
        percent(float(np.median(returns))), percent(returns.max()), percent(findings.luck.ladder_annual_return),
    ]  # fmt: skip
    chances = {row[0]: row[1:] for row in table_of(tree, "Share of the drawn histories")}
    drawn = report.inference.comparisons["mix_same_beta"]
    assert chances["than same-beta mix"][:3] == [
        percent(drawn.probability_higher_return, 0), percent(drawn.probability_higher_sharpe, 0),
        percent(drawn.probability_shallower, 0),
    ]  # fmt: skip
    falls = table_of(tree, "Falls of the hold deeper than 10%")
    assert len(falls) - 1 == len(findings.episodes) == 6
    for row, fall in zip(falls[1:], findings.episodes, strict=True):
        assert row[:4] == [
            str(fall.peak), str(fall.trough), percent(fall.returns["overlay"]), percent(fall.returns["hold"]),
        ]  # fmt: skip


def test_every_roll_is_a_row(report: Report, tree: Node) -> None:
    frame = report.answer.replay.rolls_frame()
    _, *rows = table_of(tree, f"{len(frame)} options opened")
    assert len(rows) == len(frame)
    options: list[dict[Any, Any]] = frame.to_dict("records")
    for row, one in zip(rows, options, strict=True):
        assert row[0] == f"{one['position']} {one['leg']}"
        assert row[1:3] == [f"{one['opened']:%Y-%m-%d}", f"{one['expiry']:%Y-%m-%d}"]
        spot, strike = one["spot_open"], one["strike"]
        assert row[4:7] == [f"{spot:,.2f}", f"{strike:,.2f}", percent(strike / spot)]
        assert row[12] == minus(f"{one['profit']:+,.2f}")
    assert {row[6] for row in rows if row[0] == "long put"} == {"95.0%"}
    assert sum(row[3] == "open" for row in rows) == 2  # one of each leg is alive at the end


def test_the_bars_sum_to_the_gain_of_the_overlay(report: Report, tree: Node) -> None:
    gain = float(report.answer.replay.wealth[-1]) - 1
    made = steps(report.findings.ledger, report.answer)
    assert made.labels == (
        "hold", "put: premium paid", "put: settled or sold", "put: change in open value", "call: premium received",
        "call: settled or bought back", "call: change in open value", "spread and fees", "interest on cash",
        "fewer or more shares",
    )  # fmt: skip
    # in the resize account shares are fewer wherever premiums were paid, and their line is what they gained less
    own_shares = float(np.sum(report.answer.replay.stock_profit))
    assert made.money[0, -1] == pytest.approx(own_shares - made.money[0, 0], abs=1e-12)
    assert made.money[0, 0] == pytest.approx(report.answer.replay.hold[-1] - 1, abs=1e-12)
    assert made.money[0].sum() == pytest.approx(gain, abs=1e-12)
    rows = table_of(tree, "The bars, in percent of starting wealth")[1:]
    shown = [float(cell.replace("−", "-").rstrip("%")) for _, cell in rows]
    assert [label for label, _ in rows] == [*made.labels, "overlay"]
    assert shown[-1] == pytest.approx(100 * gain, abs=0.005)
    assert sum(shown[:-1]) == pytest.approx(shown[-1], abs=0.005 * len(shown))  # each is rounded to a hundredth


def test_the_ledger_of_every_year_sums_across(report: Report, tree: Node) -> None:
    ledger, flows = report.findings.ledger_by_year, yearly_flows(report.findings, report.answer)
    own = 1e4 * ledger.overlay / ledger.start_wealth
    np.testing.assert_allclose(flows.money.sum(axis=1), own, rtol=0, atol=1e-8)  # 1e-12 of wealth in basis points
    head, *rows = table_of(tree, "Ledger by year")
    assert [row[0] for row in rows] == [str(year) for year in range(2009, 2017)]
    for row, gain in zip(rows, own, strict=True):
        cells = [float(cell.replace("−", "-").replace(",", "")) for cell in row[1:]]
        flow, (overlay, hold, less) = cells[:-3], cells[-3:]
        assert len(flow) == len(head) - 4
        assert overlay == pytest.approx(gain, abs=0.5)
        assert sum(flow) == pytest.approx(overlay, abs=0.5 * (len(flow) + 1))
        assert less == pytest.approx(overlay - hold, abs=1.5)


def test_attribution_shown_sums(tree: Node) -> None:
    _, *rows = table_of(tree, "Parts of the excess return")
    assert [row[0] for row in rows] == [
        "passive equity", "equity timing", "volatility, put", "volatility, call", "cost", "excess return",
    ]  # fmt: skip
    points = [float(row[1].replace("−", "-")) for row in rows]
    shares = [float(row[3].replace("−", "-").rstrip("%")) for row in rows]
    assert sum(points[:-1]) == pytest.approx(points[-1], abs=0.005 * len(rows))
    assert shares[-1] == 100
    assert sum(shares[:-1]) == pytest.approx(100, abs=0.5 * len(rows))


def test_the_exposure_is_that_of_the_daily_table(report: Report, tree: Node) -> None:
    daily = daily_frame(report.answer)
    (reading,) = (f.one("figcaption").words for f in tree.all("figure") if f.all("p")[0].words == "Exposure over time")
    told = [float(one.replace("−", "-")) for one in re.findall(r"−?\d+(?:\.\d)?", reading)]
    delta, vega = 100 * daily["delta"], 10_000 * daily["vega"]  # percent and basis points of wealth
    assert told == [
        round(delta.min()), round(delta.max()), round(delta.mean()), round(vega.min(), 1), round(vega.max(), 1),
    ]  # fmt: skip


def test_contest_readings_count_what_the_table_shows(tree: Node) -> None:
    section = tree.having("id", "contest")
    _, *rows = table_of(section, "Overlay less each comparison")
    ends = [re.findall(r"\((\S+) to (\S+)\)", cell) for row in rows for cell in row[1:]]
    known = [(float(low.replace("−", "-")), float(high.replace("−", "-"))) for one in ends for low, high in one]
    said = re.search(r"Of (\d+) differences (\d+) lie clear above zero, (\d+) clear below", section.words)
    assert said is not None
    assert int(said[1]) == len(known) == 24  # six comparisons, four figures
    above, below = sum(low > 0 for low, _ in known), sum(high < 0 for _, high in known)
    # an end that rounds to zero may stand on either side
    level = sum(0.0 in one for one in known)
    assert math.isclose(int(said[2]), above, abs_tol=level)
    assert math.isclose(int(said[3]), below, abs_tol=level)


def test_the_verdict_is_told_in_the_words_of_the_report(report: Report, tree: Node) -> None:
    clauses = tree.having("class", "clauses").all("li")
    assert len(clauses) == len(report.clauses) == 6
    for item, clause in zip(clauses, report.clauses, strict=True):
        assert item.one("h3").words == f"{clause.title} {clause.finding}"
        digits = re.findall(r"\d+\.?\d*", clause.sentence)
        assert re.findall(r"\d+\.?\d*", item.one("p").words) == digits


def test_data_health_names_every_file(tree: Node) -> None:
    section = tree.having("id", "health")
    assert [row[1] for row in table_of(section, "Files")[1:]] == ["prices.csv", "vol.csv", "dividends.csv", "rates.csv"]


def test_without_resampling_verdict_and_sources_the_page_says_so(
    report: Report, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")
    bare = read_page(build_report(report.answer, report.findings, history=HISTORY, how_to_run=COMMAND))
    assert tuple(section.one("h2").words for section in bare.all("section")) == SECTIONS
    assert "No verdict was drawn up for this replay." in bare.having("id", "verdict").words
    assert "there are no intervals" in bare.having("id", "luck").words
    assert "no intervals were worked out" in bare.having("id", "contest").words
    assert "(" not in "".join(cell for row in table_of(bare, "Overlay less each")[1:] for cell in row)
    assert "Nothing is known about where the data came from." in bare.having("id", "health").words
