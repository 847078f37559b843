"""Small matters of a study: names of axes, and what its page says of comparison, days, choices and cautions.

Rung: hand-worked (bands turned inside out, counted on paper), twin (cautions counted by replaying every overlay;
first days from each overlay's own replay) and behaviour (messages with file, line and key; words of the page).
"""

from __future__ import annotations

import re
import tomllib
from collections import Counter
from pathlib import Path

import numpy as np
import pytest

from backtest import replay
from data_loaders import History
from studies.assumptions import warnings_of
from studies.errors import StudyFileError
from studies.expansion import Expansion
from studies.page.study import build_study_page
from studies.page.study_cautions import inside_out, settings_cautions
from studies.runner import market_of
from studies.study import Axis, Study, parse_study
from studies.study_answer import StudyAnswer, replay_member
from tests.studies.page.conftest import Node, read_page
from tests.studies.small_studies import axis
from tests.studies.study_pages import CALLS, COMMAND, OWN, PUTS, ROLLS, minus, study_of

README = Path(__file__).parents[2] / "README.md"
NO_DRAWS = "resamples = 0"
#: How the page begins to say of a caution what it counts.
INSIDE_OUT = "A bought put is struck at a higher percent than a sold call: a band turned inside out"


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("store")


@pytest.fixture(scope="module")
def found(demo_history: History, store: Path) -> StudyAnswer:
    """Quarterly and half-yearly puts: the last to begin begin in June."""
    return study_of(demo_history, store, ROLLS + PUTS + CALLS + OWN, first=NO_DRAWS)


@pytest.fixture
def _without_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("studies.page.pictures.inline_svg", lambda figure, **named: "")


def page_of(found: StudyAnswer) -> Node:
    return read_page(build_study_page(found, command=COMMAND))


def bullets(section: Node) -> list[str]:
    return [item.words for item in section.all("li")]


# ---------------------------------------------------------------- names of axes

# lines counted from 1: the name of the second axis is on line 15
NAMED = """\
question = "Which?"
histories = ["demo"]

[[overlay.leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }

[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_spot"
values = [90, 95]

[[axis]]
name = "NAME"
field = "leg.1.roll"
values = ["month", "quarter"]
"""


@pytest.mark.parametrize(
    "name", ["number", "history", "inception", "end", "sharpe", "hold_sharpe", "information_ratio"]
)
def test_the_name_of_a_column_is_refused_with_file_line_and_key(name: str) -> None:
    with pytest.raises(StudyFileError) as caught:
        parse_study(NAMED.replace("NAME", name), file="grid.toml")
    error = caught.value
    assert str(error) == (
        f"grid.toml, line 15, axis.2.name: {name} is the name of a column of the results; give the axis another"
    )
    assert (error.file, error.line, error.key) == ("grid.toml", 15, "axis.2.name")


def test_every_other_column_of_the_results_is_such_a_name(found: StudyAnswer) -> None:
    """Whichever they are: those of a study's table that are none of its axes."""
    columns = [name for name in found.overlays.columns if name not in ("put roll", "put strike", "call strike")]
    assert len(columns) > 20
    for name in columns:
        with pytest.raises(StudyFileError, match=f": {name} is the name of a column"):
            parse_study(NAMED.replace("NAME", name))


def test_a_study_made_without_a_file_is_refused_as_well() -> None:
    put = {"position": "long", "right": "put", "strike": {"percent_of_spot": 95}}
    one = Axis(name="end", fields=("leg.1.ratio",), values=(1, 2))
    with pytest.raises(StudyFileError, match=r"^study, axis\.1\.name: end is the name of a column of the results"):
        Study(question="Which?", histories=("demo",), overlay={"leg": [put]}, axes=(one,))


# ---------------------------------------------------------------- the comparison


