"""The page of a study at the ends of what can be asked: one overlay, no figures, many histories, hostile texts.

Rung: behaviour. What cannot be had is said in words; a hostile text changes no element of the page and is said letter
for letter.
"""

from __future__ import annotations

import json
from collections import Counter
from pathlib import Path
from typing import Any

import pytest

from data_loaders import History
from studies.assumptions import CAUTION
from studies.page.study import build_study_page, save_figures, study_figures
from studies.study_answer import StudyAnswer
from tests.studies.page.conftest import Node, read_page, table_of
from tests.studies.study_pages import CALLS, COMMAND, LEAKS, PUTS, same_ids, scripts, study_of, words_of

NO_DRAWS = "resamples = 0"
ONE = PUTS.replace("[85, 90, 95]", "[95]")
RUIN = '[[axis]]\nname = "ratio"\nfield = "leg.2.ratio"\nvalues = [60, 100]\n'
SHORT = '[[axis]]\nname = "w"\nfield = "window"\nvalues = [{ from = "2010-03-01", to = "2010-03-23" }]\n'


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("store")


def page_of(found: StudyAnswer) -> Node:
    """The page read back, and that nothing leaks and no id stands twice."""
    root = read_page(build_study_page(found, command=COMMAND))
    said = words_of(root)
    assert LEAKS.findall(said) == []
    assert said.count(CAUTION) == 1
    assert same_ids(root) == []
    return root


@pytest.mark.parametrize(
    ("axes", "first", "said"),
    [
        (ONE, "", {
            "map": "There is no map: no axis varies here.", "lasting": "there is one overlay, and no order",
            "search": "with no search to allow for", "overlays": "All 1 overlays",
        }),
        (PUTS, NO_DRAWS, {"map": "Above zero is better for the overlay.", "search": "the study asks for no draws"}),
        (RUIN + PUTS, "", {
            "answer": "No overlay of this study can be compared", "best": "There is no best", "map": "There is no map",
            "tried": "6; 6 lost everything and have no figures", "cost": "It cannot be said",
            "search": "cannot be had: each of the 6 overlays tried has missing differences",
            "overlays": "A dash (–): cannot be had: the overlay lost everything",
            "cautions": "The overlay loses everything on",
        }),
        (PUTS + CALLS + SHORT, "", {
            "search": "cannot be had: 2 days of differences are too few", "lasting": "the days are too few",
            "map": "Return, whole span less the hold's", "best": "There is no best",
        }),
        (ONE + CALLS, f'comparison = "hold"\n{NO_DRAWS}', {
            "best": "The information ratio is against the hold", "tried": "Compared with the hold",
        }),
    ],
    ids=["one overlay", "one axis, no draws", "ruined", "too few days", "against the hold"],
)  # fmt: skip
def test_what_cannot_be_had_is_said(
    demo_history: History, store: Path, axes: str, first: str, said: dict[str, str]
) -> None:
    found = study_of(demo_history, store, axes, first=first)
    root = page_of(found)
    for section, words in said.items():
        assert words in root.having("id", section).words
    study_figures(found)


