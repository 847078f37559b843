"""The demo: the files of an invented market, an overlay and a study, written into a folder of the user's."""

from __future__ import annotations

import shutil
import tempfile
from importlib.resources import files
from pathlib import Path

from data_loaders.demo_market import DemoMarket, write_demo_market

from .errors import ResultsError

#: The overlay of the demo, as a user would write it.
DEMO_OVERLAY = """\
# A standing band: each quarter buy a put 5% below, each month sell a call 10% above.
name = "quarterly 95 put, monthly 110 call"
account = "resize"            # or "cash"

[[leg]]
position = "long"
right = "put"
roll = "quarter"              # month, quarter, half, year
strike = { percent_of_spot = 95 }

[[leg]]
position = "short"
right = "call"
roll = "month"
strike = { percent_of_spot = 110 }

[costs]
half_spread_vol = 0.5         # points of vol

[volatility]
smile = "index"               # flat, mild, index, steep, or { rho = -0.6, eta = 1.1, gamma = 0.5 }
quote = "variance swap"       # or "at the money"
"""


def write_demo_files(folder: Path) -> DemoMarket:
    """Write the demo's CSV files, ``overlay.toml`` and ``study.toml``; files already there must be the demo's own.

    Raises
    ------
    ResultsError
        If a file of one of these names is there with other content: nothing is overwritten then.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryDirectory(prefix=".demo.", dir=folder) as fresh_name:
            fresh = Path(fresh_name)
            made = write_demo_market(fresh)
            (fresh / "overlay.toml").write_text(DEMO_OVERLAY, encoding="utf-8")
            standing = files(__package__) / "moneyness.toml"
            (fresh / "study.toml").write_text(standing.read_text(encoding="utf-8"), encoding="utf-8")
            written = sorted(fresh.iterdir())
            for file in written:
                there = folder / file.name
                if there.exists() and (not there.is_file() or there.read_bytes() != file.read_bytes()):
                    raise ResultsError(f"{there} is not the demo's own file: give another folder, or move it away")
            for file in written:
                shutil.move(file, folder / file.name)
    except OSError as error:
        raise ResultsError(f"cannot write the demo into {folder}: {error}") from None
    return DemoMarket(
        name=made.name,
        prices=folder / made.prices.name,
        vol=folder / made.vol.name,
        dividends=folder / made.dividends.name,
        rates=folder / made.rates.name,
    )
