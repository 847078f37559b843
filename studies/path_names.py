"""What overlay, hold and mixes are called wherever they are shown."""

from __future__ import annotations

#: What every figure set is called, in the order of all tables.
PATHS = {
    "overlay": "overlay",
    "hold": "hold",
    "mix_same_beta": "same-beta mix",
    "mix_same_volatility": "same-volatility mix",
    "mix_same_return": "same-return mix",
    "mix_same_drawdown": "same-drawdown mix",
    "mix_same_delta": "same-delta mix",
    "mix_sale": "sale instead",
    "put_only": "put only",
    "call_only": "call only",
}
