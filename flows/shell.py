"""What every command has in common: its options, its help, and how its errors become exit codes.

Belongs here: the frame around a command. Does not belong here: what a command does (`commands.py`), which
error has which code (`exits.py`). Only light modules are imported here, so that --help answers at once.
"""

import functools
import os
import sys
import traceback
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click

from contracts.errors import DeskError, RopewalkError
from flows.exits import Exit, Terminated, code_of, code_of_any, exit_table, is_short_of_memory, sigterm_raises
from flows.render import complain, say, say_json
from flows.settings import Where, find_desk, find_where

_STOPPED = (Exit.INTERRUPTED, Exit.TERMINATED)


@dataclass(frozen=True)
class Asked:
    """The options every command has, as given."""

    desk: str | None
    raw: str | None
    store: str | None
    as_json: bool

    def desk_folder(self) -> Path:
        """The desk they mean."""
        return find_desk(self.desk)

    def where(self) -> Where:
        """The folders they mean; raises DeskError where desk.toml has to be asked and cannot be read."""
        return find_where(self.desk, self.raw, self.store)


class Ropewalk(click.Group):
    """The group of all commands; it alone ends the process."""

    def main(self, args: Sequence[str] | None = None, *rest: Any, **extra: Any) -> Any:
        """Run one command and exit with its code, whatever happens in it."""
        for stream in (sys.stdout, sys.stderr):
            if hasattr(stream, "reconfigure"):
                # A terminal without UTF-8 shows an escape instead of ending the command.
                stream.reconfigure(errors="backslashreplace")
        extra["standalone_mode"] = False
        with sigterm_raises():
            code = _run(functools.partial(super().main, args, *rest, **extra))
        _leave(code)

    def format_epilog(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """The exit codes, below the list of commands."""
        write_exits(formatter)


class Command(click.Command):
    """A command whose help ends with an example and the exit codes."""

    example = ""

    def format_epilog(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """The example and the exit codes."""
        with formatter.section("Example"):
            formatter.write(f"  {self.example}\n")
        write_exits(formatter)


def write_exits(formatter: click.HelpFormatter) -> None:
    """Add the table of exit codes to a help page."""
    with formatter.section("Exit codes"):
        formatter.write("".join(f"  {line}\n" for line in exit_table()))


def command(group: click.Group, name: str, example: str) -> Callable[[Callable[..., Exit]], click.Command]:
    """Make a function a command of the group, with the common options.

    The function is called with `Asked` first; it returns the exit code. What it raises on purpose is shown
    and turned into one.
    """

    def make(function: Callable[..., Exit]) -> click.Command:
        @functools.wraps(function)
        def call(desk: str | None, raw: str | None, store: str | None, as_json: bool, **rest: Any) -> Exit:
            asked = Asked(desk, raw, store, as_json)
            try:
                return function(asked, **rest)
            except RopewalkError as error:
                return _tell(error, as_json)

        for option in reversed(_COMMON):
            call = option(call)
        made = click.command(name, cls=Command)(call)
        assert isinstance(made, Command)
        made.example = example
        group.add_command(made)
        return made

    return make


_COMMON = (
    click.option("--desk", metavar="DIR", help="Folder with desk.toml.  [default: the sample desk]"),
    click.option("--raw", metavar="DIR", help="Folder of raw files.  [default: the one desk.toml names]"),
    click.option(
        "--store",
        metavar="DIR",
        help="Folder to publish in and to read from.  [default: ./published for the sample desk, "
        "else the one desk.toml names]",
    ),
    click.option("--json", "as_json", is_flag=True, help="One JSON document on standard output."),
)


def _tell(error: RopewalkError, as_json: bool) -> Exit:
    """Show an error that was raised on purpose; returns its exit code."""
    code = code_of(error)
    if not as_json:
        complain(str(error))
    elif isinstance(error, DeskError):
        say_json({"mistakes": [vars(mistake) for mistake in error.mistakes]})
    else:
        say_json({"error": str(error), "exit_code": int(code)})
    return code


def _run(run: Callable[[], Any]) -> int:
    try:
        result = run()
        return int(result) if result is not None else 0
    except click.exceptions.Exit as end:
        return end.exit_code
    except click.ClickException as error:
        error.show()
        return Exit.REFUSED
    except (KeyboardInterrupt, click.Abort):
        return _tell_stopped(Exit.INTERRUPTED)
    except Terminated:
        return _tell_stopped(Exit.TERMINATED)
    except SystemExit as end:
        return end.code if isinstance(end.code, int) else Exit.BUG
    except Exception as error:
        if code_of_any(error) in _STOPPED:
            return _tell_stopped(code_of_any(error))
        if is_short_of_memory(error):
            complain("out of memory; nothing was published, the last snapshot stands; give it more, or fewer --jobs")
            return Exit.NOT_PUBLISHED
        if code_of_any(error) is Exit.NOT_PUBLISHED:
            complain(f"{error}; nothing was published, the last snapshot stands")
            return Exit.NOT_PUBLISHED
        complain(f"{traceback.format_exc()}this is a bug in ropewalk; the last snapshot stands")
        return Exit.BUG


def _tell_stopped(code: Exit) -> Exit:
    complain(f"stopped by {'SIGTERM' if code is Exit.TERMINATED else 'Ctrl-C'}; the last snapshot stands")
    return code


def _leave(code: int) -> None:
    watched = sys.modules.get("flows.watched")
    if watched is not None and watched.is_lost():
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(code)
    sys.exit(code)


def show_version(ctx: click.Context, _option: click.Parameter, wanted: bool) -> None:
    """Print the version and end."""
    if not wanted or ctx.resilient_parsing:
        return
    from importlib.metadata import PackageNotFoundError, version

    try:
        say([f"ropewalk {version('ropewalk')}"])
    except PackageNotFoundError:
        say(["ropewalk, not installed: run from its source folder"])
    ctx.exit()
