"""Small studies on the demo market, and what the tests of their pages read with; no tests of its own."""

from __future__ import annotations

import json
import re
from collections import Counter
from pathlib import Path

from data_loaders import History
from data_loaders.store import write_history
from studies.study import parse_study
from studies.study_answer import StudyAnswer
from studies.study_folder import run_study
from tests.studies.page.conftest import Node

COMMAND = "rollband study study.toml --out results/study"
#: What a value that cannot be had looks like where nobody looked.
LEAKS = re.compile(r"(?<![A-Za-z])(nan|NaN|inf|Infinity|None|NaT|undefined)(?![A-Za-z])")
ROLLS = '[[axis]]\nname = "put roll"\nfield = "leg.1.roll"\nvalues = ["quarter", "half"]\n'
PUTS = '[[axis]]\nname = "put strike"\nfield = "leg.1.strike.percent_of_spot"\nvalues = [85, 90, 95]\n'
CALLS = '[[axis]]\nname = "call strike"\nfield = "leg.2.strike.percent_of_spot"\nvalues = [105, 110]\n'
OWN = '[own]\n"put roll" = "quarter"\n"put strike" = 95\n"call strike" = 110\n'


def study_of(
    history: History, store: Path, axes: str, *, histories: int = 1, question: str = "Which?", first: str = ""
) -> StudyAnswer:
    """Run a study of some axes on a history, or on copies of it; ``first`` are more lines of its head."""
    names = [f"demo{number}" for number in range(histories)]
    for name in names:
        if not (store / f"{name}.parquet").exists():
            write_history(history, store, name)
    legs = "".join(
        f'[[overlay.leg]]\nposition = "{side}"\nright = "{right}"\nroll = "{roll}"\n'
        f"strike = {{ percent_of_spot = {strike} }}\n"
        for side, right, roll, strike in (("long", "put", "quarter", 95), ("short", "call", "month", 110))
    )
    head = f"question = {json.dumps(question, ensure_ascii=False)}\nhistories = {json.dumps(names)}\n"
    return run_study(parse_study(f"{head}{first or 'resamples = 60'}\n[overlay]\n{legs}{axes}"), store=store)


def minus(text: str) -> str:
    """With the minus sign of the page, and none on zero."""
    return text.lstrip("+-") if set(text) <= set("+-0.,%") else text.replace("-", "−")


def scripts(root: Node) -> list[str]:
    """The text of each script, data among them."""
    return ["".join(str(one) for one in node.inside) for node in root.all("script")]


def words_of(root: Node) -> str:
    """What is read, scripts left out."""
    pieces = []
    for node in root.walk():
        if node.tag not in ("script", "style", "title"):
            pieces += [one for one in node.inside if isinstance(one, str)]
    return " ".join(" ".join(pieces).split())


def same_ids(root: Node) -> list[str]:
    """Ids that stand at more than one element."""
    ids = Counter(node.attributes["id"] for node in root.walk() if "id" in node.attributes)
    return [name for name, times in ids.items() if times > 1]
