"""Small histories made by hand, without files, for tests of the store."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from data_loaders import History, SourceFile
from data_loaders.schema import Kind

NOTHING = float("nan")


def history(
    columns: Mapping[str, Sequence[float]],
    *,
    first: str = "2020-01-01",
    days: Sequence[str] | None = None,
    ends: Mapping[Kind, str] | None = None,
    notes: tuple[str, ...] = (),
    sha256: str = "ab" * 32,
) -> History:
    """Columns on days in a row from ``first``, or on ``days``; ``ends`` are last days of files, if not the last."""
    count = len(next(iter(columns.values())))
    index = pd.date_range(first, periods=count) if days is None else pd.DatetimeIndex(days)
    kinds: dict[Kind, None] = {"prices": None}
    for name in columns:
        kinds.setdefault("rates" if name == "rate" else "vol" if name.startswith("vol") else "prices")
    start, end = index[0].date(), index[-1].date()
    return History(
        frame=pd.DataFrame(
            {name: np.array(values, dtype=np.float64) for name, values in columns.items()},
            index=pd.DatetimeIndex(index.to_numpy().astype("datetime64[ns]"), name="date"),
        ),
        sources=tuple(
            SourceFile(
                kind=kind, file=f"{kind}.csv", sha256=sha256, rows=count, first=start,
                last=dt.date.fromisoformat((ends or {}).get(kind, end.isoformat())), columns=(("date", "date"),),
                unit="percent" if kind in ("vol", "rates") else None,
            )
            for kind in kinds
        ),
        repairs=(),
        notes=notes,
        usable_from=start,
    )  # fmt: skip


def walk(seed: int, days: int = 300) -> History:
    """A history of close and vol, another for each seed."""
    draws = np.random.default_rng(seed)
    return history({
        "close": 100.0 * np.exp(np.cumsum(draws.normal(0.0, 0.01, days))),
        "vol": draws.uniform(0.1, 0.4, days),
    })  # fmt: skip
