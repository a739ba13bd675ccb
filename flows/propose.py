"""The command that proposes layouts for unknown files.

Belongs here: reading the named files, and how a proposal is shown. Does not belong here: what is proposed
(`contracts/proposal.py`). Heavy modules are imported inside the command.
"""

import os
import stat
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from flows.exits import Exit
from flows.render import aligned, complain, say, say_json
from flows.shell import Asked, command

if TYPE_CHECKING:
    from contracts.proposal import Proposal

_SAMPLE_COLUMNS = ("contract", "session", "open", "high", "low", "settle", "volume", "open_interest")


def _propose(asked: Asked, files: tuple[str, ...]) -> Exit:
    """Look at raw files and propose layouts for them.

    Prints a layout for each group of files that read alike: TOML with the evidence for each choice, then what
    could not be told and the first rows as it reads them, both as comments, so that the whole may be saved in
    the desk's layouts/ folder. Paths are taken below --raw, by default the folder that holds all the files.
    A file that nothing can be made of is named, the others are proposed for all the same, and the code is 2.
    """
    raw = _raw_folder(asked.raw, files)
    found, problems = _read_files(files, raw)
    from contracts.proposal import propose_layouts

    proposals = propose_layouts(found)
    made = [proposal for proposal in proposals if proposal.is_made]
    problems += [(path, why) for each in proposals if not each.is_made for path, why in _reasons(each)]
    if asked.as_json:
        say_json(
            {
                "raw": str(raw),
                "proposals": [_as_json(proposal) for proposal in made],
                "nothing_made_of": [{"file": path, "why": why} for path, why in problems],
            }
        )
    else:
        if made:
            say([f"# Paths are taken below {raw}"])
        for proposal in made:
            _show(proposal)
        for _, why in problems:
            complain(why)
    return Exit.REFUSED if problems else Exit.DONE


def _raw_folder(given: str | None, files: tuple[str, ...]) -> Path:
    """The folder --raw names, else the one that holds all the files."""
    if given is not None:
        return Path(os.path.abspath(given))
    return Path(os.path.commonpath([os.path.dirname(os.path.abspath(file)) for file in files]))


def _read_files(files: tuple[str, ...], raw: Path) -> tuple[list[tuple[str, bytes]], list[tuple[str, str]]]:
    """Paths below the raw folder with their bytes, and what could not be read with the reason."""
    found: dict[str, bytes] = {}
    problems: list[tuple[str, str]] = []
    for file in files:
        path = Path(os.path.abspath(file))
        if not path.is_relative_to(raw):
            problems.append((file, f"{file}: is not below {raw}; expected a file in the folder of raw files"))
            continue
        try:
            found[path.relative_to(raw).as_posix()] = _read_file(path)
        except OSError as error:
            problems.append((file, f"{file}: {error.strerror or error}; expected a file that can be read"))
        except ValueError as error:
            problems.append((file, f"{file}: {error}"))
    return sorted(found.items()), problems


def _read_file(path: Path) -> bytes:
    """The bytes of a regular file; raises OSError, or ValueError for one that is none or is too large."""
    from contracts.unpack import LARGEST_TEXT

    status = path.stat()
    if stat.S_ISDIR(status.st_mode):
        raise ValueError("is a folder; expected a file")
    if not stat.S_ISREG(status.st_mode):
        raise ValueError("is neither a regular file nor a folder; expected a file")
    if status.st_size > LARGEST_TEXT:
        raise ValueError(f"seen {status.st_size:,} bytes; expected at most {LARGEST_TEXT:,}")
    return path.read_bytes()


def _reasons(proposal: "Proposal") -> list[tuple[str, str]]:
    why = "; ".join(proposal.unsure)
    first, *others = proposal.files
    return [(first, why), *((path, f"{path}: as {first}, with which it reads alike") for path in others)]


def _as_json(proposal: "Proposal") -> dict[str, Any]:
    return {
        "name": proposal.name,
        "files": list(proposal.files),
        "layout": proposal.layout_toml,
        "evidence": [vars(item) for item in proposal.evidence],
        "unsure": list(proposal.unsure),
        "sample": [vars(row) for row in proposal.sample],
    }


def _show(proposal: "Proposal") -> None:
    say(["", f"# layouts/{proposal.name}.toml", *proposal.layout_toml.rstrip("\n").split("\n"), ""])
    if proposal.unsure:
        say(["# What could not be told for certain:", *(f"# - {doubt}" for doubt in proposal.unsure), "#"])
    rows = [[getattr(row, column) for column in _SAMPLE_COLUMNS] for row in proposal.sample]
    say(["# First rows as it reads them:", *(f"# {line}".rstrip() for line in aligned(_SAMPLE_COLUMNS, rows))])


propose = command(click.Group(), "propose", "ropewalk propose downloads/NWHT_2025_03.csv --raw downloads")(
    click.argument("files", nargs=-1, required=True, metavar="FILE...")(_propose)
)
