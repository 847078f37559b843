"""What a study found on several histories and windows, side by side."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from ..study_answer import StudyAnswer, sentence_of
from .blocks import Listing, Prose, Table
from .study_blocks import Part, Sortable, SortCell, StudyBlock
from .study_search import chance
from .study_tables import settings_of, sort_key
from .study_view import SHARPE_GAIN, View, median
from .words import DASH, date, known, percent, ratio, typographic

#: Rows of the table of groups, and of the table of settings over all groups.
MOST_GROUP_ROWS, SHARED_SHOWN = 400, 10


def answer_blocks(found: StudyAnswer, views: Sequence[View], *, most_told: int) -> list[StudyBlock]:
    """The sentence of each group, or on how many of them the best can be told from luck."""
    names = views[0].all_names
    if len(views) == 1:
        return [Prose(typographic(sentence_of(views[0].group, names)), strong=True)]
    told = [view.group.distinguished for view in views]
    lead = f"The best can be told from luck on {told.count(True) or 'none'} of {len(views):,} {_what(found)}"
    lead += f"; on {told.count(None):,} no test can be had." if None in told else "."
    blocks: list[StudyBlock] = [Prose(lead, strong=True)]
    if len(views) <= most_told:
        blocks.append(Listing([f"{view.title}: {typographic(sentence_of(view.group, names))}" for view in views]))
        blocks.append(groups_table(found, views))
    shared = shared_table(found)
    if shared is not None:
        blocks.append(shared)
    return blocks


def groups(found: StudyAnswer, views: Sequence[View], *, most_told: int) -> Part:
    """The table of many groups, instead of sections of their own."""
    return Part(
        anchor="groups", title=f"The {_what(found)}", question="How far do they agree?",
        blocks=[
            groups_table(found, views),
            Prose(
                f"Pictures and tables of each are left out for more than {most_told} {_what(found)}: study fewer at a "
                "time to have them. All figures are in overlays.parquet."
            ),
        ],
    )  # fmt: skip


def _what(found: StudyAnswer) -> str:
    """What the groups are."""
    histories = len(found.plan.study.histories)
    if histories == 1:
        return "windows"
    return "histories" if len(found.groups) == histories else "histories and windows"


def groups_table(found: StudyAnswer, views: Sequence[View]) -> Sortable:
    """A row a history and window."""
    with_own = found.plan.study.own is not None
    rows = [_group_row(view, place, with_own=with_own) for place, view in enumerate(views[:MOST_GROUP_ROWS])]
    left = len(views) - len(rows)
    notes = [
        "Sharpe gains are Sharpe ratios less those of the same-beta mix. The best has the highest information ratio. "
        "As good by luck: chance that a search as wide finds such a best where there is none (Hansen 2005). Any "
        "advantage: its probability after so many trials. Halves: rank correlation of the two halves of the days."
    ]
    if any(cell.text == DASH for row in rows for cell in row):
        notes.append(f"A dash ({DASH}): cannot be had here: too few days, no figures, no draws, or not tried here.")
    return Sortable(
        caption=f"Each of the {_what(found)}", rows=rows, words=frozenset({1, 2}), marked=frozenset(), sorted_by=None,
        head=[
            "name", "days", "best", "its Sharpe gain", *(["yours"] if with_own else []), "median", "as good by luck",
            "any advantage", "halves",
        ],
        notes=[*notes, *([f"{left:,} more are in summary.json."] if left else [])],
    )  # fmt: skip


def _group_row(view: View, place: int, *, with_own: bool) -> list[SortCell]:
    group = view.group
    gains = [view.worth(SHARPE_GAIN.field, view.best), *([view.worth(SHARPE_GAIN.field, view.own)] if with_own else [])]
    gains.append(median(view.figure(SHARPE_GAIN.field)))
    luck = float("nan") if group.check is None else group.check.luck
    of_luck = DASH if group.check is None or not known(luck) else chance(luck, group.check.resamples)
    best = DASH if view.best is None else ", ".join(_named_settings(view, view.best)) or "the only one"
    correlation = group.halves.rank_correlation
    return [
        SortCell(view.title, str(place)),
        SortCell(f"{date(group.first)} to {date(group.last)}", str(group.first)),
        SortCell(best, best),
        *(SortCell(SHARPE_GAIN.written(gain), sort_key(gain)) for gain in gains),
        SortCell(of_luck, sort_key(luck)),
        SortCell(percent(group.deflated.probability, 0), sort_key(group.deflated.probability)),
        SortCell(ratio(correlation, sign=True), sort_key(correlation)),
    ]


def _named_settings(view: View, row: int) -> list[str]:
    return [f"{axis.name} {word}" for axis, word in zip(view.axes, settings_of(view, row), strict=True)]


def shared_table(found: StudyAnswer) -> Table | None:
    """Settings that several groups have: on how many does each do better than its mix?"""
    study = found.plan.study
    kept = [n for n, axis in enumerate(study.axes) if not any(f.startswith("window") for f in axis.fields)]
    if not kept:
        return None
    points = np.concatenate([group.points for group in found.plan.groups])[:, kept]
    settings, of = np.unique(points, axis=0, return_inverse=True)
    frame = pd.DataFrame({"gain": found.overlays[SHARPE_GAIN.field].to_numpy(), "of": np.ravel(of)})
    by = frame.groupby("of")["gain"]
    made = pd.DataFrame(
        {"times": by.count(), "better": (frame["gain"] > 0).groupby(frame["of"]).sum(), "median": by.median(),
         "lowest": by.min(), "highest": by.max()}
    )  # fmt: skip
    made = made[made["times"] > 1]
    if made.empty:
        return None
    order = made.sort_values(["median", "better"], ascending=False, kind="stable")
    shown = order.index[:SHARED_SHOWN].tolist()
    own = None
    if study.own_point is not None:
        own = int(np.flatnonzero((settings == np.array(study.own_point)[kept]).all(axis=1))[0])
        shown += [own] if own in made.index and own not in shown else []
    rows = []
    for code in shown:
        one = made.loc[code]
        labels = [study.axes[n].labels[settings[code, at]] for at, n in enumerate(kept)]
        place = int(order.index.get_loc(code)) + 1  # type: ignore[arg-type]  # each is there once
        rows.append(
            [
                f"{place:,}, yours" if code == own else f"{place:,}", *labels,
                f"{int(one['better']):,} of {int(one['times']):,}",
                *(SHARPE_GAIN.written(float(one[name])) for name in ("median", "lowest", "highest")),
            ]
        )  # fmt: skip
    return Table(
        caption=f"The same settings on all {_what(found)}", rows=rows, dense=True,
        strong=frozenset(n for n, code in enumerate(shown) if code == own),
        head=(
            "", *(study.axes[n].name for n in kept), "better than its mix on", "median Sharpe gain", "lowest",
            "highest",
        ),
        words=frozenset({0, *(1 + at for at, n in enumerate(kept) if not study.axes[n].is_numeric)}),
        notes=[
            f"Ranked by the median Sharpe ratio less the same-beta mix's, of {len(made):,} settings. Histories of "
            "the same years are not independent of each other."
        ],
    )  # fmt: skip
