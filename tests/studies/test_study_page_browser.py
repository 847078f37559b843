"""The page of a study in a real browser: quiet, alone, its tables sort, its map turns, and it needs no script.

Rung: behaviour; the figures in the turned map are medians of the overlays', taken here a second time.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from data_loaders import History
from studies.page.study import build_study_page
from studies.study_answer import StudyAnswer
from tests.studies.page.conftest import Node, read_page
from tests.studies.page.test_page_browser import BROWSER, PHONE, POLICY, launch, measured, open_page
from tests.studies.study_pages import CALLS, COMMAND, OWN, PUTS, ROLLS, minus, study_of

pytestmark = pytest.mark.skipif(BROWSER is None, reason="no browser here")

#: Put into a copy of the page, without its policy: what a reader does, and what then stands there.
READER = """<script>
addEventListener("load", () => {
  const said = {};
  const table = document.querySelector("#overlays table");
  const heads = [...table.tHead.rows[0].cells];
  const column = name => heads.findIndex(one => one.textContent === name);
  const sorted = name => {
    const at = column(name);
    heads[at].querySelector("button").click();
    return [heads[at].getAttribute("aria-sort"), heads.filter(one => one.hasAttribute("aria-sort")).length,
      [...table.tBodies[0].rows].map(row => row.cells[at].textContent)];
  };
  said.beta = sorted("beta");
  said.again = sorted("beta");
  said.rolls = sorted("put roll");
  said.buttons = heads.every(one => one.firstChild.type === "button" && one.firstChild.tabIndex === 0);
  const map = document.querySelector(".explorer");
  const cells = () => [...map.querySelectorAll("tbody tr")].map(row => [...row.cells].map(one => one.textContent));
  const choose = (label, text) => {
    const chosen = [...map.querySelectorAll("label")].find(one => one.firstChild.textContent === label).lastChild;
    chosen.value = [...chosen.options].find(one => one.textContent === text).value;
    chosen.dispatchEvent(new Event("change"));
  };
  said.hidden = map.hidden;
  said.first = cells();
  said.own = map.querySelector("td.own").textContent;
  choose("across", "call strike");
  choose("down", "put roll");
  choose("put strike", "90");
  choose("figure", "Drawdown removed");
  said.turned = cells();
  choose("down", "call strike");
  said.swapped = [...map.querySelectorAll("thead th")].map(one => one.textContent);
  map.querySelector("tbody td").click();
  said.readout = map.querySelector(".readout").textContent;
  document.body.append(Object.assign(document.createElement("pre"), {id: "said", textContent: JSON.stringify(said)}));
});
</script>"""


@pytest.fixture(scope="module")
def found(demo_history: History, tmp_path_factory: pytest.TempPathFactory) -> StudyAnswer:
    return study_of(demo_history, tmp_path_factory.mktemp("store"), ROLLS + PUTS + CALLS + OWN, first="resamples = 0")


@pytest.fixture(scope="module")
def page(found: StudyAnswer) -> str:
    return build_study_page(found, command=COMMAND)


@pytest.fixture(scope="module")
def said(page: str, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """What stood there after the reader's clicks."""
    folder = tmp_path_factory.mktemp("read")
    (folder / "page.html").write_text(POLICY.sub("", page).replace("</body>", f"{READER}</body>"), encoding="utf-8")
    dom = launch(folder, "--dump-dom", (folder / "page.html").as_uri()).stdout
    made: dict[str, Any] = json.loads(read_page(dom).having("id", "said").text)
    return made


def test_it_is_quiet_alone_and_its_script_runs_under_its_policy(page: str, tmp_path: Path) -> None:
    opened = open_page(tmp_path, page)
    assert (opened.console, opened.asked) == ([], [])
    shown = read_page(opened.dom)
    assert len(shown.having("id", "overlays").one("table").all("button")) == 13
    assert "hidden" not in shown.having("class", "explorer").attributes


def test_another_script_does_not_run(page: str, tmp_path: Path) -> None:
    opened = open_page(tmp_path, page.replace("<main>", '<main><script>document.title = "changed"</script>', 1))
    assert "<title>changed" not in opened.dom
    assert len(opened.console) == 1
    assert "Content Security Policy" in opened.console[0]


def test_a_click_on_a_head_sorts(found: StudyAnswer, said: dict[str, Any]) -> None:
    falling = [minus(f"{value:.2f}") for value in found.overlays["beta"].sort_values(ascending=False)]
    assert said["beta"] == ["descending", 1, falling]
    assert said["again"] == ["ascending", 1, falling[::-1]]
    # in the order of the study, not of the alphabet
    assert said["rolls"] == ["ascending", 1, ["quarter"] * 6 + ["half"] * 6]
    assert said["buttons"]


def test_the_map_turns(found: StudyAnswer, said: dict[str, Any]) -> None:
    frame = found.overlays
    assert not said["hidden"]
    middle = frame.groupby(["put strike", "put roll"])["sharpe_less_mix"].median()
    assert said["first"] == [
        [f"{strike}", *(minus(f"{middle[strike, roll]:+.2f}") for roll in ("quarter", "half"))]
        for strike in (85, 90, 95)
    ]  # fmt: skip
    assert said["own"] == said["first"][2][1]  # the put at 95, rolled every quarter
    removed = frame[frame["put strike"] == 90].set_index(["put roll", "call strike"])["drawdown_removed"]
    assert said["turned"] == [
        [roll, *(minus(f"{100 * removed[roll, strike]:+.1f}") for strike in (105, 110))] for roll in ("quarter", "half")
    ]
    assert said["swapped"] == ["quarter", "half"]  # an axis chosen twice changes places with the other
    value = minus(f"{100 * removed['quarter', 105]:+.1f}")
    assert said["readout"] == f"call strike 105, put roll quarter: {value} points"


def test_without_its_script_tables_and_pictures_are_still_there(page: str, tmp_path: Path) -> None:
    start = page.rindex("<script>")
    opened = open_page(tmp_path, page[:start] + page[page.index("</script>", start) + 9 :])
    shown = read_page(opened.dom)
    assert "hidden" in shown.having("class", "explorer").attributes
    assert len(shown.having("id", "map").all("svg")) == 3
    table: Node = shown.having("id", "overlays").one("table")
    assert len(table.one("tbody").all("tr")) == 12
    assert table.all("button") == []


def test_it_fits_a_phone_and_a_desk(page: str, tmp_path: Path) -> None:
    for one in measured(tmp_path, page, PHONE, 1200):
        assert one["scroll"] == one["width"]
        assert (one["outside"], one["letters"], one["small"]) == ([], [], 0)
        assert min(one["drawings"]) > 60
