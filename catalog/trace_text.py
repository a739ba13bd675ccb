"""A trace in words: the sum first, then what made each part of it.

Belongs here: wording and the sum as a person does it again with a pencil. Does not belong here: gathering
what is told (`trace.py`).
"""

from typing import Any

from catalog.trace import LaterRoll, Leg, Trace
from catalog.traced_rows import Rule


def trace_lines(trace: Trace) -> list[str]:
    """The trace as lines of text."""
    row = trace.row
    told = [f"{trace.market}, {trace.session}, plan {trace.plan}, nearby {trace.nearby}: {row['status']}"]
    told += _settle_lines(row, trace.legs)
    if row["settle"] is not None:
        told += _sum_lines(row, trace.later)
    for roll in trace.decided_here:
        told += ["", f"rolled on this session: {roll.outgoing} -> {roll.incoming}", *_roll_lines(roll)]
    if trace.later:
        told += ["", f"{len(trace.later)} later {'roll' if len(trace.later) == 1 else 'rolls'}, the next first:"]
        told += [
            f"  {roll.effective_on}  {roll.outgoing} -> {roll.incoming}  measured {roll.measured_on}: "
            f"{_say(roll.incoming_settle)} - {_say(roll.outgoing_settle)}{_weights(roll)} = {_say(roll.gap)}  "
            f"ratio {_say(roll.ratio)}  ({roll.trigger}, decided {roll.decided_on})"
            for roll in trace.later
        ]
    for leg in trace.legs:
        told += ["", *_leg_lines(leg)]
    if trace.rules:
        told += ["", "set by:", *(f"  {_rule(rule)}" for rule in trace.rules)]
    return [*told, "", f"snapshot {trace.snapshot}, desk {trace.desk[:12]}, code {trace.code[:12]}"]


def _say(value: float | None) -> str:
    """A number as short as it is exact to ten decimals."""
    if value is None:
        return "none"
    text = f"{value:.10f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def _settle_lines(row: dict[str, Any], legs: tuple[Leg, ...]) -> list[str]:
    if row["settle"] is None:
        return ["  settle          none: no price of the held contract for more than three sessions"]
    if len(legs) == 1:
        return [f"  settle          {_say(row['settle'])}  ({legs[0].contract})"]
    parts = " + ".join(f"{_say(leg.weight)} x {_say(leg.settle)} ({leg.contract})" for leg in legs)
    return [f"  settle          {parts} = {_say(row['settle'])}"]


def _sum_lines(row: dict[str, Any], later: tuple[LaterRoll, ...]) -> list[str]:
    settle, shift, scale = row["settle"], row["shift"], row["scale"]
    told = []
    if shift is None:
        told.append("  back_adjusted   none: a later roll could not be measured")
    else:
        gaps = f"  (sum of {len(later)} gaps)" if later else "  (no later roll)"
        told.append(f"  shift           {_say(shift)}{gaps}")
        told.append(f"  back_adjusted   {_say(settle)} + {_say(shift)} = {_say(row['back_adjusted'])}")
    if scale is None:
        told.append("  ratio_adjusted  none: a later roll has no ratio")
    else:
        told.append(f"  ratio_adjusted  {_say(settle)} x {_say(scale)} = {_say(row['ratio_adjusted'])}")
    return told


def _weights(roll: LaterRoll) -> str:
    share = roll.weight_after - roll.weight_before
    return "" if share == 1.0 else f", x {_say(share)}"


def _roll_lines(roll: LaterRoll) -> list[str]:
    return [
        f"  decided {roll.decided_on} by {roll.trigger}, measured {roll.measured_on}, effective {roll.effective_on}",
        f"  gap {_say(roll.incoming_settle)} - {_say(roll.outgoing_settle)}{_weights(roll)} = {_say(roll.gap)}, "
        f"ratio {_say(roll.ratio)}",
    ]


def _leg_lines(leg: Leg) -> list[str]:
    if leg.session is None:
        return [f"{leg.contract}: no bar"]
    told = [f"{leg.contract} on {leg.session}: reported {_say(leg.reported)}, used {_say(leg.settle)} ({leg.status})"]
    if leg.scale != 1.0 and leg.reported is not None:
        on_scale = _say(leg.reported * leg.scale)
        told.append(f"  on the market's present scale: {_say(leg.reported)} x {_say(leg.scale)} = {on_scale}")
    told += [f"  {message}" for message in leg.findings]
    if leg.repair is not None:
        told.append(f"  declared in {_rule(leg.repair)}")
    if leg.path is not None:
        told += [f"  {leg.path}:{leg.line}", f"  SHA-256 {leg.file}", f"  {leg.text}"]
    others = [version for version in leg.versions if (version.file, version.line) != (leg.file, leg.line)]
    if others:
        told.append("  other versions of the row:")
    for version in others:
        more = f", and in {version.versions - 1} more versions" if version.versions > 1 else ""
        told += [
            f"    {version.path}:{version.line}, from intake {version.taken_in}{more}",
            f"    SHA-256 {version.file}",
            f"    {version.text}",
        ]
    told += [f"  rejected since: {rejected}" for rejected in leg.rejected]
    return told


def _rule(rule: Rule) -> str:
    place = f"{rule.file}:{rule.line}" if rule.line is not None else rule.file
    return f"{place}: {rule.key}: {rule.says}"
