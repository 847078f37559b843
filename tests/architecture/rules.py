"""What the modules of the three packages may import and call, read from their syntax trees."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parents[2]
PACKAGES = ("backtest", "data_loaders", "studies")

#: The only arrows between packages.
ARROWS = {("studies", "backtest"), ("studies", "data_loaders")}
#: Ours, and not to be imported by any of the three.
OURS = (*PACKAGES, "tests")

#: Stands for the package of an import that leaves its own upwards, or whose name is worked out at run time.
OUT_OF_REACH = "<out of reach>"

#: Where pandas enters and leaves the engine; everything between is numpy.
PANDAS_DOORS = ("backtest/market.py", "backtest/volatility/surface.py", "backtest/engine/result.py")
#: Where the engine's figures become pictures.
PICTURES = "backtest/charts"

MOST_LINES = 400

#: Modules that reach files, the terminal or other processes.
OUTSIDE_WORLD = {
    "codecs", "csv", "fileinput", "glob", "gzip", "http", "io", "json", "linecache", "logging", "mmap", "os",
    "pathlib", "pickle", "pprint", "pyarrow", "rich", "shelve", "shutil", "socket", "sqlite3", "subprocess", "sys",
    "tempfile", "tomllib", "typer", "urllib", "warnings", "zipfile",
}  # fmt: skip
#: Built-in functions that read, write or print.
OUTSIDE_CALLS = {"open", "print", "input", "exec", "eval", "breakpoint"}
#: The same as methods or as functions of numpy, pandas and matplotlib.
OUTSIDE_METHODS = {
    "open", "read", "write", "read_text", "read_bytes", "write_text", "write_bytes", "savefig", "show",
    "load", "loadtxt", "genfromtxt", "fromfile", "memmap", "save", "savez", "savez_compressed", "savetxt", "tofile",
    "to_csv", "to_parquet", "to_feather", "to_pickle", "to_excel", "to_json", "to_html", "to_sql", "to_hdf",
}  # fmt: skip


@dataclass(frozen=True)
class Import:
    """One imported module, by its full dotted name."""

    name: str
    line: int

    @property
    def package(self) -> str:
        return self.name.split(".")[0]


def modules(*packages: str) -> list[str]:
    """Every module of the packages as a path from the root, such as ``backtest/engine/plan.py``."""
    found = [path for package in packages for path in sorted((ROOT / package).rglob("*.py"))]
    return [path.relative_to(ROOT).as_posix() for path in found]


def source_of(module: str) -> str:
    return (ROOT / module).read_text(encoding="utf-8")


def imports(source: str, module: str) -> list[Import]:
    """Imports anywhere in a module: absolute, relative, in functions, under ``TYPE_CHECKING``, and by name.

    ``from a.b import c`` counts as ``a.b.c``, so that a submodule is seen whichever way it comes in.
    """
    return list(_imports(ast.parse(source), module))


def _imports(tree: ast.Module, module: str) -> Iterator[Import]:
    inside = module.split("/")[:-1]  # the package that a module, or an __init__, is in
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (Import(alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = [node.module] if node.module else []
            if node.level > len(inside):
                base = [OUT_OF_REACH, *base]
            elif node.level:
                base = inside[: len(inside) - node.level + 1] + base
            yield from (Import(".".join([*base, alias.name]), node.lineno) for alias in node.names)
        elif isinstance(node, ast.Call) and _called(node) in ("import_module", "__import__"):
            named = [arg.value for arg in node.args if isinstance(arg, ast.Constant) and isinstance(arg.value, str)]
            yield Import(named[0] if named else OUT_OF_REACH, node.lineno)


def _called(node: ast.Call) -> str:
    match node.func:
        case ast.Name(id=name) | ast.Attribute(attr=name):
            return name
    return ""


def wrong_arrows(source: str, module: str) -> list[str]:
    """Imports that go from the module's package to another of ours, or out of reach, against the arrows."""
    package = module.split("/")[0]
    return [
        f"{module}:{found.line}: {package} -> {found.name}"
        for found in imports(source, module)
        if found.package in (*OURS, OUT_OF_REACH)
        and found.package != package
        and (package, found.package) not in ARROWS
    ]


def outside_world(source: str, module: str) -> list[str]:
    """Imports and calls by which a module could read a file or print."""
    found = [
        f"{module}:{entry.line}: imports {entry.name}"
        for entry in imports(source, module)
        if entry.package in OUTSIDE_WORLD
    ]
    for node in ast.walk(ast.parse(source)):
        if not isinstance(node, ast.Call):
            continue
        name = _called(node)
        plain = isinstance(node.func, ast.Name) and name in OUTSIDE_CALLS
        method = isinstance(node.func, ast.Attribute) and (name in OUTSIDE_METHODS or name.startswith("read_"))
        if plain or method:
            found.append(f"{module}:{node.lineno}: calls {name}")
    return found


def uses(source: str, module: str, name: str) -> list[str]:
    """Imports of a module or of anything in it, and mentions such as ``matplotlib.pyplot``."""
    found = [
        f"{module}:{entry.line}: imports {entry.name}"
        for entry in imports(source, module)
        if entry.name == name or entry.name.startswith(name + ".")
    ]
    if "." in name:
        found += [
            f"{module}:{node.lineno}: mentions {name}"
            for node in ast.walk(ast.parse(source))
            if isinstance(node, ast.Attribute) and ast.unparse(node) == name
        ]
    return found
