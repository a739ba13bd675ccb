"""Prints what the checks reach on the bench: `python -m tests.detectors.report [--seeds tuning] [--json]`.

Belongs here: tables for people, and the same as JSON. Does not belong here: any measuring.
"""

import argparse
import json
import sys
from collections import Counter
from typing import Any

from contracts.sessions import day_of
from tests.detectors.bench import (
    ALL,
    SEEDS,
    measure_histories,
    measure_last_sessions,
    measure_textbook,
    online_precision,
    plant,
)
from tests.detectors.curves import Grown
from tests.detectors.faults import Fault
from tests.detectors.power import BACK, HELD, LAST, SIZES, measure_power
from tests.detectors.score import Tally

_ROLES = (HELD, BACK, LAST)


def gather(seeds: str, codes: tuple[str, ...], sample: int, last_sessions: int) -> dict[str, Any]:
    """All figures as plain values; `sample` 0 leaves out the last sessions, `last_sessions` 0 the power curve."""
    markets = plant(codes, seeds)
    histories = measure_histories(markets, seeds)
    result: dict[str, Any] = {
        "seeds": seeds,
        "seed": SEEDS[seeds],
        "markets": len(markets),
        "sessions": histories.sessions,
        "rows": histories.rows,
        "faults": sum(histories.planted.values()),
        "recall": histories.recall,
        "precision": histories.precision,
        "kinds": _rows(histories),
        "right": dict(histories.right),
        "false": dict(histories.false),
        "examples": _examples(histories),
        "true_events_altered": histories.altered,
        "true_settles_replaced": histories.replaced_truths,
        "repairs": histories.repair_errors(),
        "masked": histories.masked,
        "left_standing": histories.left,
        "findings_about_rolls": histories.about_rolls,
        "missed": [_describe(fault) for fault in histories.missed],
    }
    if sample:
        with_fault, without = measure_last_sessions(markets, seeds, sample)
        false = with_fault.false_rows + without.false_rows
        result["online"] = {
            "sessions": with_fault.sessions + without.sessions,
            "recall": with_fault.recall,
            "precision": online_precision(with_fault, without, histories),
            "kinds": _rows(with_fault),
            "false": dict(with_fault.false + without.false),
            "examples": [found.message for found in false][:40],
            "missed": [_describe(fault) for fault in with_fault.missed],
        }
    if last_sessions:
        result["power"] = _power([planted.grown for planted in markets], SEEDS[seeds], last_sessions)
    result["textbook"] = {f"{limit:g}": measure_textbook(markets, limit) for limit in (3.0, 8.0)}
    return result


def _rows(tally: Tally) -> dict[str, dict[str, float]]:
    return {
        kind: {
            "planted": tally.planted[kind],
            "found": tally.found[kind],
            "recall": round(tally.recall_of(kind), 4),
            "named": round(tally.named[kind] / tally.planted[kind], 4),
        }
        for kind in sorted(tally.planted)
    }


def _describe(fault: Fault) -> str:
    place = f"{fault.contract or 'market'} {day_of(fault.first)}"
    truth = f", truth {fault.truth[0]:.6g}" if fault.truth else ""
    return f"{place}: {fault.kind} ({fault.form}), size {fault.size:.6g}{truth}"


def _power(markets: list[Grown], seed: int, last_sessions: int) -> dict[str, Any]:
    curve = measure_power(markets, seed, last_sessions)
    table: dict[str, Any] = {}
    for unit, size in SIZES:
        row: dict[str, Any] = {}
        for role in _ROLES:
            for form, whole in (("all", None), ("settle", False), ("bar", True)):
                planted, found = curve.count(role, unit, size, whole)
                row[f"{role}, {form}"] = round(found / planted, 3) if planted else None
            row[f"{role}, planted"] = curve.count(role, unit, size)[0]
        table[f"{size:g} {unit}"] = row
    return {"precision": curve.tally.precision, "false": dict(curve.tally.false), "table": table}


