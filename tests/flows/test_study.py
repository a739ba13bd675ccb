"""The command `study`: figures, further plans, the picture, and what it says of a wrong plan."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

NEXT = 'next_one = {trigger = "open interest", confirm = 2, backstop = 4}'


def study(store: Path, *words: str) -> "subprocess.CompletedProcess[str]":
    command = [sys.executable, "-m", "flows.commands", "study", *words, "--store", str(store)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def test_the_metal_is_better_held_by_its_active_contracts_than_by_the_next_one(sample_store: Path) -> None:
    """All twelve months of the metal are listed and five trade: the next contract is often an empty one."""
    told = json.loads(study(sample_store, "NCOP", "--plan", NEXT, "--json").stdout)
    plans = {figures["plan"]: figures for figures in told["plans"]}
    assert list(plans) == ["by_open_interest", "liquid_months", "next_one"]
    for better in ("by_open_interest", "liquid_months"):
        for share in ("most_active_by_volume", "most_active_by_open_interest", "volume_held"):
            assert plans[better][share] > plans["next_one"][share] + 0.05
        assert plans[better]["rolls_a_year"] < plans["next_one"]["rolls_a_year"] / 2
        assert plans[better]["by_deadline"] * 10 < plans["next_one"]["by_deadline"]
    assert [(d["plan"], d["other"]) for d in told["differences"]] == [
        ("by_open_interest", "liquid_months"), ("by_open_interest", "next_one"), ("liquid_months", "next_one"),
    ]  # fmt: skip
    assert told["cannot_know"][0].startswith("what a roll costs to trade")


def test_the_picture_is_drawn_the_same_twice_and_the_text_ends_with_what_it_cannot_know(
    sample_store: Path, tmp_path: Path
) -> None:
    first = study(sample_store, "NWHT", "--picture", str(tmp_path / "one.svg"))
    study(sample_store, "NWHT", "--picture", str(tmp_path / "two.svg"))
    assert first.returncode == 0, first.stderr
    assert (tmp_path / "one.svg").read_bytes() == (tmp_path / "two.svg").read_bytes()
    assert b"by_open_interest" in study_text(tmp_path / "one.svg")
    lines = first.stdout.splitlines()
    assert lines[-5] == "What these figures cannot know:"


def study_text(path: Path) -> bytes:
    # Letters are drawn as outlines; the text itself stands in comments beside them.
    return path.read_bytes()


def test_a_picture_of_another_kind_is_refused_and_nothing_written(sample_store: Path, tmp_path: Path) -> None:
    told = study(sample_store, "NWHT", "--picture", str(tmp_path / "one.gif"))
    assert told.returncode == 2
    assert "expected .svg or .png" in told.stderr
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["NCCO"], "no market 'NCCO' in .*NCOC"),
        (["NCOC", "--plan", "q"], "--plan: q: seen Expected '='"),
        (["NCOC", "--plan", 'x = {trigger = "volum", steps = 0}'], "steps: seen 0; expected greater than"),
        (["NCOC", "--plan", "in_fifths = {}"], "a name that is taken"),
        (["NCOC", "--plan", 'x = {trigger = "volume", months = [1]}'], "plans.x.months: seen \\[1\\]; expected months"),
        (["NCOP", "--plan", 'x = {trigger = "volume", before = "first notice"}'], "a \\[first_notice\\] rule"),
    ],
)  # fmt: skip
def test_what_cannot_be_studied_is_refused_with_what_was_expected(
    sample_store: Path, words: list[str], message: str
) -> None:
    import re

    told = study(sample_store, *words)
    assert told.returncode == 2
    assert re.search(message, told.stderr), told.stderr
