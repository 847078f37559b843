"""Small files as people have them, each with its outcome: values, or problems with their lines and columns.

Rung: identity (files of a few lines; the outcomes in `corpus/expected.py` were worked out by hand).
"""

from __future__ import annotations

from pathlib import Path

import pytest

from data_loaders import DataProblems, History, load_history, readings
from tests.data_loaders.corpus.expected import OUTCOMES, SIX_DAYS, Outcome

CORPUS = Path(__file__).parent / "corpus"


def load(outcome: Outcome, folder: Path) -> History:
    said = dict(outcome.asked)
    unit = said.pop("vol_unit", None)
    paths = {outcome.kind: CORPUS / outcome.file}
    if outcome.kind != "prices":
        paths["prices"] = folder / "prices.csv"
        paths["prices"].write_text("date,close\n" + "".join(f"{day},1\n" for day in SIX_DAYS))
    return load_history(**paths, readings=readings(**said), vol_unit=unit)


@pytest.mark.parametrize("outcome", OUTCOMES, ids=lambda one: one.file + (" asked" if one.asked else ""))
def test_outcome(outcome: Outcome, tmp_path: Path) -> None:
    if outcome.problems:
        with pytest.raises(DataProblems) as caught:
            load(outcome, tmp_path)
        found = caught.value.problems
        assert [(problem.code, problem.line, problem.column) for problem in found] == list(outcome.problems)
        for problem in found:
            assert problem.file == outcome.file
            assert "{" not in problem.message
            assert problem.message[-1] in ".?"
        return
    history = load(outcome, tmp_path)
    source = history.sources[-1]
    assert outcome.values is not None
    frame = history.frame
    if outcome.kind == "prices":
        assert outcome.days is not None
        assert [str(day.date()) for day in frame.index] == list(outcome.days)
        assert set(frame.columns) == set(outcome.values)
    else:
        frame = frame[:3]
    for name, values in outcome.values.items():
        read = frame[name].tolist()
        # the same doubles; NaN where there is no value
        assert [None if value != value else value for value in read] == [None if v != v else v for v in values], name
    told = dict(source.taken)
    assert told["text"] == outcome.text
    assert told["dates"] == outcome.dates
    assert told.get("left out") == outcome.left_out
    assert told.get("not used") == outcome.not_used
    assert told["columns"] in (
        outcome.columns,
        *([] if outcome.columns else ["date, close", "date from 'Date', close from 'Close'"]),
    )
    if outcome.kind == "prices":
        assert [repair.what for repair in history.repairs] == ([outcome.repair] if outcome.repair else [])


def test_every_file_is_in_the_table_and_none_is_large() -> None:
    files = {path.name: path.stat().st_size for path in CORPUS.iterdir() if path.is_file() and path.suffix != ".py"}
    assert set(files) == {outcome.file for outcome in OUTCOMES}
    assert len(files) >= 80
    assert max(files.values()) < 4096


def test_nothing_is_written_beside_the_files() -> None:
    """Archives are read in memory: `zip.zip` names its file ``../../prices.csv``."""
    assert not (CORPUS.parents[1] / "prices.csv").exists()
