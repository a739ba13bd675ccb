"""Prints what the checks reach on the bench: `python -m tests.detectors.report [--seeds tuning] [--json]`.

Belongs here: tables for people, and the same as JSON. Does not belong here: any measuring.
"""

import argparse
import json
import sys
from collections import Counter
from typing import Any

from tests.detectors.bench import (
    ALL,
    SEEDS,
    measure_histories,
    measure_last_sessions,
    measure_textbook,
    online_precision,
    plant,
)
from tests.detectors.score import Tally


def _rows(tally: Tally) -> dict[str, dict[str, float]]:
    return {
        kind: {
            "planted": tally.planted[kind], "found": tally.found[kind], "recall": round(tally.recall_of(kind), 4),
            "named": round(tally.named[kind] / tally.planted[kind], 4),
        }
        for kind in sorted(tally.planted)
    }  # fmt: skip


def gather(seeds: str, codes: tuple[str, ...], sample: int) -> dict[str, Any]:
    """All figures as plain values."""
    markets = plant(codes, seeds)
    histories = measure_histories(markets, seeds)
    result: dict[str, Any] = {
        "seeds": seeds, "seed": SEEDS[seeds], "markets": len(markets), "sessions": histories.sessions,
        "recall": histories.recall, "precision": histories.precision, "kinds": _rows(histories),
        "right": dict(histories.right), "false": dict(histories.false),
        "true_events_altered": len(histories.altered), "true_settles_replaced": histories.replaced_truths,
        "repairs": histories.repair_errors(), "masked": histories.masked, "left_standing": histories.left,
        "findings_about_rolls": histories.about_rolls,
    }  # fmt: skip
    if sample:
        with_fault, without = measure_last_sessions(markets, seeds, sample)
        result["online"] = {
            "sessions": with_fault.sessions + without.sessions, "recall": with_fault.recall,
            "precision": online_precision(with_fault, without, histories), "kinds": _rows(with_fault),
            "false": dict(with_fault.false + without.false),
        }  # fmt: skip
        result["online_false_examples"] = [found.message for _, found in with_fault.false_rows + without.false_rows][
            :40
        ]
    result["textbook"] = {f"{limit:g}": measure_textbook(markets, limit) for limit in (3.0, 8.0)}
    result["examples"] = _examples(histories)
    result["missed"] = [
        f"{fault.kind} ({fault.form}) {name or market} day {fault.first}, size {fault.size:.6g}, truth {fault.truth[:1]}"
        for market, (name, fault) in (("", pair) for pair in histories.missed)
    ]
    result["altered"] = histories.altered
    return result


def _examples(tally: Tally) -> dict[str, list[str]]:
    """A few false alarms of each kind."""
    examples: dict[str, list[str]] = {}
    for _, found in tally.false_rows:
        examples.setdefault(found.kind, []).append(found.message)
    return {kind: rows[:: max(1, len(rows) // 5)][:5] for kind, rows in examples.items()}


def _say(text: str = "") -> None:
    sys.stdout.write(text + "\n")


def _table(rows: dict[str, dict[str, float]]) -> None:
    _say(f"  {'kind':<28}{'planted':>8}{'found':>8}{'recall':>9}{'named':>9}")
    for kind, row in rows.items():
        _say(f"  {kind:<28}{row['planted']:>8}{row['found']:>8}{row['recall']:>9.3f}{row['named']:>9.3f}")


def say(result: dict[str, Any], misses: int) -> None:
    """The tables."""
    _say(f"{result['markets']} markets, {result['sessions']} sessions, {result['seeds']} seeds ({result['seed']})")
    _say(f"whole histories: recall {result['recall']:.4f}, precision {result['precision']:.4f}")
    _table(result["kinds"])
    _say(f"right findings {_counts(result['right'])}")
    _say(f"false alarms   {_counts(result['false'])}")
    for kind, rows in sorted(result["examples"].items()):
        for row in rows:
            _say(f"    {kind}: {row}")
    _say(
        f"true events altered {result['true_events_altered']}, true settles replaced {result['true_settles_replaced']}"
    )
    for row in result["altered"][:10]:
        _say(f"    {row}")
    errors = ", ".join(f"{name} {value:.4g}" for name, value in result["repairs"].items())
    _say(f"repairs: {errors}; masked {result['masked']}, wrong settles left standing {result['left_standing']}")
    if "online" in result:
        online = result["online"]
        _say(f"last session, {online['sessions']}: recall {online['recall']:.4f}, precision {online['precision']:.4f}")
        _table(online["kinds"])
        _say(f"false alarms   {_counts(online['false'])}")
        for row in result["online_false_examples"][:10]:
            _say(f"    {row}")
    for limit, row in result["textbook"].items():
        _say(
            f"Hampel, window 11, {limit} scaled MADs: recall {row['recall']:.3f}, "
            f"{row['false_alarms']:.3f} of {row['alarms']:.0f} alarms false"
        )
    if misses:
        _say("missed:")
        for row in result["missed"][:misses]:
            _say(f"    {row}")


def _counts(counts: dict[str, int]) -> str:
    return f"{sum(counts.values())}: " + ", ".join(f"{kind} {count}" for kind, count in Counter(counts).most_common())


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description="What the checks reach on the bench of seeded faults.")
    parser.add_argument("--seeds", choices=sorted(SEEDS), default="reported")
    parser.add_argument("--json", action="store_true", help="all figures as JSON")
    parser.add_argument("--markets", nargs="+", default=ALL, metavar="CODE", help="only these markets")
    parser.add_argument("--sample", type=int, default=300, help="last sessions with a fault, and as many without")
    parser.add_argument("--misses", type=int, default=0, help="list so many missed faults")
    options = parser.parse_args()
    result = gather(options.seeds, tuple(options.markets), options.sample)
    if options.json:
        _say(json.dumps(result, indent=1))
    else:
        say(result, options.misses)


if __name__ == "__main__":
    main()
