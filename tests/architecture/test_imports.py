"""Rung: behaviour. The house as DEVELOPERS.md draws it, read from the source: arrows, doors and lengths.

The rules are in ``rules.py``; the second half of this file shows on made-up sources that they can fail.
"""

from __future__ import annotations

import ast
import re
import sys
import tomllib

import pytest

from .rules import (
    MOST_LINES,
    PACKAGES,
    PANDAS_DOORS,
    PICTURES,
    ROOT,
    imports,
    modules,
    outside_world,
    source_of,
    uses,
    wrong_arrows,
)

ALL = modules(*PACKAGES)
#: What comes along with a dependency and may be imported with it.
COMES_WITH = {"rich": "typer", "markupsafe": "jinja2", "click": "typer"}


def test_every_package_is_looked_at() -> None:
    assert len(ALL) > 40
    assert {module.split("/")[0] for module in ALL} == set(PACKAGES)
    assert "backtest/engine/plan.py" in ALL
    # a package of ours beside the three would escape the rules
    found = {path.parent.name for path in ROOT.glob("*/__init__.py")}
    assert found == {*PACKAGES, "tests"}


@pytest.mark.parametrize("module", ALL)
def test_arrows_go_one_way(module: str) -> None:
    assert wrong_arrows(source_of(module), module) == []


def test_the_two_arrows_are_in_use() -> None:
    """An empty reading of the imports would let everything pass."""
    seen = {
        (module.split("/")[0], found.package)
        for module in ALL
        for found in imports(source_of(module), module)
        if found.package in PACKAGES and found.package != module.split("/")[0]
    }
    assert seen == {("studies", "backtest"), ("studies", "data_loaders")}


@pytest.mark.parametrize("module", modules("backtest"))
def test_the_engine_reads_no_files_and_prints_nothing(module: str) -> None:
    assert outside_world(source_of(module), module) == []


def test_pandas_enters_and_leaves_the_engine_by_its_doors_only() -> None:
    using = [module for module in modules("backtest") if uses(source_of(module), module, "pandas")]
    assert sorted(using) == sorted(PANDAS_DOORS)


def test_pandas_is_loaded_by_the_engine_only_when_a_frame_is_asked_for() -> None:
    """Its imports stand in functions or under ``TYPE_CHECKING``, never at the head of a module."""
    for module in PANDAS_DOORS:
        head = [node for node in ast.parse(source_of(module)).body if isinstance(node, ast.Import | ast.ImportFrom)]
        names = [alias.name for node in head if isinstance(node, ast.Import) for alias in node.names]
        names += [node.module or "" for node in head if isinstance(node, ast.ImportFrom)]
        assert not any(name.split(".")[0] == "pandas" for name in names), module


@pytest.mark.parametrize("module", ALL)
def test_no_pyplot(module: str) -> None:
    """Figures are made as objects: pyplot keeps a list of them for the whole process, and may want a screen."""
    assert uses(source_of(module), module, "matplotlib.pyplot") == []
    assert uses(source_of(module), module, "pylab") == []


def test_the_engine_draws_in_its_charts_only() -> None:
    using = [module for module in modules("backtest") if uses(source_of(module), module, "matplotlib")]
    assert [module for module in using if not module.startswith(PICTURES)] == []


@pytest.mark.parametrize("module", ALL)
def test_no_module_is_longer_than_400_lines(module: str) -> None:
    assert len(source_of(module).splitlines()) <= MOST_LINES


def test_every_module_of_ours_that_is_imported_is_there() -> None:
    missing = []
    for module in ALL:
        for found in imports(source_of(module), module):
            if found.package in PACKAGES:
                parts = found.name.split(".")
                # the last part may be a name inside the module before it
                if not any(_is_module("/".join(parts[:n])) for n in (len(parts), len(parts) - 1) if n):
                    missing.append(f"{module}:{found.line}: {found.name}")
    assert missing == []


def _is_module(path: str) -> bool:
    return (ROOT / f"{path}.py").is_file() or (ROOT / path / "__init__.py").is_file()


def test_what_is_imported_from_elsewhere_is_declared() -> None:
    """Each outside package is declared (the extra `cluster` too), or comes with one that is; and each is used."""
    project = tomllib.loads(source_of("pyproject.toml"))["project"]
    declared = [*project["dependencies"], *project["optional-dependencies"]["cluster"]]
    names = {re.split(r"[<>=!~ \[]", line)[0] for line in declared}
    seen = {found.package for module in ALL for found in imports(source_of(module), module)}
    seen -= set(sys.stdlib_module_names) | {*PACKAGES, "__future__"}
    assert {COMES_WITH.get(name, name) for name in seen} == names


