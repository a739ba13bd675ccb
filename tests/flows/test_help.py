"""Every command explains itself, and does so without loading what it does not need."""

import json
import shlex

import click
import pytest

from flows.commands import main
from flows.exits import MEANINGS, Exit, exit_table
from tests.flows.conftest import Run, RunApart

HEAVY = (
    "prefect",
    "duckdb",
    "pyarrow",
    "pandas",
    "numpy",
    "pydantic",
    "rich",
    "exchange_calendars",
    "catalog",
)
COMMANDS = (
    "build",
    "changes",
    "desk",
    "findings",
    "nightly",
    "propose",
    "prune",
    "rolls",
    "schedule",
    "sql",
    "study",
    "trace",
    "verify",
)


def test_these_are_the_commands() -> None:
    assert tuple(sorted(main.commands)) == COMMANDS


@pytest.mark.parametrize("name", COMMANDS)
def test_help_tells_purpose_options_an_example_and_every_exit_code(name: str, run: Run) -> None:
    result = run(name, "--help")
    assert result.exit_code == 0
    command = main.commands[name]
    assert command.help and command.help.split("\n")[0].endswith(".")
    assert f"ropewalk {name}" in result.stdout
    for line in exit_table():
        assert line in result.stdout
    for parameter in command.params:
        if isinstance(parameter, click.Option):
            assert parameter.help, f"{name} {parameter.name} is not explained"
            assert parameter.opts[0] in result.stdout


@pytest.mark.parametrize("name", COMMANDS)
def test_the_example_of_a_command_is_one_it_accepts(name: str) -> None:
    command = main.commands[name]
    words = shlex.split(command.example)  # type: ignore[attr-defined]
    assert words[:2] == ["ropewalk", name]
    command.make_context(name, words[2:])


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_takes_the_common_options(name: str) -> None:
    options = {option for parameter in main.commands[name].params for option in parameter.opts}
    assert {"--desk", "--raw", "--store", "--json"} <= options


def test_help_of_the_whole_lists_every_command_and_exit_code_in_full(run: Run) -> None:
    result = run("--help")
    assert result.exit_code == 0
    for name in COMMANDS:
        assert f"\n  {name} " in result.stdout
    assert "..." not in result.stdout.partition("\n")[2], "a summary is too long for a terminal of 80 columns"
    assert all(line in result.stdout for line in exit_table())


def test_every_exit_code_has_a_meaning() -> None:
    assert set(MEANINGS) == set(Exit)
    assert [int(code) for code in Exit] == [0, 1, 2, 3, 4, 5, 130, 143]


@pytest.mark.parametrize("arguments", [["--help"], ["--version"], *([name, "--help"] for name in COMMANDS)])
def test_help_loads_nothing_heavy(arguments: list[str], run_apart: RunApart) -> None:
    code = (
        "import sys, json\n"
        "from flows.commands import main\n"
        "try:\n    main(sys.argv[1:])\n"
        "except SystemExit:\n    pass\n"
        f"print(json.dumps([name for name in {HEAVY!r} if name in sys.modules]))\n"
    )
    done = run_apart(*arguments, code=code)
    assert json.loads(done.stdout.splitlines()[-1]) == []


def test_version_is_told(run: Run) -> None:
    result = run("--version")
    assert result.exit_code == 0
    assert result.stdout.startswith("ropewalk")
