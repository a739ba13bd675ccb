"""The command that sets a market's roll plans side by side.

Belongs here: how the figures are shown. Does not belong here: computing them (`contracts/compared.py`), the
picture (`catalog/study_picture.py`). Heavy modules are imported inside the command.
"""

import os
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from flows.exits import Exit
from flows.render import say, say_json, say_table
from flows.shell import Asked, command

if TYPE_CHECKING:
    from catalog.study import Study
    from contracts.compared import Crossing, PlanFigures


def _study(asked: Asked, market: str, plan: tuple[str, ...], snapshot: str | None, picture: str | None) -> Exit:
    """Set a MARKET's roll plans side by side on its own data.

    The declared plans, and any given with --plan, are carried through the raw rows of a snapshot. A plan is
    written as in the market's file, on one line: --plan 'late = {trigger = "volume", confirm = 3}'.
    """
    from catalog.declarations import load_desk
    from catalog.places import Places
    from catalog.study import study_market
    from catalog.study_picture import save_picture
    from contracts.errors import DeskError

    where = asked.where()
    try:
        desk = load_desk(where.desk)
    except DeskError:
        # The snapshot's own desk serves; a mistake in the desk of today is told by `ropewalk desk`.
        desk = None
    study = study_market(Places(where.store), market, plan, snapshot, desk)
    target = Path(os.path.abspath(picture)) if picture is not None else None
    if target is not None:
        save_picture(study, target)
    if asked.as_json:
        say_json(_as_json(study, target))
    else:
        _show(study, target)
    return Exit.DONE


def _as_json(study: "Study", picture: Path | None) -> dict[str, Any]:
    from catalog.study import CANNOT_KNOW

    return {
        "market": study.market,
        "snapshot": study.snapshot,
        "look_backs": list(study.look_backs),
        "declared": list(study.declared),
        "plans": [asdict(figures) for figures in study.figures],
        "differences": [asdict(difference) for difference in study.differences],
        "holding_nothing": list(study.empty),
        "notes": list(study.notes),
        "cannot_know": list(CANNOT_KNOW),
        "picture": None if picture is None else str(picture),
    }


def _show(study: "Study", picture: Path | None) -> None:
    from catalog.study import CANNOT_KNOW

    say([f"{study.market}, snapshot {study.snapshot}, nearby 1 of each plan", *study.notes, ""])
    plans = [figures.plan for figures in study.figures]
    rows = [(name, *(read(figures) for figures in study.figures)) for name, read in _ROWS]
    say_table(("", *plans), rows)
    say(f"plan {name}: no contract can ever be held" for name in study.empty)
    if study.differences:
        reach = ", ".join(map(str, study.look_backs))
        say(["", f"how far the plans are apart (trend-sign score over {reach} sessions):"])
        say_table(
            ("plan", "against", "sessions", "held apart", "scored", "score differs", "of opposite sign"),
            [tuple(asdict(difference).values()) for difference in study.differences],
        )
    if picture is not None:
        say(["", f"picture: {picture}"])
    say(["", "What these figures cannot know:", *(f"  - {text}" for text in CANNOT_KNOW)])


def _share(value: float | None) -> str:
    return "not known" if value is None else f"{value:.1%}"


def _crossed(crossing: "Crossing") -> str:
    if crossing.median is None:
        return "never crossed"
    never = f", {crossing.never} never" if crossing.never else ""
    return f"{crossing.median:+.10g} ({crossing.least:+d} to {crossing.most:+d}{never})"


def _of_gaps(name: str) -> Any:
    """A figure of a plan's gaps, as text."""

    def read(figures: "PlanFigures") -> str:
        if figures.gaps is None:
            return "none"
        value = getattr(figures.gaps, name)
        return f"{value:.1f}" if isinstance(value, float) else str(value)

    return read


def _after_notice(figures: "PlanFigures") -> Any:
    return "no notice" if figures.after_first_notice is None else figures.after_first_notice


_ROWS: tuple[tuple[str, Any], ...] = (
    ("first session", lambda f: f.first_session),
    ("sessions", lambda f: f"{f.sessions:,}"),
    ("rolls", lambda f: str(f.rolls)),
    ("rolls a year", lambda f: f"{f.rolls_a_year:.1f}"),
    ("most active contract held, by volume", lambda f: _share(f.most_active_by_volume)),
    ("most active contract held, by open interest", lambda f: _share(f.most_active_by_open_interest)),
    ("share of the market's volume held", lambda f: _share(f.volume_held)),
    ("sessions on or after first notice", _after_notice),
    ("sessions in the last week before last trade", lambda f: f.in_last_week),
    ("gap of a roll in ticks, mean", _of_gaps("mean")),
    ("gap of a roll in ticks, worst", _of_gaps("worst")),
    ("worst gap on", _of_gaps("worst_on")),
    ("worst gap of", _of_gaps("worst_roll")),
    ("decided after the volume crossing, sessions", lambda f: _crossed(f.after_volume_crossing)),
    ("decided after the open interest crossing, sessions", lambda f: _crossed(f.after_open_interest_crossing)),
    ("rolls by deadline", lambda f: f.by_deadline),
    ("rolls by a person", lambda f: f.by_person),
    ("rolls postponed", lambda f: f.postponed),
    ("rolls measured stale", lambda f: f.measured_stale),
    ("sessions without a price of their own", lambda f: f.without_price),
)


_EXAMPLE = "ropewalk study NCOP --plan 'late = {trigger = \"volume\", confirm = 3}' --picture ncop.svg"

study = command(click.Group(), "study", _EXAMPLE)(
    click.argument("market")(
        click.option("--plan", multiple=True, metavar="PLAN", help="A further plan: name = {trigger = ..., ...}.")(
            click.option("--snapshot", metavar="NAME", help="Snapshot, by name or number.  [default: the newest]")(
                click.option("--picture", metavar="FILE", help="Write one picture, as .svg or .png.")(_study)
            )
        )
    )
)  # fmt: skip