@pytest.mark.usefixtures("_without_pictures")
@pytest.mark.parametrize(
    ("comparison", "field", "over", "against"),
    [
        ("same-beta mix", "sharpe_less_mix", "its same-beta mix", "its same-beta mix"),
        ("hold", "sharpe_less_hold", "the hold", "the hold"),
    ],
)
def test_tiles_and_walk_forward_speak_of_the_comparison(
    demo_history: History, store: Path, comparison: str, field: str, over: str, against: str
) -> None:
    made = study_of(demo_history, store, PUTS + CALLS, first=f'comparison = "{comparison}"\nresamples = 60')
    root = page_of(made)
    tiles = [tile.words for tile in root.having("class", "keys").all("div")]
    best = made.overlays.loc[made.groups[0].best]
    assert tiles[1] == f"Gain of the best {minus(f'{best[field]:+.2f}')} of Sharpe ratio over {over}"
    assert ("mix" in " ".join(tiles)) == (comparison == "same-beta mix")
    said = root.having("id", "search").words
    assert "Best so far is the one with the highest Sharpe ratio less the hold's on the days before." in said
    assert f"the best of all days is the one with the highest information ratio against {against}, which" in said


def test_every_mix_of_stock_and_cash_has_the_sharpe_ratio_of_the_hold(found: StudyAnswer) -> None:
    """What the page gives as the reason why pictures can do without a share of stock."""
    gaps = found.overlays["mix_sharpe"] - found.overlays["hold_sharpe"]
    assert (found.overlays["beta"] > 0).all()
    assert np.abs(gaps).max() < 1e-12


# ---------------------------------------------------------------- the days


@pytest.mark.usefixtures("_without_pictures")
def test_the_days_begin_on_the_latest_of_the_first_roll_days(found: StudyAnswer) -> None:
    (group,) = found.plan.groups
    begins = set()
    for point in Expansion(found.plan.study).many(group.points):
        begins.add(replay(market_of(found.plan, group), point.overlay, volatility=point.volatility).dates[0])
    assert len(begins) == 2
    assert found.overlays["inception"].to_numpy().astype("datetime64[D]").tolist() == [max(begins).item()] * 12
    said = page_of(found).having("id", "tried").words
    assert (
        f"{max(begins)} to {group.span.last}, 24.5 years, the same for every overlay and the hold: from the latest of "
        "the overlays' first roll days on. One whose own came earlier begins with options under way (stubs), held to "
        "its next roll day"
    ) in said
    assert "in common; tests" not in said


# ---------------------------------------------------------------- cautions


@pytest.fixture
def _crossing_agreed(monkeypatch: pytest.MonkeyPatch) -> None:
    """Bands turned inside out are let through, as if every overlay agreed to them."""
    monkeypatch.setattr("backtest.overlay._check_crossing", lambda overlay: None, raising=False)


@pytest.mark.usefixtures("_without_pictures", "_crossing_agreed")
def test_bands_turned_inside_out_are_counted(demo_history: History, store: Path) -> None:
    """By hand: 102 lies above 101 alone, 106 above 101, 102 and 105: 4 pairs, with two ratios of the call 8 of them."""
    axes = axis("put", "leg.1.strike.percent_of_spot", "[90, 102, 106]")
    axes += axis("call", "leg.2.strike.percent_of_spot", "[101, 102, 105, 110]")
    axes += axis("ratio", "leg.2.ratio", "[0, 0.5, 1]")  # with none sold there is no band
    own = "[own]\nput = 90\ncall = 110\nratio = 1\n"
    made = study_of(demo_history, store, axes + own, first=NO_DRAWS)
    section = page_of(made).having("id", "cautions")
    assert "Of the 36 overlays, by their settings alone:" in section.words
    assert bullets(section)[0] == f"{INSIDE_OUT} (8 overlays)."
    twice = study_of(demo_history, store, axes, histories=2, first=NO_DRAWS)
    assert bullets(page_of(twice).having("id", "cautions"))[0] == f"{INSIDE_OUT} (16 overlays)."


def legs(*lines: str) -> str:
    tables = []
    for line in lines:
        position, right, rule, percent = line.split()
        tables.append(
            f'[[overlay.leg]]\nposition = "{position}"\nright = "{right}"\nstrike = {{ {rule} = {percent} }}\n'
        )
    return 'question = "Which?"\nhistories = ["demo"]\n' + "".join(tables)


