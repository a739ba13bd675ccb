"""Every soundness rule passes a market that is right, and returns a row where one number is not."""

from typing import Any

import duckdb
import pytest

from catalog.verify import RULES, run_rule
from contracts.tables import TABLES, make_table
from tests.catalog.small import S, sound_rows, table_named

Change = dict[str, Any]

# Rule, table, place of the row in `sound_rows` (None: one more row like the first), what is written over it.
OFFENCES: list[tuple[str, str, int | None, Change]] = [
    ("back_adjusted_is_settle_plus_shift", "series", 1, {"back_adjusted": 110.5}),
    ("back_adjusted_is_settle_plus_shift", "series", 1, {"back_adjusted": None}),
    ("back_adjusted_is_settle_plus_shift", "series", 1, {"settle": None}),
    ("ratio_adjusted_is_settle_times_scale", "series", 4, {"ratio_adjusted": 113.001}),
    ("ratio_adjusted_is_settle_times_scale", "series", 4, {"scale": None}),
    ("back_adjusted_change_is_held_change", "series", 3, {"change": 12.0}),
    ("back_adjusted_change_is_held_change", "series", 3, {"change": None}),
    ("ratio_adjusted_return_is_held_return", "series", 3, {"simple_return": 12 / 102}),
    ("ratio_adjusted_return_is_held_return", "series", 2, {"simple_return": None}),
    ("return_is_change_over_base", "series", 2, {"simple_return": 1 / 102}),
    ("return_is_change_over_base", "series", 2, {"change": None}),
    ("growth_compounds_returns", "series", 5, {"growth": 110.0}),
    ("growth_compounds_returns", "series", 0, {"growth": 99.0}),
    ("growth_compounds_returns", "series", 3, {"growth": None}),
    ("shift_is_sum_of_later_gaps", "series", 2, {"shift": 0.0}),
    ("shift_is_sum_of_later_gaps", "series", 9, {"shift": 10.0}),
    ("shift_is_sum_of_later_gaps", "rolls", 2, {"gap": 5.6}),
    ("shift_is_sum_of_later_gaps", "rolls", 2, {"gap": None}),
    ("scale_is_product_of_later_ratios", "series", 0, {"scale": 1.0}),
    ("scale_is_product_of_later_ratios", "rolls", 1, {"ratio": None}),
    ("gap_is_weighted_difference", "rolls", 0, {"gap": -9.0}),
    ("gap_is_weighted_difference", "rolls", 0, {"ratio": 102 / 111}),
    ("gap_is_weighted_difference", "rolls", 0, {"ratio": None}),
    ("gap_is_weighted_difference", "rolls", 0, {"measured_on": None}),
    ("ledger_settles_are_clean", "rolls", 0, {"incoming_settle": 112.0}),
    ("ledger_settles_are_clean", "bars", 8, {"clean_settle": None}),
    ("ledger_goes_forward", "rolls", 0, {"incoming": "NWHT-2023-12"}),
    ("ledger_goes_forward", "rolls", 0, {"decided_on": S[3]}),
    ("ledger_goes_forward", "rolls", 0, {"measured_on": S[4]}),
    ("ledger_goes_forward", "rolls", 2, {"effective_on": S[3]}),
    ("ledger_is_a_chain", "rolls", 2, {"weight_before": 0.25}),
    ("ledger_is_a_chain", "rolls", 1, {"weight_after": 1.0}),
    ("ledger_is_a_chain", "rolls", 2, {"incoming": "NWHT-2024-09"}),
    ("held_contract_follows_ledger", "series", 3, {"contract": "NWHT-2024-03"}),
    ("held_contract_follows_ledger", "series", 0, {"contract": "NWHT-2024-05"}),
    ("held_contract_follows_ledger", "series", 9, {"incoming_weight": 0.25}),
    ("held_contract_follows_ledger", "series", 10, {"incoming": "NWHT-2024-05"}),
    ("rolled_sessions_are_in_ledger", "series", 1, {"rolled": True}),
    ("rolled_sessions_are_in_ledger", "series", 3, {"rolled": False}),
    ("rolled_sessions_are_in_ledger", "rolls", 0, {"effective_on": S[4]}),
    ("settle_is_held_contracts", "series", 1, {"settle": 10.1}),
    ("settle_is_held_contracts", "series", 9, {"settle": 109.0}),
    ("settle_is_held_contracts", "bars", 1, {"clean_settle": None}),
    ("status_fits_price", "series", 1, {"status": "missing"}),
    ("status_fits_price", "series", 1, {"status": "guessed"}),
    ("status_fits_price", "series", 1, {"settle": None}),
    ("status_fits_price", "bars", 1, {"status": "masked"}),
    ("status_fits_price", "bars", 1, {"clean_settle": None}),
    ("bars_come_from_files", "bars", 5, {"file": "0" * 64}),
    ("rejects_come_from_files", "rejects", 0, {"file": "0" * 64}),
    ("bars_have_terms", "terms", 1, {"contract": "NWHT-2024-07"}),
    ("bars_have_terms", "bars", 0, {"contract": "NKRN-2024-03"}),
    ("one_state_a_market", "coverage", 1, {"state": "held back", "reason": "too few bars"}),
    ("one_state_a_market", "coverage", None, {"market": "NKRN", "state": "held back"}),
    ("one_state_a_market", "coverage", None, {"market": "NKRN", "state": "late"}),
    ("coverage_counts_series", "coverage", 0, {"sessions": 7}),
    ("coverage_counts_series", "coverage", 0, {"plan": "another"}),
    ("coverage_counts_series", "coverage", 0, {"missing": 1}),
    ("coverage_counts_series", "coverage", 0, {"last_session": S[4]}),
    ("findings_say_what_was_done", "findings", 0, {"severity": "grave"}),
    ("findings_say_what_was_done", "findings", 0, {"action": "repaired"}),
    ("findings_say_what_was_done", "findings", 0, {"corrected": 101.0}),
    ("findings_say_what_was_done", "findings", 0, {"impact_sessions": -1}),
    *(("keys_unique", table.name, None, {}) for table in TABLES),
]  # fmt: skip