def test_each_window_has_a_section_of_its_own(
    demo_history: History, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")
    windows = '[[axis]]\nname = "years"\nfield = "window"\nvalues = [{ to = "2009-12-31" }, { from = "2010-01-01" }]\n'
    labelled = windows.replace("values", 'labels = ["early", "late"]\nvalues')
    found = study_of(demo_history, store, PUTS + CALLS + labelled, first=NO_DRAWS)
    root = page_of(found)
    titles = [section.one("h2").words for section in root.all("section")]
    assert titles == [
        "The answer", "What was tried", "demo0, years early", "demo0, years late", "Cautions", "How to run it again",
    ]  # fmt: skip
    assert [one.attributes["data-group"] for one in root.all("div") if "data-group" in one.attributes] == ["g1", "g2"]
    (data,) = (json.loads(text) for text in scripts(root)[:1])
    first, second = (data["groups"][name] for name in ("g1", "g2"))
    # the windows are no axis inside a group
    assert [axis["name"] for axis in first["axes"]] == ["put strike", "call strike"]
    for group, part in zip(found.groups, (first, second), strict=True):
        whole = found.overlays["sharpe_less_mix"].iloc[group.rows]
        assert part["values"]["sharpe_less_mix"] == pytest.approx(whole.tolist(), rel=6e-4)
    gains = found.overlays.groupby(["put strike", "call strike"])["sharpe_less_mix"]
    order = gains.median().sort_values(ascending=False)
    rows = table_of(root, "The same settings on all windows")[1:]
    assert [(float(row[1]), float(row[2])) for row in rows] == order.index.tolist()
    better = gains.agg(lambda values: (values > 0).sum())
    assert [row[3] for row in rows] == [f"{better[setting]} of 2" for setting in order.index]
    assert list(study_figures(found)) == [
        f"{name}_{number}" for number in (1, 2) for name in ("heat_map", "frontier", "boxes", "halves")
    ]


def test_of_many_histories_there_is_a_table_and_no_picture(demo_history: History, store: Path) -> None:
    found = study_of(demo_history, store, CALLS, histories=7, first=NO_DRAWS)
    root = page_of(found)
    rows = table_of(root.having("id", "groups"), "Each of the histories")
    assert [row[0] for row in rows[1:]] == [f"demo{number}" for number in range(7)]
    assert root.all("svg") == []
    assert len(scripts(root)) == 1
    assert "left out for more than 6 histories" in root.having("id", "groups").words
    assert "on none of 7 histories" in root.having("id", "answer").words
    assert study_figures(found) == {}


# ---------------------------------------------------------------- hostile texts

HARMLESS = ("Which?", "axis", ("first", "second"))
HOSTILE = {
    "script": '</script><script>alert("1")</script>',
    "spaced": "</script ><script src=x ></script >",
    "comment": "<!--<script>",
    "closes": "</bdi></h1></style></section><img src=x onerror=alert(1)>",
    "quotes": "\"' onmouseover='alert(1)",
    "dollars": r"$\frac{1}{$ \alpha_1^",
    "entities": "&lt;b&gt; &amp; &#60;",
    "template": "{{7*7}} {% raw %} {# gone #}",
    "scripts of the world": "漢字 🙂 הגנה ﷽",
}


def hostile_study(history: History, store: Path, question: str, name: str, labels: tuple[str, str]) -> StudyAnswer:
    axis = (
        f"[[axis]]\nname = {json.dumps(name, ensure_ascii=False)}\n"
        'field = "leg.1.strike.percent_of_spot"\nvalues = [90, 95]\n'
        f"labels = {json.dumps(list(labels), ensure_ascii=False)}\n"
    )
    rolls = '[[axis]]\nname = "roll"\nfield = "leg.1.roll"\nvalues = ["quarter", "half"]\n'
    return study_of(history, store, rolls + axis, question=question, first=NO_DRAWS)


def shape(root: Node) -> Counter[tuple[str, ...]]:
    """How often each element comes with each set of attributes; pictures hold their labels as text."""
    return Counter((node.tag, *sorted(node.attributes)) for node in root.walk() if node.tag not in ("path", "use"))


@pytest.fixture(scope="module")
def harmless(demo_history: History, store: Path) -> Counter[tuple[str, ...]]:
    question, name, labels = HARMLESS
    found = hostile_study(demo_history, store, question, name, labels)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")
        return shape(page_of(found))


@pytest.mark.parametrize("text", list(HOSTILE.values()), ids=list(HOSTILE))
def test_a_hostile_text_is_said_and_nothing_else_changes(
    demo_history: History, store: Path, harmless: Any, text: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")
    labels = (text, f"{text} too")
    found = hostile_study(demo_history, store, text, text[:60].strip(), labels)
    root = page_of(found)
    assert shape(root) == harmless
    assert root.one("h1").text == text
    assert root.all("title")[0].inside == [text]
    data = scripts(root)[0]
    assert not set(data) & set("<>&")  # nothing by which a browser could leave the data
    axis = json.loads(data)["groups"]["g1"]["axes"][1]
    assert axis == {"name": text[:60].strip(), "labels": list(labels)}
    cells = {cell.text for cell in root.having("id", "overlays").one("tbody").all("td")}
    assert set(labels) <= cells
    assert sum(one.text == text[:60].strip() for one in root.having("id", "overlays").all("th")) == 1


def test_the_drawn_page_and_its_pictures_with_all_of_them_at_once(
    demo_history: History, store: Path, tmp_path: Path
) -> None:
    text = " ".join(HOSTILE.values())
    found = hostile_study(demo_history, store, text, HOSTILE["script"], (text, HOSTILE["dollars"]))
    root = page_of(found)
    assert len(root.all("script")) == 2
    assert root.all("img", "iframe") == []
    assert root.one("h1").text == text
    assert any(HOSTILE["dollars"][:10] in one.text for one in root.all("text"))  # drawn as it is, no formula
    save_figures(study_figures(found), tmp_path)
    assert len(list(tmp_path.glob("*.png"))) == 4
