"""One rolling option: what was agreed about it, checked when it is written."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Literal

from .arguments import number, one_of, whole_number
from .cycles import DAYS_IN_MONTH, LARGEST_SHIFT_DAYS, ROLL_MONTHS, Cycle, DaysCycle, LastDayCycle, ListedCycle
from .errors import OverlayError
from .gates import Gate
from .strikes import Adjusted, Financed, StrikeRule

#: The longest term of an option, in months: ten years.
LONGEST_TERM_MONTHS = 120
#: The same in trading days.
LONGEST_TERM_DAYS = 2520
#: Names of all rolls: the months of the calendar, or so many trading days.
ROLLS = (*ROLL_MONTHS, "days")
#: The day of the month on which a cycle of months rolls.
ROLL_DAYS = ("third friday", "last trading day")
#: An option that is held to expiry is settled against the close of that day, or the open.
SETTLEMENTS = ("close", "open")
#: A leg is split into this many tranches at most.
MOST_TRANCHES = 60
#: A leg rolls at most this many trading days before its cycle's dates.
LONGEST_CLOSE_BEFORE = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class Early:
    """When an option is replaced before its roll date; each rule is off unless given.

    On a trading day between an option's open and its roll date, with at least ``days_left`` calendar days to its
    expiry, the first rule that holds closes it at its mid and cost, and another with the same expiry is opened at the
    same close, struck by the leg's rule.

    Parameters
    ----------
    delta_below : float, optional
        Spot stands above where it stood at the open, and the option's absolute delta is under this.
    value_above : float, optional
        The option is worth more than this multiple of its premium.
    value_below : float, optional
        It is worth less than this share of its premium.
    days_left : int
    """

    delta_below: float | None = None
    value_above: float | None = None
    value_below: float | None = None
    days_left: int = 10

    def __post_init__(self) -> None:
        if self.delta_below is not None:
            number("delta_below", self.delta_below, least=0.001, most=0.999)
        if self.value_above is not None:
            number("value_above", self.value_above, least=1.01, most=1000.0, unit=" (times the premium)")
        if self.value_below is not None:
            number("value_below", self.value_below, least=0.001, most=0.99, unit=" (a share of the premium)")
        whole_number("days_left", self.days_left, least=0, most=3650, unit=" calendar days to expiry")
        if self.delta_below is None and self.value_above is None and self.value_below is None:
            raise OverlayError("early names no rule; it takes delta_below, value_above or value_below", field="early")


@dataclass(frozen=True, slots=True)
class Rolling:
    """All that determines when a leg's options are opened and closed, but for early rules."""

    cycle: Cycle
    term: int
    close_before: int = 0
    gate: Gate | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Leg:
    """One rolling option of an overlay (C3).

    Parameters
    ----------
    position : {"long", "short"}
        Bought or sold.
    right : {"put", "call"}
    strike : StrikeRule
        For example ``PercentOfSpot(95)``, or ``Adjusted(rule=Delta(0.25), ratchet=True)``.
    roll : {"month", "quarter", "half", "year", "days"}
        How often the option is replaced.
    roll_day : {"third friday", "last trading day"}
        The day of the month; not for a roll of days.
    every : int, optional
        Trading days from roll to roll, for ``roll="days"``.
    term_months, term_days : int, optional
        Life of each option when opened, at least the roll; the roll itself if not given. In trading days for
        ``roll="days"``.
    phase : int
        Moves the roll months, from 0 to one less than the months of the roll; or days, for a roll of days.
    shift_days : int
        Moves every date of the cycle by that many trading days (C2).
    close_before : int
        The option is replaced that many trading days before the cycle's date, on which it would expire.
    settlement : {"close", "open"}
        What an option held to expiry settles against; the open needs a market with real opens.
    ratio : float
        Options per share, at least zero.
    ladder : int
        Tranches in which the leg is carried, of equal ratio.
    stagger : bool
        Whether the tranches roll one after the other over the cycle, or all at once.
    early : Early, optional
    gate : Gate, optional
    reference : bool
        Never held: it only lends strike and cost to legs that name it.

    Raises
    ------
    OverlayError
        If a field is outside what is said above.
    """

    position: Literal["long", "short"]
    right: Literal["put", "call"]
    strike: StrikeRule
    roll: str = "quarter"
    roll_day: str = "third friday"
    every: int | None = None
    term_months: int | None = None
    term_days: int | None = None
    phase: int = 0
    shift_days: int = 0
    close_before: int = 0
    settlement: str = "close"
    ratio: float = 1.0
    ladder: int = 1
    stagger: bool = True
    early: Early | None = None
    gate: Gate | None = None
    reference: bool = False
    cycle: ListedCycle | LastDayCycle | DaysCycle = field(init=False, repr=False, compare=False)
    plain: bool = field(init=False, repr=False, compare=False)  # neither split into tranches nor naming another leg

    def __post_init__(self) -> None:
        one_of("position", self.position, ("long", "short"))
        one_of("right", self.right, ("put", "call"))
        one_of("roll", self.roll, ROLLS)
        one_of("roll_day", self.roll_day, ROLL_DAYS)
        one_of("settlement", self.settlement, SETTLEMENTS)
        if isinstance(self.strike, type) or not callable(getattr(self.strike, "strikes", None)):
            raise OverlayError(
                f"strike is {self.strike!r}; give a strike rule such as PercentOfSpot(95)", field="strike"
            )
        if self.roll == "days":
            self._check_days()
        else:
            self._check_months()
        whole_number("close_before", self.close_before, least=0, most=self._most_close_before(), unit=" trading days")
        number("ratio", self.ratio, least=0.0, most=100.0)
        whole_number("ladder", self.ladder, least=1, most=MOST_TRANCHES, unit=" tranches")
        if (furthest := self._stagger_days(self.ladder - 1)) + self.shift_days > LARGEST_SHIFT_DAYS:
            raise OverlayError(
                f"shift_days is {self.shift_days}, and the last of {self.ladder} staggered tranches comes {furthest} "
                f"trading days later; together at most {LARGEST_SHIFT_DAYS}",
                field="shift_days",
            )
        object.__setattr__(self, "plain", self.ladder == 1 and not self.named_legs)
        for name in ("stagger", "reference"):
            if not isinstance(getattr(self, name), bool):
                raise OverlayError(f"{name} is {getattr(self, name)!r}; it takes true or false", field=name)
        for name, kind in (("early", Early), ("gate", Gate)):
            if getattr(self, name) is not None and not isinstance(getattr(self, name), kind):
                raise OverlayError(f"{name} is {getattr(self, name)!r}; give a backtest.{kind.__name__}", field=name)
        if self.early is not None and isinstance(self.strike, Adjusted) and self.strike.remembers:
            raise OverlayError(
                "early rules replace an option by the rule alone; leave out ratchet and kept_until_moved beside them",
                field="early",
            )
        if isinstance(self.rule, Financed) and self.position == "long":
            raise OverlayError("only a sold leg can finance another; this one is bought", field="strike")
        if isinstance(self.rule, Financed) and self.ratio == 0.0:
            raise OverlayError("a financed leg of ratio 0 can pay for nothing; give it a ratio", field="ratio")

    def _check_months(self) -> None:
        for name in ("every", "term_days"):
            if getattr(self, name) is not None:
                raise OverlayError(f'{name} belongs to roll = "days"; leave it out beside "{self.roll}"', field=name)
        kind = LastDayCycle if self.roll_day == "last trading day" else ListedCycle
        cycle = kind(months=ROLL_MONTHS[self.roll], phase=self.phase, shift_days=self.shift_days)
        object.__setattr__(self, "cycle", cycle)
        if self.term_months is None:
            object.__setattr__(self, "term_months", cycle.months)
        whole_number(
            "term",
            self.term_months,
            least=cycle.months,
            most=LONGEST_TERM_MONTHS,
            unit=" months, at least its roll",
        )

    def _check_days(self) -> None:
        if self.every is None:
            raise OverlayError('roll is "days"; say how many with every, such as every = 21', field="every")
        if self.term_months is not None:
            raise OverlayError('term is in months; beside roll = "days" give term_days', field="term")
        if self.roll_day != "third friday":
            raise OverlayError('roll_day is a day of the month; leave it out beside roll = "days"', field="roll_day")
        cycle = DaysCycle(every=self.every, phase=self.phase, shift_days=self.shift_days)
        object.__setattr__(self, "cycle", cycle)
        if self.term_days is None:
            object.__setattr__(self, "term_days", self.every)
        whole_number(
            "term_days",
            self.term_days,
            least=self.every,
            most=LONGEST_TERM_DAYS,
            unit=" trading days, at least its roll",
        )

    def _most_close_before(self) -> int:
        if isinstance(self.cycle, DaysCycle):
            return min(self.cycle.every - 1, LONGEST_CLOSE_BEFORE)
        return min(15 * self.cycle.months, LONGEST_CLOSE_BEFORE)

    @property
    def direction(self) -> float:
        """+1.0 for a bought option, -1.0 for a sold one."""
        return 1.0 if self.position == "long" else -1.0

    @property
    def held_ratio(self) -> float:
        """Options per share that are really held: none of a leg that only lends its strikes."""
        return 0.0 if self.reference else self.ratio

    @property
    def sign(self) -> float:
        """+1.0 for a call, -1.0 for a put."""
        return 1.0 if self.right == "call" else -1.0

    @property
    def rule(self) -> StrikeRule:
        """The strike rule without what is laid around it."""
        return self.strike.rule if isinstance(self.strike, Adjusted) else self.strike

    @property
    def named_legs(self) -> tuple[int, ...]:
        """Numbers of the legs, from 1, that the strike depends on."""
        return tuple(getattr(self.strike, "named_legs", ()))

    @property
    def term(self) -> int:
        """Life of each option at its open, in months; in trading days for a roll of days."""
        term = self.term_days if self.roll == "days" else self.term_months
        assert term is not None  # set in __post_init__
        return term

    @property
    def length_months(self) -> float:
        """Life of each option at its open, in months."""
        return self.term / DAYS_IN_MONTH if self.roll == "days" else float(self.term)

    @property
    def rolling(self) -> Rolling:
        """What determines when its options are opened and closed."""
        return Rolling(self.cycle, self.term, self.close_before, self.gate)

    def tranches(self) -> tuple[Leg, ...]:
        """The plain legs in which it is carried.

        Staggered, a cycle of months moves by whole months where they divide by the tranches, else by trading days,
        21 to the month.
        """
        if self.ladder == 1:
            return (self,)
        plain = replace(self, ladder=1, ratio=self.ratio / self.ladder)
        if not self.stagger:
            return (plain,) * self.ladder
        return tuple(self._staggered(plain, number) for number in range(self.ladder))

    def _staggered(self, plain: Leg, number: int) -> Leg:
        if isinstance(self.cycle, DaysCycle):
            return replace(
                plain, phase=(self.phase + round(number * self.cycle.every / self.ladder)) % self.cycle.every
            )
        months = self.cycle.months
        if months % self.ladder == 0:
            return replace(plain, phase=(self.phase + number * months // self.ladder) % months)
        return replace(plain, shift_days=self.shift_days + self._stagger_days(number))

    def _stagger_days(self, number: int) -> int:
        """Trading days by which a tranche of a cycle of months is moved, where they do not divide by the tranches."""
        if not self.stagger or isinstance(self.cycle, DaysCycle) or self.cycle.months % self.ladder == 0:
            return 0
        return round(number * DAYS_IN_MONTH * self.cycle.months / self.ladder)
