"""What a header lacks, or leaves open, in words."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from .csv_files import TextTable
from .errors import Problems, quoted
from .schema import FileSchema, Matched, is_adjusted
from .sources import Refused

#: Names of a header that a message repeats.
_SHOWN_NAMES = 20


def report_header(text: TextTable, schema: FileSchema, matched: Matched, problems: Problems) -> None:
    """Note every role that the header does not settle."""
    where: dict[str, Any] = {"file": text.file, "kind": text.kind, "line": text.header_line}
    prefix = "" if text.kind == "prices" else f"{text.kind}."
    for role, name in matched.unknown:
        option = f"{prefix}{role.removeprefix('vol_')}={name}"
        problems.add("unknown-column", name=name, option=option, header=header_words(text.header), **where)
    for wrong in matched.problems:
        column = wrong.column
        facts: dict[str, Any] = {"role": column.role, "meaning": column.meaning, "option": f"{prefix}{column.role}"}
        if wrong.candidates:
            columns = ", ".join(map(repr, wrong.candidates))
            problems.add("ambiguous-column", columns=columns, exact=column.exact[0], **facts, **where)
            continue
        if len(text.header) == 1 and text.dialect.separator is not None:
            # nothing below can be read either
            raise Refused("no-separator", line=text.header_line, header=header_words(text.header))
        adjusted = [name for name in text.header if is_adjusted(name)]
        hint = ""
        if column.role == "close" and adjusted:
            hint = (
                f" {adjusted[0]!r} is adjusted for dividends and splits and is not taken for the price "
                "that was traded; if you mean it, rename it."
            )
        names = f"'{column.exact[0]}'" + (
            " or by its tenor in days, such as '30'" if schema.tenors and column.role == "vol" else ""
        )
        problems.add("missing-column", header=header_words(text.header), names=names, hint=hint, **facts, **where)


def header_words(header: Sequence[str]) -> str:
    """The names of a header as a message repeats them."""
    shown = header[:_SHOWN_NAMES]
    more = f" and {len(header) - len(shown)} more" if len(header) > len(shown) else ""
    return ", ".join(quoted(name) if name.strip() else "a column without a name" for name in shown) + more
