"""Roll plans side by side on one market's own data.

Belongs here: the snapshot's raw rows and desk, and the plans that are asked about. Does not belong here: the
figures (`contracts/compared.py`), the picture (`study_picture.py`).
"""

import re
import tomllib
from dataclasses import dataclass, replace

from catalog.archive import Intake, read_register
from catalog.assignment import assign_files, code_digest, gather_inputs
from catalog.declarations import Desk
from catalog.kept_desk import desk_of
from catalog.listings import nearest
from catalog.places import Places
from catalog.standing import find_snapshot, origin_of, read_manifest
from catalog.wishes import until_of
from contracts.build import lay_plans, prepare_market
from contracts.compared import Difference, PlanFigures, differences, figures_of
from contracts.declared import PLAIN_NAME, validate
from contracts.errors import DeskError, Mistake, UsageError
from contracts.evidence import Evidence, gather_evidence
from contracts.impact import Laid
from contracts.markets import Market, Plan, inconsistencies
from contracts.panel import Panel
from contracts.repairs import Clean

# What prices alone can never say; a choice of plan is not complete without it.
CANNOT_KNOW = (
    "what a roll costs to trade: slippage, fees, the spread between bid and ask",
    "whether the volume seen could be had at the settle, or on the session a roll takes effect",
    "how the position's own size would have moved the market",
    "margins, limits on positions, and delivery obligations of whoever holds past first notice",
)


@dataclass(frozen=True, eq=False)
class Study:
    """What a study of a market found. `notes` say where today's code is not the snapshot's."""

    market: str
    snapshot: str
    declared: tuple[str, ...]
    figures: tuple[PlanFigures, ...]
    differences: tuple[Difference, ...]
    empty: tuple[str, ...]
    notes: tuple[str, ...]
    look_backs: tuple[int, ...]
    panel: Panel
    laid: tuple[Laid, ...]


def study_market(
    places: Places, market: str, extra: tuple[str, ...] = (), snapshot: str | None = None, desk: Desk | None = None
) -> Study:
    """Carry a market's declared plans, and those given as text, through the raw rows of a snapshot.

    `extra` are plans such as 'late = {trigger = "volume", confirm = 3}'; `desk` serves snapshots from before
    desks were kept. Raises UsageError for a market or snapshot that is not there, DeskError with every mistake
    of the plans given.
    """
    carried = carry_plans(places, market, extra, snapshot, desk)
    panel = carried.panel
    laid = [one for one in carried.laid if one.held.nearby == 1]
    # A series exists wherever a contract was ever held.
    there = [(one.name, one.held, one.series) for one in laid if one.series is not None]
    return Study(
        market, carried.snapshot, carried.declared, tuple(figures_of(panel, *one) for one in there),
        tuple(differences(there, carried.look_backs)), tuple(one.name for one in laid if one.series is None),
        carried.notes, carried.look_backs, panel, tuple(laid),
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class Carried:
    """A market of a snapshot carried from its raw rows to its plans, in memory."""

    snapshot: str
    market: Market
    declared: tuple[str, ...]
    look_backs: tuple[int, ...]
    panel: Panel
    clean: Clean
    laid: tuple[Laid, ...]
    notes: tuple[str, ...]


def carry_plans(
    places: Places, market: str, extra: tuple[str, ...] = (), snapshot: str | None = None, desk: Desk | None = None
) -> Carried:
    """Carry a market's plans, at nearby 1, through the raw rows a snapshot was made from; as `study_market`."""
    manifest = read_manifest(places, find_snapshot(places, snapshot) if snapshot is not None else None)
    if market not in manifest.markets:
        raise UsageError(f"no market {market!r} in {manifest.name}; {nearest(market, list(manifest.markets))}")
    manifest = origin_of(places, manifest, market)
    made_with = desk_of(places, manifest) if manifest.desk_files or desk is None else desk
    if market not in made_with.markets:
        raise UsageError(f"no market {market!r} in {manifest.name}; {nearest(market, list(made_with.markets))}")
    declared = made_with.markets[market]
    studied = replace_plans(declared, read_plans(extra, declared))
    arrivals = tuple(arrival for arrival in read_register(places) if arrival.taken_in <= manifest.intake)
    files = assign_files(made_with, Intake(manifest.intake, 0, arrivals, ()), places).files[market]
    inputs = gather_inputs(made_with, market, files, places)
    made = prepare_market(replace(inputs, market=studied, until=until_of(manifest, market)))
    panel = made.clean.traded(made.panel)
    notes = []
    if manifest.code != code_digest():
        notes.append(f"snapshot {manifest.name} was made by other code; these figures are by the code of today")
    return Carried(
        manifest.name, studied, tuple(declared.plans), made_with.look_backs, panel, made.clean,
        tuple(lay_plans(panel, made.clean)), tuple(notes),
    )  # fmt: skip


def list_evidence(
    places: Places, market: str, plan: str | None = None, snapshot: str | None = None, desk: Desk | None = None
) -> tuple[Carried, list[Evidence]]:
    """The evidence of every roll of a market's nearby 1, or of one plan's; raises UsageError as `study_market`."""
    carried = carry_plans(places, market, (), snapshot, desk)
    if plan is not None and plan not in carried.declared:
        raise UsageError(f"{market} has no plan {plan!r}; {nearest(plan, list(carried.declared))}")
    found: list[Evidence] = []
    for one in carried.laid:
        if plan in (None, one.name):
            found += gather_evidence(carried.panel, carried.clean, one.name, carried.market.plans[one.name], one.held)
    return carried, found


def replace_plans(market: Market, extra: dict[str, Plan]) -> Market:
    """The market with more plans, each studied at nearby 1."""
    plans = {name: plan.model_copy(update={"nearbys": (1,)}) for name, plan in {**market.plans, **extra}.items()}
    return market.model_copy(update={"plans": plans})


def read_plans(texts: tuple[str, ...], market: Market) -> dict[str, Plan]:
    """Plans from texts such as 'late = {trigger = "volume"}'; raises DeskError with every mistake."""
    plans: dict[str, Plan] = {}
    mistakes: list[Mistake] = []
    for text in texts:
        try:
            data = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            mistakes.append(Mistake("--plan", text, str(error), 'such as: late = {trigger = "volume", confirm = 3}'))
            continue
        for name, table in data.items():
            key = f"--plan {name}"
            if not _is_plain(name) or name in market.plans or name in plans:
                seen = "a name that is taken" if name in market.plans or name in plans else repr(name)
                mistakes.append(Mistake(key, "(name)", seen, f"a name of its own of the form {PLAIN_NAME}"))
                continue
            if not isinstance(table, dict):
                mistakes.append(Mistake(key, name, repr(table), 'a table such as {trigger = "volume"}'))
                continue
            plan, found = validate(Plan, table, text, key)
            mistakes += [replace(mistake, line=None) for mistake in found]
            if plan is not None:
                plans[name] = plan
    for mistake in inconsistencies(replace_plans(market, plans), "", "--plan"):
        if mistake.key.split(".")[1:2] and mistake.key.split(".")[1] in plans:
            mistakes.append(mistake)
    if mistakes:
        raise DeskError(mistakes)
    return plans


def _is_plain(name: str) -> bool:
    return re.fullmatch(PLAIN_NAME, name) is not None
