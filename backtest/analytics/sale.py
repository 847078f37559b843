"""Selling shares instead of protecting them.

At inception the holder sells so much of the holding that the share of the same-beta mix is kept, pays for the sale and
the tax on its gain out of what it brings, keeps the rest in cash at the rate, and leaves both alone from then on. Cost,
gain and tax are the holder's own statements: no tax rule of any country is in here. The share is found with hindsight
like that of the mix (C10).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..beside import Sale

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SaleInstead:
    """The holding of which a part was sold.

    ``share`` is the share of stock kept at inception, ``charge`` what cost and tax take of what is sold, both decimal;
    ``wealth`` is growth of 1, shape ``(day,)``, exactly 1 on the first day, before the charge.
    """

    share: float
    charge: float
    wealth: Array


def sale_instead(sale: Sale, *, share: float | None, hold: Array, rate_return: Array) -> SaleInstead | None:
    """Growth of 1 with all but ``share`` of the holding sold on the first day; None where there is no such share.

    Parameters
    ----------
    share : float, optional
        Of the same-beta mix; under 0 everything is sold, over 1 nothing.
    hold : ndarray, shape (day,)
        Growth of 1 of buy-and-hold.
    rate_return : ndarray, shape (day,)
        Return on cash over each day; the first is not used.

    Examples
    --------
    >>> import numpy as np
    >>> found = sale_instead(
    ...     Sale(gain_percent=50.0, tax_percent=20.0), share=0.5, hold=np.array([1.0, 1.2]), rate_return=np.zeros(2)
    ... )
    >>> found.charge, found.wealth
    (0.1, array([1.  , 1.05]))
    """
    if share is None or not np.isfinite(share):
        return None
    kept = min(max(float(share), 0.0), 1.0)
    charge = sale.cost_bps / 1e4 + (sale.tax_percent / 100.0) * (sale.gain_percent / 100.0)
    cash = np.concatenate([[1.0], np.cumprod(1.0 + rate_return[1:])])
    wealth = kept * hold + (1.0 - kept) * (1.0 - charge) * cash
    wealth[0] = 1.0
    # a charge of more than what is sold can leave nothing
    return SaleInstead(share=kept, charge=charge, wealth=wealth) if wealth.min() > 0 else None