def _examples(tally: Tally) -> dict[str, list[str]]:
    """A few false alarms of each kind."""
    examples: dict[str, list[str]] = {}
    for found in tally.false_rows:
        examples.setdefault(found.kind, []).append(found.message)
    return {kind: rows[:: max(1, len(rows) // 6)][:6] for kind, rows in examples.items()}


def say(result: dict[str, Any], misses: int) -> None:
    """Print the tables, and so many of the faults that were missed."""
    size = (
        f"{result['markets']} markets, {result['sessions']} sessions, {result['rows']} rows, {result['faults']} faults"
    )
    _say(f"{size}; {result['seeds']} seed ({result['seed']})")
    _say(f"whole histories: recall {result['recall']:.4f}, precision {result['precision']:.4f}")
    _say_kinds(result["kinds"])
    _say(f"right findings {_counts(result['right'])}")
    _say(f"false alarms   {_counts(result['false'])}")
    for kind, rows in sorted(result["examples"].items()):
        _say_list([f"{kind}: {row}" for row in rows])
    altered, replaced = result["true_events_altered"], result["true_settles_replaced"]
    _say(f"true events altered {len(altered)}; true settles replaced, events or not, {replaced}")
    _say_list(altered[:10])
    errors = ", ".join(f"{name} {value:.4g}" for name, value in result["repairs"].items())
    _say(f"repairs: {errors}; masked {result['masked']}, wrong settles left standing {result['left_standing']}")
    _say(f"findings about rolls, left out: {result['findings_about_rolls']}")
    _say_list(result["missed"][:misses])
    if "online" in result:
        _say_online(result["online"], misses)
    if "power" in result:
        _say_power(result["power"])
    for limit, row in result["textbook"].items():
        name = f"textbook filter (Hampel, window 11) at {limit} scaled MADs"
        false = f"{row['false_alarms']:.3f} of {row['alarms']:.0f} alarms false"
        _say(f"{name}: recall {row['recall']:.3f}, {false}")


def _say(text: str) -> None:
    sys.stdout.write(text + "\n")


def _say_list(rows: list[str]) -> None:
    for row in rows:
        _say(f"    {row}")


def _say_kinds(rows: dict[str, dict[str, float]]) -> None:
    _say(f"  {'kind':<28}{'planted':>8}{'found':>8}{'recall':>9}{'named':>9}")
    for kind, row in rows.items():
        _say(f"  {kind:<28}{row['planted']:>8}{row['found']:>8}{row['recall']:>9.3f}{row['named']:>9.3f}")


def _say_online(online: dict[str, Any], misses: int) -> None:
    _say(f"last session, {online['sessions']}: recall {online['recall']:.4f}, precision {online['precision']:.4f}")
    _say_kinds(online["kinds"])
    _say(f"false alarms   {_counts(online['false'])}")
    _say_list(online["examples"][:12])
    _say_list([f"missed: {row}" for row in online["missed"][:misses]])


def _say_power(power: dict[str, Any]) -> None:
    _say(f"recall of spikes by size: all (settle only / whole bar), at a precision of {power['precision']:.4f}")
    _say(f"  {'size':<10}" + "".join(f"{role:>28}" for role in _ROLES))
    for size, row in power["table"].items():
        cells = []
        for role in _ROLES:
            figures = [row[f"{role}, {form}"] for form in ("all", "settle", "bar")]
            texts = ["-" if figure is None else f"{figure:.2f}" for figure in figures]
            cells.append(f"{texts[0]} ({texts[1]} / {texts[2]}) n={row[f'{role}, planted']}")
        _say(f"  {size:<10}" + "".join(f"{cell:>28}" for cell in cells))


def _counts(counts: dict[str, int]) -> str:
    return f"{sum(counts.values())}: " + ", ".join(f"{kind} {count}" for kind, count in Counter(counts).most_common())


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description="What the checks reach on the bench of seeded faults.")
    parser.add_argument("--seeds", choices=sorted(SEEDS), default="reported")
    parser.add_argument("--json", action="store_true", help="all figures as JSON")
    parser.add_argument("--markets", nargs="+", default=ALL, metavar="CODE", help="only these markets")
    parser.add_argument("--sample", type=int, default=300, help="last sessions with a fault, and as many without")
    parser.add_argument("--power", type=int, default=40, help="last sessions a size of the power curve; 0: no curve")
    parser.add_argument("--misses", type=int, default=0, help="list so many missed faults")
    options = parser.parse_args()
    result = gather(options.seeds, tuple(options.markets), options.sample, options.power)
    if options.json:
        _say(json.dumps(result, indent=1))
    else:
        say(result, options.misses)


if __name__ == "__main__":
    main()
