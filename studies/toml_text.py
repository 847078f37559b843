"""What the readers of TOML files share: a key's place in the text, checks of keys, plain values in and out."""

from __future__ import annotations

import datetime as dt
import difflib
import json
import re
import tomllib
from collections.abc import Hashable, Mapping
from numbers import Number
from pathlib import Path
from typing import Any, TypeAlias

from .errors import FileError

KeyPath: TypeAlias = "tuple[str | int, ...]"

#: Whole numbers with more digits are taken for a mistake.
MOST_DIGITS = 1_000
#: Tables in tables; ours are five deep.
DEEPEST = 20
#: A value that spans more lines than this is not looked through for its place.
LONGEST_VALUE_LINES = 200

_TOO_LARGE = 10**MOST_DIGITS
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


class KeyProblem(Exception):
    """A problem at a path of keys, before file and line are known."""

    def __init__(self, path: KeyPath, problem: str) -> None:
        super().__init__(path, problem)
        self.path, self.problem = path, problem


def read_toml_text(path: Path, *, error: type[FileError], what: str, largest: int) -> str:
    """The text of a file of at most ``largest`` bytes, or ``error``; ``what`` is what it should have been."""

    def wrong(problem: str) -> FileError:
        return error(file=path.name, line=None, key=None, problem=problem)

    try:
        if not path.is_file():
            raise wrong("is a folder, not a file" if path.is_dir() else "there is no such file")
        if path.stat().st_size > largest:
            raise wrong(f"larger than {largest:,} bytes: no {what}")
        return path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as problem:
        raise wrong(f"cannot be read: {problem}") from None


def parse_toml(text: str, *, file: str, error: type[FileError]) -> dict[str, Any]:
    """The table of a text, or ``error`` with its line."""
    try:
        table = tomllib.loads(text)
    except (ValueError, RecursionError) as problem:  # not only the parser's own: also a number of 5,000 digits
        found = re.search(r"line (\d+)", str(problem))
        line = int(found.group(1)) if found else None
        raise error(file=file, line=line, key=None, problem=f"not valid TOML: {problem}") from None
    try:
        _check_size((), table)
    except KeyProblem as problem:
        raise error(
            file=file, line=line_of(text, problem.path), key=key_words(problem.path), problem=problem.problem
        ) from None
    return table


def key_words(path: KeyPath) -> str:
    """A path as it is shown: tables of a list count from 1, odd characters are escaped, long keys cut.

    Examples
    --------
    >>> key_words(("leg", 0, "strike"))
    'leg.1.strike'
    """
    return ".".join(_key_word(part) for part in path)


def _key_word(part: str | int) -> str:
    if isinstance(part, int):
        return str(part + 1)
    shown = part if part.isprintable() else repr(part)[1:-1]
    return shown if len(shown) <= 60 else f"{shown[:57]}..."


def table_of(path: KeyPath, value: Any, keys: tuple[str, ...]) -> dict[str, Any]:
    """The value, if it is a table of known keys."""
    if not isinstance(value, dict):
        raise KeyProblem(path, f"is {value!r}; it takes a table with keys: {', '.join(keys)}")
    known_keys(path, value, keys)
    return value


def known_keys(path: KeyPath, table: Mapping[str, Any], keys: tuple[str, ...]) -> None:
    """Raise KeyProblem at the first key that is none of ``keys``."""
    for key in table:
        if key not in keys:
            raise KeyProblem((*path, key), f"unknown key{near(key, keys, '.')} Known here: {', '.join(keys)}")


def near(word: str, words: tuple[str, ...], otherwise: str) -> str:
    """``; did you mean ...?`` with the nearest of some words, if one is near."""
    close = difflib.get_close_matches(word, words, n=1)
    return f"; did you mean {close[0]}?" if close else otherwise


def line_of(text: str, path: KeyPath) -> int | None:
    """Line on which a key path is written, counted from 1; None if it cannot be told.

    The parser itself is asked: the line is the first that names the key and after which the file, cut off
    there, holds the path. So comments, quoted look-alikes and dotted keys need no grammar of our own.
    """
    lines = text.split("\n")
    key = next((part for part in reversed(path) if isinstance(part, str)), None)
    if key is None:
        return None
    for number, line in enumerate(lines):
        if key not in line:
            continue
        for stop in range(number + 1, min(number + LONGEST_VALUE_LINES, len(lines)) + 1):
            try:
                table = tomllib.loads("\n".join(lines[:stop]))
            except (ValueError, RecursionError):
                continue  # cut off inside a value
            if _holds(table, path):
                return _within(lines, key, path, number, stop)
            break
    return None