def lay_open(tables: dict[str, dict[str, Any]]) -> duckdb.DuckDBPyConnection:
    """A connection in which each table is in reach by its name."""
    connection = duckdb.connect()
    for name, columns in tables.items():
        connection.register(name, make_table(table_named(name), columns))
    return connection


@pytest.mark.parametrize("rule", sorted(path.stem for path in RULES.glob("*.sql")))
def test_a_sound_market_offends_no_rule(rule: str) -> None:
    assert run_rule(lay_open(sound_rows()), RULES / f"{rule}.sql") == []


@pytest.mark.parametrize("rule, table, row, change", OFFENCES)
def test_one_wrong_value_offends_its_rule(rule: str, table: str, row: int | None, change: Change) -> None:
    tables = sound_rows()
    if row is None:
        for values in tables[table].values():
            values.append(values[0])
    for column, value in change.items():
        count = len(tables[table]["market" if "market" in tables[table] else "run"])
        tables[table].setdefault(column, [None] * count)[-1 if row is None else row] = value
    (problem,) = run_rule(lay_open(tables), RULES / f"{rule}.sql")
    assert problem.startswith(f"{rule}: ")


def test_a_settle_carried_for_a_fourth_session_offends() -> None:
    tables = sound_rows()
    tables["series"]["status"][13:16] = ["carried"] * 3
    assert run_rule(lay_open(tables), RULES / "carried_three_at_most.sql") == []
    tables["series"]["status"][13:17] = ["carried"] * 4
    (problem,) = run_rule(lay_open(tables), RULES / "carried_three_at_most.sql")
    assert "session 2024-01-12" in problem


def test_a_market_held_back_may_serve_bars_of_a_file_that_is_no_longer_listed() -> None:
    tables = sound_rows()
    tables["files"]["file"] = ["0" * 64]
    rule = RULES / "bars_come_from_files.sql"
    assert len(run_rule(lay_open(tables), rule)) == 1
    tables["coverage"] |= {"state": ["held back"] * 3, "reason": ["too few bars"] * 3}
    assert run_rule(lay_open(tables), rule) == []


def test_every_rule_is_tested_with_a_row_that_offends() -> None:
    tested = {rule for rule, *_ in OFFENCES} | {"carried_three_at_most"}
    assert tested == {path.stem for path in RULES.glob("*.sql")}


def test_a_problem_names_the_rule_its_meaning_and_the_rows() -> None:
    tables = sound_rows()
    tables["rejects"]["file"] = ["f" * 64]
    assert run_rule(lay_open(tables), RULES / "rejects_come_from_files.sql") == [
        "rejects_come_from_files: A rejected row names a raw file that the snapshot does not list. "
        f"1 row: file {'f' * 64}, rejects 1"
    ]
