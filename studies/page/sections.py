"""The sections of the page, in their order."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from backtest.analytics.resampling import Inference
from backtest.overlay import Leg

from ..assumptions import CAUTION
from ..findings import Findings
from ..leg_words import leg_sentence
from ..path_names import PATHS
from ..replay_history import Answer
from . import beside, costs, drawn, paths, tables
from .blocks import Block, Command, Definitions, Fold, Listing, Prose, Section, Shown, Table
from .health import DataHealth, health_blocks
from .luck import Contest, contest_table
from .pictures import Picture
from .words import counted, date, number, typographic, upper_first
from .words import span as length

TITLES = {
    "volatility": "Vol quote",
    "smile": "Smile",
    "cost": "Cost",
    "account": "Account",
    "settlement": "Settlement",
    "rate": "Interest rate",
    "dividend_yield": "Dividend yield in forwards",
}
ROLL_WORDS = {"month": "every month", "quarter": "every quarter", "half": "every half-year", "year": "every year"}


def _blocks(*found: Picture | Table | Block | Iterable[Block] | None) -> list[Block]:
    """What there is, in order; pictures in their frame."""
    made: list[Block] = []
    for one in found:
        if one is None:
            continue
        if isinstance(one, Picture):
            made.append(Shown(one))
        elif isinstance(one, (Table, Prose, Listing, Definitions, Command, Shown, Fold)):
            made.append(one)
        else:
            made.extend(one)
    return made


def assumed(found: Answer, history: str) -> Section:
    """Data span, legs, vol quote, smile, cost, account, settlement."""
    replay = found.replay
    words = (
        f"{history}: {date(replay.dates[0])} to {date(replay.dates[-1])}, {length(replay.dates[0], replay.dates[-1])}, "
        f"{counted(len(replay), 'trading day')}"
    )
    items = [("Data", words)]
    for label, leg in zip((leg.label for leg in replay.legs), replay.overlay.carried, strict=True):
        items.append((upper_first(label.replace("_", " ")), leg_words(leg)))
    items += [
        (TITLES.get(name, upper_first(name.replace("_", " "))), upper_first(typographic(text)))
        for name, text in found.assumptions.items()
    ]
    return Section(anchor="assumed", title="What was assumed", blocks=[Definitions(items)])


def leg_words(leg: Leg) -> str:
    """One leg as a sentence."""
    return upper_first(typographic(leg_sentence(leg)))


def figures(found: Answer) -> Section:
    """Headline table, then all figures."""
    return Section(
        anchor="figures", title="Headline figures", question="What did it do, and what would holding less have done?",
        blocks=_blocks(
            tables.headline_table(found),
            beside.sale_words(found),
            Fold(summary="All figures, for every path", blocks=[tables.full_table(found)]),
        ),
    )  # fmt: skip


def growth(found: Answer) -> Section:
    """Growth, drawdown, and the legs in money."""
    return Section(
        anchor="growth", title="Growth and drawdown", question="Did the path get smoother, and where did it end?",
        blocks=_blocks(*paths.growth_pictures(found)),
    )  # fmt: skip


def band(found: Answer) -> Section:
    """The band over time."""
    return Section(
        anchor="band", title="The band over time", question="How close did the strikes come to the price?",
        blocks=_blocks(*paths.band_pictures(found)),
    )  # fmt: skip


def contest(found: Answer, differences: Contest, inference: Inference | None) -> Section:
    """Overlay against the mixes."""
    whole_span = tables.under_a_year(found)
    blocks = _blocks(
        drawn.contest_picture(differences, whole_span=whole_span),
        contest_table(differences, inference, whole_span=whole_span),
    )
    return Section(
        anchor="contest", title="Same-risk contest", question="Is it better than holding less stock?",
        blocks=blocks or [Prose("No comparison can be had: the overlay's wealth ends before the history does.")],
    )  # fmt: skip


def episodes(found: Answer, findings: Findings) -> Section:
    """Falls, rallies, and what is left without the worst."""
    blocks = _blocks(
        drawn.spans_picture(findings, falls=True), tables.episode_tables(findings),
        drawn.spans_picture(findings, falls=False), tables.rally_table(findings), tables.without_table(findings),
    )  # fmt: skip
    if not findings.episodes:
        blocks.insert(0, Prose("The hold never fell more than 10% from a peak here: nothing was there to protect."))
    return Section(
        anchor="episodes", title="Falls and rallies", question="Did it protect when it mattered?", blocks=blocks
    )


def ledger(found: Answer, findings: Findings) -> Section:
    """Cost waterfall, cost figures, ledger by year."""
    by_year = costs.yearly_table(findings, found)
    return Section(
        anchor="cost", title="What it cost", question="Where did the difference to the hold go?",
        blocks=_blocks(
            Definitions(costs.price_of_protection(found)),
            drawn.waterfall_picture(found, findings)
            or Prose("No waterfall can be drawn: the overlay's wealth ends before the history does."),
            Fold(summary="The bars as numbers", blocks=[costs.waterfall_table(found, findings)])
            if np.isfinite(findings.ledger.overlay).all()
            else None,
            costs.cost_table(found),
            beside.margin_table(found),
            drawn.yearly_picture(found, findings),
            Fold(summary="Ledger by year", blocks=[by_year]),
        ),
    )  # fmt: skip


def attribution(found: Answer) -> Section:
    """Parts of the excess return with their shares of risk."""
    picture, parts = drawn.attribution_picture(found)
    blocks = _blocks(picture, costs.attribution_table(parts) if parts else None, paths.exposure_picture(found))
    return Section(
        anchor="attribution", title="Attribution", question="What was the return a reward for?",
        blocks=blocks or [Prose("No attribution can be had: the overlay's wealth ends before the history does.")],
    )  # fmt: skip


def prices(found: Answer, findings: Findings) -> Section:
    """Smile ladder and break-evens."""
    has_put = any(leg.right == "put" for leg in found.replay.overlay.carried)
    picture = drawn.ladder_picture(found, findings)
    return Section(
        anchor="prices", title="How far it leans on the prices",
        question="The option prices are models. Would others turn the answer?",
        blocks=_blocks(
            picture or Prose("The overlay cannot be compared with its same-beta mix under any smile."),
            tables.ladder_table(found, findings), tables.break_even_table(found, findings, has_put=has_put),
        ),
    )  # fmt: skip


def luck(found: Answer, findings: Findings, bootstrap: list[Block]) -> Section:
    """Roll day and resampled histories."""
    return Section(
        anchor="luck", title="Luck",
        question="Would another roll day, or another draw of the same history, say the same?",
        blocks=_blocks(drawn.luck_picture(found, findings), tables.luck_table(found, findings), bootstrap),
    )  # fmt: skip


def calendar(found: Answer, findings: Findings) -> Section:
    """Years and months."""
    months = [
        Fold(
            summary=f"Months of the {PATHS[name]}", blocks=[tables.month_table(table, upper_first(PATHS[name]))],
        )
        for name, table in findings.calendar.items()
    ]  # fmt: skip
    return Section(anchor="calendar", title="Years and months", blocks=_blocks(tables.year_table(findings), months))


def periods(found: Answer, findings: Findings) -> Section:
    """Best and worst stretches."""
    table = tables.extremes_table(findings)
    return Section(
        anchor="periods", title="Best and worst periods",
        blocks=[table] if table else [Prose("No stretch can be measured.")],
    )  # fmt: skip


def rolling(found: Answer, findings: Findings) -> Section:
    """Rolling one- and three-year figures."""
    blocks = _blocks(*(drawn.rolling_picture(found, findings, years) for years in (1, 3)))
    if len(blocks) < 2:
        covered = "a year" if not blocks else "three years"
        blocks.append(Prose(f"The history is shorter than {covered} and a day: no rolling figures of that length."))
    return Section(anchor="rolling", title="Rolling figures", blocks=blocks)


def rolls(found: Answer) -> Section:
    """Every option opened, folded away."""
    table = costs.rolls_table(found)
    live = sum(int(leg.schedule.live.sum()) for leg in found.replay.legs)
    said = f"{table.caption}, {live} still open at the end."
    return Section(
        anchor="rolls", title="Each roll",
        blocks=[Prose(said), Fold(summary="Show every roll", blocks=[table], printed=False)],
    )  # fmt: skip


def health(found: Answer, data_health: DataHealth | None) -> Section:
    """Sources, repairs and notes."""
    return Section(
        anchor="health", title="Data health", question="What the numbers were made from, and what was odd in it.",
        blocks=health_blocks(data_health, found.history_notes),
    )  # fmt: skip


def cautions(found: Answer) -> Section:
    """What may mislead."""
    said = [f"{upper_first(typographic(text))}." for text in found.warnings]
    return Section(anchor="cautions", title="Cautions", blocks=_blocks(Listing(said) if said else None, Prose(CAUTION)))


def again(how_to_run: str) -> Section:
    """The command."""
    return Section(
        anchor="again", title="How to run it again",
        blocks=[
            Prose("From the folder in which it was run:"),
            Command(how_to_run),
            Prose(
                "manifest.json in the results folder holds the checksums of all inputs and the overlay in full; the "
                "same inputs give the same figures."
            ),
        ],
    )  # fmt: skip


def key_figures(found: Answer) -> list[tuple[str, str, str]]:
    """Title, the overlay's figure, and the hold's beside it."""
    own, hold = found.figures["overlay"], found.figures["hold"]
    assert own is not None
    assert hold is not None
    rows = [
        (
            upper_first(tables.return_title(found)),
            tables.percent(own.annual_return),
            tables.percent(hold.annual_return),
        ),
        ("Deepest fall", tables.percent(own.max_drawdown), tables.percent(hold.max_drawdown)),
        ("Volatility", tables.percent(own.volatility), tables.percent(hold.volatility)),
        ("Sharpe ratio", tables.ratio(own.sharpe), tables.ratio(hold.sharpe)),
    ]
    end = float(found.replay.wealth[-1])
    grown = (number(end, 2) if np.isfinite(end) else "nothing", number(float(found.replay.hold[-1]), 2))
    return [*rows, ("1 grew to", *grown)]