@pytest.mark.usefixtures("_crossing_agreed")
@pytest.mark.parametrize(
    ("overlay", "field", "turned"),
    [
        (("long put percent_of_spot 95", "short call percent_of_spot 100"), 1, [False, False, True]),
        (("short call percent_of_spot 100", "long put percent_of_spot 95"), 2, [False, False, True]),
        (("long put percent_of_forward 95", "short call percent_of_forward 100"), 1, [False, False, True]),
        # of spot and of forward: a replay alone can tell
        (("long put percent_of_spot 95", "short call percent_of_forward 100"), 1, [False, False, False]),
        # a put that is sold, and a call that is bought, make no band
        (("short put percent_of_spot 95", "short call percent_of_spot 100"), 1, [False, False, False]),
        (("long put percent_of_spot 95", "long call percent_of_spot 100"), 1, [False, False, False]),
        # the highest put bought and the lowest call sold: 98 is always above 97
        (("long put percent_of_spot 95", "long put percent_of_spot 98", "short call percent_of_spot 100",
          "short call percent_of_spot 97"), 1, [True, True, True]),
    ],
    ids=["spot", "call first", "forward", "spot and forward", "sold put", "bought call", "several"],
)  # fmt: skip
def test_which_bands_are_turned_inside_out(overlay: tuple[str, ...], field: int, turned: list[bool]) -> None:
    """The put struck at 99, at the call's 100 and at 101; at the same percent nothing is turned."""
    rule = overlay[field - 1].split()[2]
    study = parse_study(legs(*overlay) + axis("put", f"leg.{field}.strike.{rule}", "[99, 100, 101]"))
    assert inside_out(Expansion(study), np.array([[0], [1], [2]], dtype=np.int32)).tolist() == turned


def replayed_cautions(made: StudyAnswer) -> Counter[str]:
    """How often each sentence is said when every overlay is replayed and asked."""
    counts: Counter[str] = Counter()
    expansion = Expansion(made.plan.study)
    for group in made.plan.groups:
        for member in range(len(group.points)):
            counts.update(warnings_of(replay_member(made.plan, expansion, group, member)))
    return counts


#: How the sentences begin that follow from settings alone.
OF_SETTINGS = ("an option of", "options are priced off realised", "the vol series is read")


@pytest.mark.usefixtures("_without_pictures")
def test_cautions_of_settings_are_those_that_every_replay_would_give(demo_history: History, store: Path) -> None:
    axes = axis("term", "leg.1.term", "[3, 6, 12]")
    axes += axis("quote", "volatility.quote", '["at the money", "variance swap"]')
    axes += axis("put", "leg.1.strike.percent_of_spot", "[90, 95]")
    made = study_of(demo_history, store, axes, first=NO_DRAWS)
    expected = {text: n for text, n in replayed_cautions(made).items() if text.startswith(OF_SETTINGS)}
    counted = settings_cautions(made)
    assert counted == expected
    # by hand, of 3 x 2 x 2 overlays: 4 have each term, 6 each quote
    assert sorted(counted.values()) == [4, 4, 6]
    section = page_of(made).having("id", "cautions")
    said = [line for line in bullets(section) if line.endswith("overlays).")]
    assert sorted(re.findall(r"\((\d) overlays\)\.$", line)[0] for line in said) == ["4", "4", "6"]


@pytest.mark.usefixtures("_without_pictures")
def test_a_caution_of_all_overlays_is_said_once(demo_history: History, store: Path) -> None:
    realised = '[[axis]]\nname = "source"\nfield = "volatility.source"\nvalues = ["realised"]\n'
    made = study_of(demo_history, store, PUTS + realised, first=NO_DRAWS)
    lines = bullets(page_of(made).having("id", "cautions"))
    told = [line for line in lines if "realised volatility" in line]
    assert told == [
        "Options are priced off realised volatility; real ones are commonly dearer than the past was volatile (all of "
        "them)."
    ]
    # a study of one overlay has nothing to count: it says what the replay says
    alone = study_of(demo_history, store, PUTS.replace("[85, 90, 95]", "[95]") + realised, first=NO_DRAWS)
    section = page_of(alone).having("id", "cautions")
    assert "by their settings alone" not in section.words
    assert [line for line in bullets(section) if "realised volatility" in line] == [
        "Options are priced off realised volatility; real ones are commonly dearer than the past was volatile."
    ]


# ---------------------------------------------------------------- the README's study


def test_the_study_of_the_readme_reads_vols_as_those_of_the_demo() -> None:
    blocks = re.findall(r"```toml\n(.*?)```", README.read_text(encoding="utf-8"), flags=re.DOTALL)
    (text,) = (block for block in blocks if "question" in tomllib.loads(block))
    study = parse_study(text)
    assert study.combinations == 400
    assert (study.overlay["volatility"]["quote"], study.overlay["volatility"]["smile"]) == ("variance swap", "index")