# ---------------------------------------------------------------- the rules can fail

ENGINE = "backtest/engine/made_up.py"


@pytest.mark.parametrize(
    ("module", "source", "arrow"),
    [
        (ENGINE, "import studies.cli", "backtest -> studies.cli"),
        (ENGINE, "import numpy, data_loaders as d", "backtest -> data_loaders"),
        (ENGINE, "def f():\n    from data_loaders.history import History", "backtest -> data_loaders.history.History"),
        (ENGINE, "if TYPE_CHECKING:\n    from studies import results", "backtest -> studies.results"),
        (ENGINE, "from ...studies import results", "backtest -> <out of reach>.studies.results"),
        (ENGINE, "from tests.reference import slow_twin", "backtest -> tests.reference.slow_twin"),
        (ENGINE, "import importlib\nimportlib.import_module('studies.cli')", "backtest -> studies.cli"),
        (ENGINE, "__import__(name)", "backtest -> <out of reach>"),
        ("data_loaders/made_up.py", "from backtest import replay", "data_loaders -> backtest.replay"),
        ("data_loaders/made_up.py", "class A:\n    def f(self):\n        import studies", "data_loaders -> studies"),
        ("backtest/made_up.py", "from .. import studies", "backtest -> <out of reach>.studies"),
        ("studies/page/made_up.py", "from tests import properties", "studies -> tests.properties"),
    ],
)  # fmt: skip
def test_a_wrong_arrow_is_flagged(module: str, source: str, arrow: str) -> None:
    found = wrong_arrows(source, module)
    assert len(found) == 1
    assert found[0].startswith(f"{module}:")
    assert found[0].endswith(f": {arrow}")


@pytest.mark.parametrize(
    ("module", "source"),
    [
        (ENGINE, "from ..market import Market\nfrom .plan import Plan\nfrom .. import calendar\nimport numpy"),
        ("backtest/made_up.py", "from .engine.replay import replay\nimport backtest.market"),
        ("studies/made_up.py", "from backtest import replay\nimport data_loaders.store\nfrom . import results"),
        ("studies/page/made_up.py", "from ..results import write\nfrom backtest.analytics import mixes"),
        ("data_loaders/made_up.py", "from .schema import FILES\n'import studies'  # import studies"),
    ],
)
def test_a_right_arrow_passes(module: str, source: str) -> None:
    assert wrong_arrows(source, module) == []


def test_relative_imports_are_resolved() -> None:
    source = "from ..market import Market\nfrom . import plan\nfrom .. import calendar\nfrom .legs import a, b"
    names = [found.name for found in imports(source, ENGINE)]
    assert names == [
        "backtest.market.Market", "backtest.engine.plan", "backtest.calendar",
        "backtest.engine.legs.a", "backtest.engine.legs.b",
    ]  # fmt: skip
    # an __init__ is inside its own package
    assert [found.name for found in imports("from .a import b", "backtest/engine/__init__.py")] == [
        "backtest.engine.a.b"
    ]


@pytest.mark.parametrize(
    "source",
    [
        "x = open('prices.csv')",
        "def f():\n    print('done')",
        "from pathlib import Path",
        "import os.path",
        "import pandas as pd\npd.read_csv('prices.csv')",
        "import numpy as np\nnp.loadtxt(path)",
        "path.read_text()",
        "frame.to_csv('out.csv')",
        "figure.savefig('out.png')",
        "import sys",
    ],
)
def test_reading_and_printing_are_flagged(source: str) -> None:
    assert outside_world(source, ENGINE) != []


@pytest.mark.parametrize(
    "source",
    [
        "def reopen(x):\n    return x.to_frame(), x.opened, half_spread_bars(x)",
        '"""\n>>> print(1)\n"""',
        "readable = spread(1)",
    ],
)
def test_words_that_only_look_so_are_not(source: str) -> None:
    assert outside_world(source, ENGINE) == []


@pytest.mark.parametrize(
    "source",
    [
        "import matplotlib.pyplot as plt",
        "from matplotlib import pyplot",
        "def f():\n    from matplotlib.pyplot import subplots",
        "import matplotlib\nmatplotlib.pyplot.plot(x)",
    ],
)
def test_pyplot_is_flagged_however_it_comes_in(source: str) -> None:
    assert uses(source, "backtest/charts.py", "matplotlib.pyplot") != []
    assert uses(source, "backtest/charts.py", "pandas") == []