def nearest_line(text: str, path: KeyPath) -> int | None:
    """Line of a key path, or of the nearest table around it that is written: a key may be missed where it is not."""
    found = (line_of(text, path[:length]) for length in range(len(path), 0, -1))
    return next((line for line in found if line is not None), None)


def _within(lines: list[str], key: str, path: KeyPath, first: int, stop: int) -> int:
    """Line inside a value of several lines: for the third table of a list, the third that names the key."""
    naming = [number for number in range(first, stop) if key in lines[number]]
    index = next((part for part in path if isinstance(part, int)), 0)
    in_header = lines[first].lstrip().startswith("[") or len(naming) == 1
    return naming[0 if in_header else min(index, len(naming) - 1)] + 1


def _holds(table: Any, path: KeyPath) -> bool:
    for part in path:
        if isinstance(part, int):
            if not isinstance(table, list) or part >= len(table):
                return False
        elif not isinstance(table, dict) or part not in table:
            return False
        table = table[part]
    return True


def plain(path: KeyPath, value: Any) -> Any:
    """A copy in the values of a TOML file: texts, numbers, lists and tables; dates as ISO text.

    Raises
    ------
    KeyProblem
        For anything else, at its path.
    """
    if hasattr(value, "item"):  # a number of numpy's
        value = value.item()
    if isinstance(value, Mapping):
        return {str(key): plain((*path, str(key)), item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain((*path, number), item) for number, item in enumerate(value)]
    if isinstance(value, dt.date) and not isinstance(value, dt.datetime):
        return value.isoformat()
    if not isinstance(value, str | int | float):
        raise KeyProblem(path, f"is {value!r}; it takes a text, a number, a date, a list or a table of them")
    _check_size(path, value)
    return value


def _check_size(path: KeyPath, value: Any) -> None:
    """What TOML lets through and nothing here can show: hexadecimal numbers of any length, dotted keys of any depth."""
    waiting: list[tuple[KeyPath, Any]] = [(path, value)]
    while waiting:
        at, found = waiting.pop()
        if isinstance(found, int) and abs(found) >= _TOO_LARGE:
            raise KeyProblem(at, f"is a whole number of more than {MOST_DIGITS:,} digits")
        if isinstance(found, dict | list):
            if len(at) > DEEPEST:
                raise KeyProblem(at[:1], f"holds tables in tables, more than {DEEPEST} deep")
            items: Any = found.items() if isinstance(found, dict) else enumerate(found)
            waiting += [((*at, key), item) for key, item in items]


def same_key(value: Any) -> Hashable:
    """What is equal for two plain values that mean the same: 95 and 95.0, but not 1 and true.

    Examples
    --------
    >>> same_key({"b": 1, "a": 95}) == same_key({"a": 95.0, "b": 1.0})
    True
    """
    if isinstance(value, dict):
        return ("table", *sorted((key, same_key(item)) for key, item in value.items()))
    if isinstance(value, list):
        return ("list", *(same_key(item) for item in value))
    kind = "number" if isinstance(value, Number) and not isinstance(value, bool) else type(value).__name__
    return (kind, value)


def toml(value: Any) -> str:
    """A plain value as it is written in a TOML file.

    Examples
    --------
    >>> toml({"percent_of_spot": 95}), toml(["a", 1.5, True])
    ('{ percent_of_spot = 95 }', '["a", 1.5, true]')
    """
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{toml_key(key)} = {toml(item)}" for key, item in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml(item) for item in value) + "]"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # JSON's escapes are TOML's, but for the delete character, which TOML wants escaped
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, dt.date):
        return value.isoformat()
    # a number of numpy's would write its type as well
    return repr(value.item() if hasattr(value, "item") else value)


def toml_key(key: str) -> str:
    """A key as it is written, in quotes where it needs them."""
    return key if _BARE_KEY.fullmatch(key) else toml(key)
