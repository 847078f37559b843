"""The report's tables as CSV files for spreadsheets: plain numbers (decimals, not percents), ISO dates."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
from pyarrow.csv import write_csv

from backtest.analytics import Performance
from backtest.analytics.ledger import Ledger
from backtest.analytics.performance import TRADING_DAYS
from backtest.analytics.resampling import ComparisonInference

from .replay_history import Answer, daily_frame
from .report import Report

#: A cell of text that begins with one of these would be read as a formula.
FORMULA_STARTS = ("=", "+", "-", "@")
FIGURES_OF_THE_CONTEST = ("annual_return", "sharpe", "max_drawdown", "shortfall_21_day")


def safe_text(text: str) -> str:
    """Text that a spreadsheet does not take for a formula: an apostrophe before what looks like one.

    Examples
    --------
    >>> safe_text("=1+1"), safe_text("95 put")
    ("'=1+1", '95 put')
    """
    return f"'{text}" if text.lstrip().startswith(FORMULA_STARTS) else text


def write_tables(report: Report, folder: Path) -> None:
    """Write every table of the report into a new folder, one file each."""
    folder.mkdir()
    for name, frame in tables_of(report).items():
        write_csv(_safe(pa.Table.from_pandas(frame, preserve_index=False)), folder / f"{name}.csv")


def _safe(table: pa.Table) -> pa.Table:
    """Texts made safe and times cut to dates; what cannot be had is an empty cell."""
    for position, column in enumerate(table.schema):
        cells = table.column(position)
        if pa.types.is_timestamp(column.type):
            table = table.set_column(position, column.name, cells.cast(pa.date32()))
        elif pa.types.is_string(column.type) or pa.types.is_large_string(column.type):
            texts = [None if text is None else safe_text(text) for text in cells.to_pylist()]
            table = table.set_column(position, column.name, pa.array(texts, pa.string()))
    return table


def tables_of(report: Report) -> dict[str, pd.DataFrame]:
    """All tables by file name."""
    found, findings = report.answer, report.findings
    return {
        "overlay": pd.DataFrame({"overlay": [found.replay.overlay.name]}),
        "figures": _figures(found.figures),
        "daily": daily_frame(found),
        "rolls": found.replay.rolls_frame(),
        "roll_costs": pd.DataFrame([asdict(leg) for leg in found.costs.legs]),
        "smiles": pd.DataFrame(
            [
                {
                    "smile": name, "used": rung.replay is found.replay, "annual_return": rung.figures.annual_return,
                    "sharpe": rung.figures.sharpe, "sharpe_less_same_beta_mix": findings.ladder_gains[name],
                    "options_net_a_year": rung.costs.net_a_year,
                }
                for name, rung in found.ladder.items()
            ]
        ),
        "break_even": pd.DataFrame(
            [
                {"question": name, "value": one.value, "searched_from": one.searched[0], "searched_to": one.searched[1]}
                for name in findings.break_evens.__slots__
                for one in [getattr(findings.break_evens, name)]
            ]
        ),
        "contest": _contest(report.inference.comparisons),
        "falls": _table([_flat(one) for one in findings.episodes], "peak", "trough", "recovery"),
        "rises": _table([_flat(one) for one in findings.rallies], "first", "last"),
        "without_worst": _table([_without(one) for one in findings.without_worst], "left_out_from", "left_out_to"),
        "ledger": _ledger(findings.ledger),
        "ledger_by_year": _ledger(findings.ledger_by_year),
        "attribution": _attribution(report),
        "calendar_years": _calendar(report, months=False),
        "calendar_months": _calendar(report, months=True),
        "roll_days": pd.DataFrame(
            {
                "offset": findings.luck.offsets, "annual_return": findings.luck.annual_return,
                "sharpe": findings.luck.sharpe, "sharpe_less_same_beta_mix": findings.luck.sharpe_gain,
                "max_drawdown": findings.luck.max_drawdown,
            }
        ),
        "verdict": pd.DataFrame([asdict(clause) for clause in report.clauses]),
        **_beside(found),
    }  # fmt: skip


def _beside(found: Answer) -> dict[str, pd.DataFrame]:
    """Defaults of a counterparty, where they were asked about."""
    if found.counterparty is None:
        return {}
    return {"counterparty": _table([_flat(one) for one in found.counterparty.events], "date", "exposure", "loss")}


def _table(rows: list[dict[str, Any]], *columns: str) -> pd.DataFrame:
    """Rows as a frame; without any, the columns that name what there is none of."""
    return pd.DataFrame(rows) if rows else pd.DataFrame(columns=list(columns), dtype=str)


def _figures(figures: Mapping[str, Performance | None]) -> pd.DataFrame:
    return pd.DataFrame([{"path": name} | _flat(one) for name, one in figures.items() if one is not None])


def _contest(comparisons: Mapping[str, ComparisonInference]) -> pd.DataFrame:
    rows = []
    for name, one in comparisons.items():
        row: dict[str, Any] = {"overlay_less": name}
        for figure in FIGURES_OF_THE_CONTEST:
            interval = getattr(one, figure)
            row |= {figure: interval.value, f"{figure}_low": interval.low, f"{figure}_high": interval.high}
        row |= {
            "probability_higher_return": one.probability_higher_return,
            "probability_higher_sharpe": one.probability_higher_sharpe,
            "probability_shallower": one.probability_shallower,
            "sharpe_test_p_value": one.sharpe_test.p_value,
        }
        rows.append(row)
    return pd.DataFrame(rows)


def _flat(one: Any) -> dict[str, Any]:
    """A dataclass as one row; a mapping inside it as a column an entry."""
    row: dict[str, Any] = {}
    for name in one.__slots__:
        value = getattr(one, name)
        if isinstance(value, dict):
            row |= {f"{name}_{key}": entry for key, entry in value.items()}
        else:
            row[name] = _day(value) if isinstance(value, np.datetime64) else value
    return row


def _without(one: Any) -> dict[str, Any]:
    left_out = (None, None) if one.left_out is None else tuple(_day(day) for day in one.left_out)
    figures = {f"mean_return_{name}": value for name, value in one.mean_return.items()}
    figures |= {f"sharpe_{name}": value for name, value in one.sharpe.items()}
    return {"left_out_from": left_out[0], "left_out_to": left_out[1]} | figures


def _day(day: np.datetime64) -> str:
    return str(day.astype("datetime64[D]"))


def _ledger(ledger: Ledger) -> pd.DataFrame:
    """Money per 1 of starting wealth; the lines of a row add up to ``overlay``."""
    made = pd.DataFrame(ledger.money, columns=list(ledger.lines))
    made.insert(0, "span", list(ledger.labels))
    made["overlay"] = ledger.overlay
    made["overlay_wealth_at_start"] = ledger.start_wealth
    return made


def _attribution(report: Report) -> pd.DataFrame:
    found = report.answer.attribution
    shares = found.risk_shares()
    return pd.DataFrame(
        [
            {"part": name, "a_year": float(np.mean(part) * TRADING_DAYS), "share_of_risk": shares[name]}
            for name, part in found.parts().items()
        ]
    )


def _calendar(report: Report, *, months: bool) -> pd.DataFrame:
    rows = []
    for name, table in report.findings.calendar.items():
        for year, yearly, monthly in zip(table.years.tolist(), table.yearly, table.monthly, strict=True):
            if not months:
                rows.append({"path": name, "year": year, "return": yearly})
                continue
            rows += [
                {"path": name, "year": year, "month": month, "return": value}
                for month, value in enumerate(monthly, start=1)
                if np.isfinite(value)
            ]
    return pd.DataFrame(rows)
