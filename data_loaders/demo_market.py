"""The invented market of the demo: an index of a region that does not exist, as the CSV files a user would bring.

It is there to try things out on, and is evidence of nothing. Everything is drawn from one seeded
``numpy.random.Generator``: the same seed writes the same bytes. The model, in the order in which it runs:

1. *Calendar.* Weekdays less the holidays of the region. Thaw Friday follows the spring full moon, so that now
   and then it falls on the third Friday of its month; a storm closes the exchange for four days, and a few
   single days are lost as well.
2. *Regimes.* A hidden semi-Markov chain (rise, slide, panic, rebound) sets the drift, and in a panic makes days
   wilder than anyone expected: no crash has a date, the seed decides.
3. *Returns.* NGARCH(1,1) of Engle and Ng (1993, Journal of Finance 48), a GARCH whose news curve is shifted
   so that falls raise the variance and small rises lower it, with fat-tailed news (Student's t). The variance
   does not know the regime: it hears every return as news against the long-run drift, so a panic feeds it by
   itself.
4. *Vol index.* The model's own expected variance over the next 30 days, in closed form, times a premium, with
   a little noise that dies out: a variance-swap index, above the vol realised afterwards on average.
5. *Dividends* follow a target yield slowly (Lintner 1956, American Economic Review 46); the price falls by
   the dividend on the ex-date.
6. *Rates.* A central bank moves in quarter points towards a neutral rate that swings twice over the history,
   cuts when shares are far below their high of two years, and raises slowly.
7. *Bars.* The overnight part of each return is drawn given the whole; high and low are those of a Brownian
   bridge from open to close.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]
Dates = npt.NDArray[np.datetime64]

NAME = "Torvane Coast 40"
#: Picked among some thousands for a typical story: a slow fall, a deep one, a fast crash that recovers. On it a
#: quarterly 95 put with a monthly 110 call does a little worse than on the median seed: it is no advertisement.
DEFAULT_SEED = 2198

TRADING_DAYS = 252  # a year
FIRST_CLOSE = 1_000.0

# -- regimes
RISE, SLIDE, PANIC, REBOUND = range(4)
REGIME_DRIFT = (0.115, -0.20, -1.9, 0.36)  # of the log total return, a year
REGIME_NOISE = (1.0, 1.0, 1.3, 1.0)  # size of the news against what the market's variance says
REGIME_LENGTH = (900, 250, 22, 140)  # mean, trading days
REGIME_NEXT = (  # chances of the regime after it
    (0.00, 0.60, 0.40, 0.00),
    (0.00, 0.00, 0.35, 0.65),
    (0.00, 0.20, 0.00, 0.80),
    (1.00, 0.00, 0.00, 0.00),
)
REGIME_SHAPE = 4.0  # of the gamma law of the lengths: less ragged than the geometric law of a plain Markov chain

# -- NGARCH: h' = omega + beta h + alpha h (news - shift)^2, news in standard deviations
LONG_RUN_VOL = 0.155  # a year
HIGHEST_VOL = 0.75  # a year: keeps a wild seed within what real indices have seen
LONG_RUN_DRIFT = 0.07  # a year, what a return is measured against to be news
ALPHA, BETA, SHIFT = 0.060, 0.850, 1.10
PERSISTENCE = BETA + ALPHA * (1.0 + SHIFT**2)
NEWS_FREEDOM = 10.0  # degrees of freedom of Student's t

# -- vol index: quoted vol = (PREMIUM expected vol + PREMIUM_POINTS) exp(noise)
INDEX_HORIZON = 21  # trading days in 30 calendar days
PREMIUM, PREMIUM_POINTS = 1.13, 1.0
NOISE_MEMORY, NOISE_SIZE = 0.95, 0.014

# -- dividends and rates
TARGET_YIELD = 0.025
DIVIDEND_SPEED = 0.10  # a quarter
HIGHEST_DIVIDEND = 0.015  # of the price: beyond it the dividend is cut
MEETING_EVERY = 30  # trading days between two decisions on the rate
RATE_MEMORY = 504  # trading days over which the central bank looks for a high
RATE_FLOOR = -0.50  # percent

OVERNIGHT_SHARE = 0.22  # of a day's variance


@dataclass(frozen=True, slots=True, kw_only=True)
class DemoMarket:
    """Where :func:`write_demo_market` put its files.

    Attributes
    ----------
    name : str
        The invented name of the index.
    prices : Path
        ``date,open,high,low,close,volume``, a row per trading day, index points.
    vol : Path
        ``date,vol``, a 30-day variance-swap index in percent a year; misses some trading days and has some others.
    dividends : Path
        ``date,dividend``, cash per share on quarterly ex-dates.
    rates : Path
        ``date,rate``, percent a year, annual effective; blank on bank holidays.
    """

    name: str
    prices: Path
    vol: Path
    dividends: Path
    rates: Path


def write_demo_market(folder: Path, *, seed: int = DEFAULT_SEED, first_year: int = 1999, years: int = 25) -> DemoMarket:
    """Write the invented market as four CSV files.

    Parameters
    ----------
    folder : Path
        Made if it is not there; files of the same names are replaced.
    seed : int
        Another seed is another history of the same kind.
    first_year, years : int
        Whole calendar years, 1999 to 2023 unless given.

    Returns
    -------
    DemoMarket
        The paths and the name of the index.

    Raises
    ------
    ValueError
        For fewer than one year, or a span that leaves 1900 to 2200.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     demo = write_demo_market(Path(folder), first_year=2020, years=1)
    ...     demo.name, demo.prices.name, demo.prices.read_text().splitlines()[0]
    ('Torvane Coast 40', 'prices.csv', 'date,open,high,low,close,volume')
    """
    if years < 1:
        raise ValueError(f"years is {years}; a demo market has at least 1 year")
    if first_year < 1900 or first_year + years > 2201:
        raise ValueError(
            f"first_year {first_year} with {years} years ends in {first_year + years - 1}; a demo market lies "
            "within 1900 to 2200: choose an earlier start or fewer years"
        )
    # one stream for each part, so that a change to one leaves the others as they were
    streams = np.random.default_rng(seed).spawn(6)
    calendar = _make_calendar(first_year, years, streams[0])
    days = calendar.weekdays[calendar.is_open]
    returns, variance, tomorrow = _draw_returns(len(days), streams[1])
    expected = _expected_variance(tomorrow)
    close, ex_days, dividend = _pay_dividends(days, returns)
    bars = _draw_bars(close, variance, streams[2])
    volume = _draw_volume(days, returns, variance, streams[3])

    folder.mkdir(parents=True, exist_ok=True)
    demo = DemoMarket(
        name=NAME,
        prices=folder / "prices.csv",
        vol=folder / "vol.csv",
        dividends=folder / "dividends.csv",
        rates=folder / "rates.csv",
    )
    _write(
        demo.prices,
        "date,open,high,low,close,volume",
        (f"{d},{o:.2f},{h:.2f},{w:.2f},{c:.2f},{v}" for d, o, h, w, c, v in zip(days, *bars, volume.tolist())),
    )
    vol_days, vol = _quote_vol(calendar, expected, streams[4])
    _write(demo.vol, "date,vol", (f"{d},{v:.2f}" for d, v in zip(vol_days, vol)))
    _write(demo.dividends, "date,dividend", (f"{d},{v:.2f}" for d, v in zip(days[ex_days], dividend)))
    rate = _set_rates(calendar, close, streams[5])
    _write(
        demo.rates,
        "date,rate",
        (f"{d}," if holiday else f"{d},{v:.2f}" for d, v, holiday in zip(calendar.weekdays, rate, calendar.is_holiday)),
    )
    return demo


def _write(path: Path, header: str, rows: Iterable[str]) -> None:
    # bytes, so that the line ends are the same on every system
    path.write_bytes(("\n".join([header, *rows]) + "\n").encode("ascii"))


# -- calendar -------------------------------------------------------------------------------------


class _Calendar(NamedTuple):
    """Every weekday of the span, and what is closed on it; arrays of shape (weekday,)."""

    weekdays: Dates
    is_holiday: Bools
    is_open: Bools


def _make_calendar(first_year: int, years: int, rng: np.random.Generator) -> _Calendar:
    first, last = np.datetime64(f"{first_year}-01-01"), np.datetime64(f"{first_year + years}-01-01")
    weekdays = np.arange(first, last)
    weekdays = weekdays[np.is_busday(weekdays)]
    is_holiday = np.isin(weekdays, _holidays(first_year, years))

    # a storm that shuts everything from a Tuesday to a Friday, and lost single days, one in about eight years;
    # none near the ends
    margin = len(weekdays) // 10
    is_lost = np.zeros(len(weekdays), dtype=bool)
    storm = int(rng.integers(margin, len(weekdays) - margin - 5))
    tuesday = storm + int((1 - _day_of_week(weekdays[storm])) % 5)
    is_lost[tuesday : tuesday + 4] = True
    is_lost[rng.integers(margin, len(weekdays) - margin, size=max(1, years // 8))] = True
    return _Calendar(weekdays, is_holiday, ~(is_holiday | is_lost))


def _day_of_week(day: np.datetime64) -> int:
    """Monday is 0."""
    return int(day.astype(np.int64) + 3) % 7


def _holidays(first_year: int, years: int) -> Dates:
    """Days on which exchange and banks are closed; no two in one week, so that no gap exceeds four days."""
    january = np.array([f"{year}-01" for year in range(first_year, first_year + years)], dtype="datetime64[M]")

    def fixed(month: int, day: int) -> Dates:
        return (january + month - 1).astype("datetime64[D]") + day - 1

    def first_on_or_after(days: Dates, weekmask: str) -> Dates:
        return np.busday_offset(days, 0, roll="forward", weekmask=weekmask)

    moon_days, a_full_moon = 29.530588853, float(np.datetime64("2000-01-21").astype(np.int64))
    moons = np.ceil((fixed(3, 14).astype(np.int64) - a_full_moon) / moon_days)
    spring_moon = np.floor(a_full_moon + moons * moon_days).astype(np.int64).astype("datetime64[D]")
    return np.concatenate(
        [
            first_on_or_after(fixed(1, 1), "Mon Tue Wed Thu Fri"),  # New Year
            first_on_or_after(fixed(2, 8), "Mon"),  # Lantern Monday
            first_on_or_after(spring_moon, "Fri"),  # Thaw Friday: 14 March to 19 April
            first_on_or_after(fixed(5, 1), "Mon"),  # Ferry Monday
            fixed(6, 24),  # Midsummer, not made up for on a weekend
            first_on_or_after(fixed(9, 1), "Mon"),  # Harvest Monday
            fixed(11, 11),  # Charter Day, not made up for either
            first_on_or_after(fixed(12, 25), "Mon Tue Wed Thu Fri"),  # Long Night
        ]
    )


# -- returns and vol ------------------------------------------------------------------------------


def _draw_regimes(count: int, rng: np.random.Generator) -> Integers:
    """The regime of each trading day, shape (day,); the history opens part of the way through a rise."""
    spans: list[tuple[int, int]] = []
    regime, total = RISE, 0
    while total < count:
        length = 1 + int(rng.gamma(REGIME_SHAPE, REGIME_LENGTH[regime] / REGIME_SHAPE))
        if not spans:
            length = 1 + int(length * rng.uniform())
        spans.append((regime, length))
        total += length
        regime = int(rng.choice(4, p=REGIME_NEXT[regime]))
    regimes, lengths = zip(*spans)
    return np.repeat(np.array(regimes), lengths)[:count]


def _draw_returns(count: int, rng: np.random.Generator) -> tuple[Floats, Floats, Floats]:
    """What the days bring and what was known of it.

    Returns
    -------
    returns : ndarray, shape (day,)
        Daily log total returns.
    variance : ndarray, shape (day,)
        Their variances, given the hidden regime.
    tomorrow : ndarray, shape (day,)
        The next day's variance as the market sees it at the close.
    """
    regimes = _draw_regimes(count, rng)
    drift, noise = np.array(REGIME_DRIFT)[regimes] / TRADING_DAYS, np.array(REGIME_NOISE)[regimes]
    news = noise * rng.standard_t(NEWS_FREEDOM, size=count) * math.sqrt((NEWS_FREEDOM - 2.0) / NEWS_FREEDOM)
    usual_drift = LONG_RUN_DRIFT / TRADING_DAYS
    long_run = LONG_RUN_VOL**2 / TRADING_DAYS
    omega = (1.0 - PERSISTENCE) * long_run
    highest = HIGHEST_VOL**2 / TRADING_DAYS

    # a recursion in the variance: it cannot be done on all days at once
    variance, stdev = long_run, math.sqrt(long_run)
    variances, returns = [variance], []
    for mean, shock in zip(drift.tolist(), news.tolist()):
        returns.append(mean + stdev * shock)
        heard = (returns[-1] - usual_drift) / stdev
        variance = min(omega + variance * (BETA + ALPHA * (heard - SHIFT) ** 2), highest)
        stdev = math.sqrt(variance)
        variances.append(variance)
    seen = np.array(variances)
    return np.array(returns), noise**2 * seen[:-1], seen[1:]


def _expected_variance(tomorrow: Floats) -> Floats:
    """Mean daily variance expected over the horizon of the vol index, given that of the next day."""
    long_run = LONG_RUN_VOL**2 / TRADING_DAYS
    weight = (1.0 - PERSISTENCE**INDEX_HORIZON) / (INDEX_HORIZON * (1.0 - PERSISTENCE))
    return long_run + weight * (tomorrow - long_run)


def _autoregressive(count: int, memory: float, size: float, rng: np.random.Generator) -> Floats:
    value, values = 0.0, []
    for shock in (size * rng.standard_normal(count)).tolist():
        value = memory * value + shock
        values.append(value)
    return np.array(values)


def _quote_vol(calendar: _Calendar, expected: Floats, rng: np.random.Generator) -> tuple[Dates, Floats]:
    """Dates and percents of the vol file.

    About one trading day in 300 is missing. On days lost to storms and on a few holidays the index was worked
    out all the same, from the last prices. No two dates are five calendar days apart.
    """
    known = np.cumsum(calendar.is_open) - 1  # position of the last trading day up to each weekday
    noise = _autoregressive(len(known), NOISE_MEMORY, NOISE_SIZE, rng)
    vol = (PREMIUM * 100.0 * np.sqrt(TRADING_DAYS * expected[known]) + PREMIUM_POINTS) * np.exp(noise)

    is_lost = ~calendar.is_open & ~calendar.is_holiday
    is_extra = calendar.is_holiday & (rng.uniform(size=len(known)) < 0.05) & (known >= 0)
    listed = np.flatnonzero(calendar.is_open | is_lost | is_extra)
    days = calendar.weekdays[listed]
    inner = np.arange(2, len(listed) - 1, 2)  # every other row: two neighbours are never both dropped
    short_gap = (days[inner + 1] - days[inner - 1]).astype(np.int64) < 5
    droppable = inner[short_gap & calendar.is_open[listed[inner]]]
    kept = np.delete(listed, droppable[rng.uniform(size=len(droppable)) < 0.008])
    return calendar.weekdays[kept], vol[kept]


# -- dividends, rates, bars -----------------------------------------------------------------------


def _pay_dividends(days: Dates, returns: Floats) -> tuple[Floats, Integers, Floats]:
    """Closes, shape (day,); positions of the ex-dates and cash on each, shape (dividend,)."""
    total_return_index = FIRST_CLOSE * np.exp(np.cumsum(returns) - returns[0])
    months = np.unique(days.astype("datetime64[M]"))
    quarter_ends = months[(months.astype(np.int64) % 12) % 3 == 2].astype("datetime64[D]")
    ex_days = np.searchsorted(days, quarter_ends + 8)  # the first trading day from the 9th on

    dividend = TARGET_YIELD / 4.0 * FIRST_CLOSE
    kept_share, dividends, shares = 1.0, [], [1.0]
    for full_price in total_return_index[ex_days].tolist():
        before = full_price * kept_share
        dividend += DIVIDEND_SPEED * (TARGET_YIELD / 4.0 * before - dividend)
        dividend = round(min(dividend, HIGHEST_DIVIDEND * before), 2)
        kept_share *= 1.0 - dividend / before
        dividends.append(dividend)
        shares.append(kept_share)
    paid = np.searchsorted(ex_days, np.arange(len(days)), side="right")
    return total_return_index * np.array(shares)[paid], ex_days, np.array(dividends)


def _set_rates(calendar: _Calendar, close: Floats, rng: np.random.Generator) -> Floats:
    """The rate on each weekday in percent, shape (weekday,)."""
    known = np.maximum(np.cumsum(calendar.is_open) - 1, 0)
    padded = np.concatenate([np.full(RATE_MEMORY - 1, close[0]), close])
    fall = 1.0 - close / np.lib.stride_tricks.sliding_window_view(padded, RATE_MEMORY).max(axis=-1)
    meetings = np.arange(0, len(known), MEETING_EVERY)
    policy, decided = 4.5, []
    for at in meetings.tolist():
        turn = 2.0 * math.pi * at / len(known)
        neutral = 2.6 + 0.7 * math.cos(turn) + 1.5 * math.cos(2.0 * turn)
        wanted = neutral - 9.0 * max(0.0, float(fall[known[at]]) - 0.08)
        step = min(max(wanted - policy, -0.75), 0.25)  # down in a hurry, up by quarter points
        policy = max(round(4.0 * (policy + step)) / 4.0, RATE_FLOOR)
        decided.append(policy)
    spread = _autoregressive(len(known), 0.97, 0.01, rng)
    return np.repeat(decided, MEETING_EVERY)[: len(known)] + spread


def _draw_bars(close: Floats, variance: Floats, rng: np.random.Generator) -> tuple[Floats, Floats, Floats, Floats]:
    """Open, high, low and close of each day, shape (day,) each."""
    change = np.diff(np.log(close), prepend=math.log(close[0]))
    overnight = OVERNIGHT_SHARE * change
    overnight += np.sqrt(OVERNIGHT_SHARE * (1.0 - OVERNIGHT_SHARE) * variance) * rng.standard_normal(len(close))
    day = change - overnight  # the log return from open to close
    open_ = close * np.exp(-day)
    # a Brownian bridge from 0 to `day` passes m with chance exp(-2 m (m - day) / variance); each end drawn by itself
    draws = -2.0 * (1.0 - OVERNIGHT_SHARE) * variance * np.log(1.0 - rng.uniform(size=(2, len(close))))
    above = (day + np.sqrt(day**2 + draws[0])) / 2.0
    below = (day - np.sqrt(day**2 + draws[1])) / 2.0
    return open_, open_ * np.exp(above), open_ * np.exp(below), close


def _draw_volume(days: Dates, returns: Floats, variance: Floats, rng: np.random.Generator) -> Integers:
    """Shares traded: a slow rise, busy in wild times and on big days, quiet in August and at the end of December."""
    years = (days - days[0]).astype(np.int64) / 365.25
    mood = _autoregressive(len(days), 0.97, 0.06, rng) + 0.12 * rng.standard_normal(len(days))
    month = days.astype("datetime64[M]")
    is_august = month.astype(np.int64) % 12 == 7
    is_late_december = (month.astype(np.int64) % 12 == 11) & ((days - month.astype("datetime64[D]")).astype(int) >= 21)
    wild_times = np.log(variance * TRADING_DAYS / LONG_RUN_VOL**2)
    big_day = np.abs(returns) / np.sqrt(variance) - 0.75
    log_volume = 0.03 * years + mood + 0.20 * wild_times + 0.20 * big_day - 0.15 * is_august - 0.45 * is_late_december
    return np.round(38_000_000 * np.exp(log_volume), -2).astype(np.int64)
