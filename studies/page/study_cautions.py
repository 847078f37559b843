"""The cautions of a study: those that follow from settings, counted over all overlays, and those of one overlay."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from backtest import Leg, PercentOfForward, PercentOfSpot, Replay

from ..assumptions import CAUTION, warnings_of, warnings_of_settings
from ..expansion import Expansion, Points
from ..runner import market_of
from ..study import Study
from ..study_answer import StudyAnswer
from .blocks import Listing, Prose
from .study_blocks import Part, StudyBlock
from .study_view import View
from .words import counted, typographic, upper_first

Positions = npt.NDArray[np.intp]
PercentRule = type[PercentOfSpot] | type[PercentOfForward]

#: Strikes that can be compared without a replay.
PERCENT_RULES: tuple[PercentRule, ...] = (PercentOfSpot, PercentOfForward)
#: Of a study by the percents; a replay says it of the days on which its strikes lie so.
INSIDE_OUT = "a bought put is struck at a higher percent than a sold call: a band turned inside out"


def cautions(found: StudyAnswer, views: Sequence[View], replay: Replay) -> Part:
    """What may mislead: of all overlays as far as settings tell it, of one as far as only a replay does."""
    view, total = views[0], found.plan.overlays
    concerned = settings_cautions(found) if total > 1 else {}
    blocks: list[StudyBlock] = []
    if concerned:
        shares = [
            f"{text} ({'all of them' if count == total else counted(count, 'overlay')})"
            for text, count in concerned.items()
        ]
        blocks += [Prose(f"Of the {total:,} overlays, by their settings alone:"), Listing(list(map(_sentence, shares)))]
    rest = [_sentence(text) for text in warnings_of(replay) if concerned.get(text) != total]
    if rest:
        row = next(row for row in (view.own, view.best, 0) if row is not None)
        whose = "yours" if view.own is not None else "the best" if view.best is not None else "the first"
        blocks += [Prose(f"Of one overlay, {whose} ({view.names[row]}) on {view.title}:"), Listing(rest)]
    return Part(anchor="cautions", title="Cautions", blocks=[*blocks, Prose(CAUTION)])


def _sentence(text: str) -> str:
    return f"{upper_first(typographic(text))}."


def settings_cautions(found: StudyAnswer) -> dict[str, int]:
    """Cautions that follow from settings, each with how many overlays of the study it concerns; nothing is replayed."""
    study = found.plan.study
    expansion = Expansion(study)
    # a term follows its roll
    deciding = ("volatility", *(f"leg.{n}.{key}" for n in _legs(study) for key in ("roll", "term")))
    counts: Counter[str] = Counter()
    for group in found.plan.groups:
        counts[INSIDE_OUT] += int(np.count_nonzero(inside_out(expansion, group.points)))
        first, which = _distinct(study, group.points, deciding)
        market = market_of(found.plan, group)
        for point, overlays in zip(expansion.many(group.points[first]), np.bincount(which), strict=True):
            for text in warnings_of_settings(market, point.overlay, point.volatility):
                counts[text] += int(overlays)
    return {text: count for text, count in counts.items() if count}


def inside_out(expansion: Expansion, points: Points) -> npt.NDArray[np.bool_]:
    """Whether a bought put has a higher percent of spot, or of forward, than a sold call, shape ``(overlay,)``.

    The percents alone are compared: legs that open on different days, or by other rules, may cross all the same.
    """
    legs = []
    for number in _legs(expansion.study):
        deciding = tuple(f"leg.{number}.{key}" for key in ("position", "right", "ratio", "strike"))
        first, which = _distinct(expansion.study, points, deciding)
        legs.append(([point.overlay.legs[number - 1] for point in expansion.many(points[first])], which))
    found = np.zeros(len(points), dtype=np.bool_)
    for rule in PERCENT_RULES:
        puts = [np.array([_percent(one, rule, "long put", -np.inf) for one in some])[which] for some, which in legs]
        calls = [np.array([_percent(one, rule, "short call", np.inf) for one in some])[which] for some, which in legs]
        found |= np.max(puts, axis=0) > np.min(calls, axis=0)
    return found


def _percent(leg: Leg, rule: PercentRule, kind: str, otherwise: float) -> float:
    """Percent of a leg that has this strike rule and is of this kind."""
    if leg.ratio == 0 or f"{leg.position} {leg.right}" != kind or not isinstance(leg.strike, rule):
        return otherwise
    return float(leg.strike.percent)


def _legs(study: Study) -> range:
    """Numbers of the legs, as fields have them."""
    return range(1, len(study.overlay["leg"]) + 1)


def _distinct(study: Study, points: Points, begins: tuple[str, ...]) -> tuple[Positions, Positions]:
    """A row for each combination of the axes that set a field that begins so, and of each row its combination."""
    axes = [number for number, axis in enumerate(study.axes) if any(f.startswith(begins) for f in axis.fields)]
    sizes = [len(study.axes[number].values) for number in axes]
    codes = np.ravel_multi_index(tuple(points[:, axes].T), sizes) if axes else np.zeros(len(points), dtype=np.intp)
    _, first, which = np.unique(codes, return_index=True, return_inverse=True)
    return first, which
