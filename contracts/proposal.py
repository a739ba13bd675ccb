"""Unknown raw files -> proposed layouts, each with its evidence, its doubts and the first rows it reads.

Belongs here: which files read alike, and the layout as a whole. Does not belong here: any single choice
(`proposal_choices.py`), printing (`flows/`). The parts, in the order of the data: `proposal_marks.py`,
`proposal_columns.py`, `proposal_text.py`, `proposal_paths.py`, `proposal_trial.py`, `proposal_choices.py`.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass

from contracts.errors import DeskError, IntakeError
from contracts.layouts import parse_layout
from contracts.proposal_choices import (
    Choices,
    Evidence,
    choose_columns,
    choose_delivery_columns,
    choose_strays,
    choose_text,
    choose_values,
    formats_of,
    has_parts,
    marks_of,
    span_of,
)
from contracts.proposal_marks import Marks
from contracts.proposal_paths import PathReading, Span, path_shape, read_paths
from contracts.proposal_text import LOOKED_AT, Look, look
from contracts.proposal_trial import SampleRow, Trial, comment_text, counted, toml_text, try_layout
from contracts.unpack import list_members, unpack

__all__ = ["Evidence", "Proposal", "SampleRow", "propose_layouts"]

_NEEDED = frozenset({"market", "year", "month"})
_FILES_NAMED = 5
_TROUBLES_TOLD = 10
_COLUMN_WIDTH = 112


@dataclass(frozen=True)
class Proposal:
    """A layout for files that read alike.

    `layout_toml` is empty where nothing can be made of the files; `unsure` then says why.
    """

    name: str
    files: tuple[str, ...]
    layout_toml: str
    evidence: tuple[Evidence, ...]
    unsure: tuple[str, ...]
    sample: tuple[SampleRow, ...]

    @property
    def is_made(self) -> bool:
        """Whether there is a layout."""
        return bool(self.layout_toml)


@dataclass
class _Group:
    """Files that read alike, and which formats and marks all of them allow."""

    looks: list[Look]
    formats: frozenset[str]
    marks: frozenset[Marks]
    has_parts: bool


@dataclass
class _Draft:
    """A layout all but for its expression on the path."""

    looks: list[Look]
    choices: Choices
    reading: PathReading
    window: int | None


def propose_layouts(files: Sequence[tuple[str, bytes]]) -> list[Proposal]:
    """Propose a layout for each group of files that read alike, in order of their first path.

    `files` are paths below the raw folder, with the bytes as they lie there; `.gz`, `.zst` and the members of a `.zip`
    are unpacked. What nothing can be made of comes as a proposal without a layout; no content raises.
    """
    looks: list[Look] = []
    made: list[Proposal] = []
    for path, data in sorted(files):
        try:
            members = list(list_members(data, path)) if path.lower().endswith(".zip") else [("", data)]
        except IntakeError as error:
            made.append(_refusal((path,), str(error)))
            continue
        if not members:
            made.append(_refusal((path,), f"{path}: an archive without members"))
        for member, inner in members:
            whole = f"{path}/{member}" if member else path
            try:
                looks.append(look(whole, unpack(inner, whole)))
            except IntakeError as error:
                made.append(_refusal((whole,), str(error)))
    drafts: list[_Draft] = []
    for group in _group(looks):
        for outcome in _draft(group):
            if isinstance(outcome, Proposal):
                made.append(outcome)
            else:
                drafts.append(outcome)
    names: set[str] = set()
    for draft in drafts:
        others = [each.path for other in drafts if other is not draft for each in other.looks]
        made.append(_finish(draft, others, names))
    return sorted(made, key=lambda proposal: proposal.files[0])


def _refusal(paths: Sequence[str], why: str) -> Proposal:
    return Proposal("", tuple(paths), "", (), (why,), ())


def _group(looks: Sequence[Look]) -> list[_Group]:
    """Files of one header whose dates, marks and encodings do not contradict each other."""
    groups: dict[tuple[object, ...], list[_Group]] = {}
    for each in looks:
        key = (each.delimiter, each.header, each.skip_lines)
        formats, marks, parts = formats_of(each), marks_of(each), has_parts(each)
        for group in groups.setdefault(key, []):
            if (
                group.formats & formats
                and group.marks & marks
                and group.has_parts == parts
                and _go_together(group.looks, each)
            ):
                group.looks.append(each)
                group.formats &= formats
                group.marks &= marks
                break
        else:
            groups[key].append(_Group([each], formats, marks, parts))
    found = [group for several in groups.values() for group in several]
    for group in found:
        # Where values alone tell columns apart, the longest file tells best.
        columns = max(group.looks, key=lambda each: len(each.rows)).columns
        for each in group.looks:
            each.columns = columns
    return found


def _go_together(looks: Sequence[Look], each: Look) -> bool:
    encodings = {other.encoding for other in (*looks, each) if not other.is_plain}
    is_wide = {other.encoding.startswith("utf-16") for other in (*looks, each)}
    comments = {other.comment for other in (*looks, each) if other.comment}
    return len(encodings) <= 1 and len(is_wide) == 1 and len(comments) <= 1


def _draft(group: _Group) -> list[_Draft | Proposal]:
    """Every choice for a group; parted where one expression cannot match all paths."""
    looks = group.looks
    paths = [each.path for each in looks]
    if "settle" not in looks[0].columns.places:
        heads = ", ".join(looks[0].header)[:200]
        also = "".join(f"; {doubt}" for doubt in looks[0].columns.unsure if doubt.startswith("settle"))
        return [_refusal(paths, f"{paths[0]}: no column with the settlement found ({heads}); expected one{also}")]
    whole = Choices()
    choose_values(whole, looks, group.formats, group.marks)
    date_format = str(whole.keys["date_format"])
    choose_columns(whole, looks)
    known, _ = choose_delivery_columns(whole, looks, date_format)
    needed = _NEEDED - known
    parts: dict[tuple[str, ...], list[Look]] = {}
    for each in looks:
        parts.setdefault(path_shape(each.path), []).append(each)
    if not needed and len(parts) > 1:
        readings = [_read(part, date_format, needed) for part in parts.values()]
        expressions = sorted({reading.expression for reading in readings if isinstance(reading, PathReading)})
        if expressions:
            says = f"{counted(len(expressions), 'form')} of paths; columns say market and delivery month"
            joined = PathReading(f"(?:{'|'.join(expressions)})", frozenset(), says)
            return [_choose(looks, group, joined)]
    outcomes: list[_Draft | Proposal] = []
    for part in parts.values():
        reading = _read(part, date_format, needed)
        if isinstance(reading, str):
            outcomes.append(_refusal([each.path for each in part], reading))
        else:
            outcomes.append(_choose(part, group, reading))
    return outcomes


def _read(looks: Sequence[Look], date_format: str, needed: frozenset[str]) -> PathReading | str:
    spans: list[tuple[str, Span]] = []
    for each in looks:
        span = span_of(each, date_format)
        if span is None:
            return f"{each.path}: no session reads as {date_format}"
        spans.append((each.path, span))
    return read_paths([path for path, _ in spans], [span for _, span in spans], needed)


def _choose(looks: list[Look], group: _Group, reading: PathReading) -> _Draft:
    choices = Choices()
    choose_text(choices, looks)
    choose_values(choices, looks, group.formats, group.marks)
    choose_strays(choices, looks)
    choose_columns(choices, looks)
    _, window = choose_delivery_columns(choices, looks, str(choices.keys["date_format"]))
    choices.unsure += reading.unsure
    torn = [each.path for each in looks if each.is_torn]
    if torn:
        number = counted(len(torn), "such file")
        choices.unsure.append(f"{torn[0]} ends without a line end, so its last row is held out ({number})")
    cut = [each.path for each in looks if each.is_cut]
    if cut:
        size, number = f"{LOOKED_AT // 1024 // 1024} MiB", counted(len(cut), "such file")
        choices.unsure.append(f"{cut[0]} is large; only its first {size} were looked at ({number})")
    return _Draft(looks, choices, reading, reading.year_window or window)


def _finish(draft: _Draft, others: Sequence[str], names: set[str]) -> Proposal:
    """Write the layout, load it, read the files by it."""
    choices, paths = draft.choices, tuple(each.path for each in draft.looks)
    expression = draft.reading.expression
    evidence = draft.reading.evidence
    if any(re.fullmatch(expression, path) for path in others):
        listed = "|".join(re.escape(path) for path in paths)
        expression = rf"(?=(?:{listed})\Z){expression}"
        choices.unsure.append("files: other files of such names are written otherwise; these are listed one by one")
    choices.evidence.insert(0, Evidence("files", expression, evidence))
    choices.keys = {"files": expression, **choices.keys}
    if draft.window is not None:
        choices.choose("year_window", draft.window, "two-digit years fall in the hundred years from it")
    name = _name(draft, names)
    try:
        layout = parse_layout(_write(choices), f"layouts/{name}.toml")
    except DeskError as error:
        return _refusal(paths, f"{paths[0]}: the layout that its values suggest does not hold: {error}")
    trial = try_layout(layout, name, choices.notation, draft.looks)
    if not trial.read:
        reason = trial.trouble[0] if trial.trouble else "it holds no row"
        return _refusal(paths, f"{paths[0]}: the layout that its values suggest reads no row of it: {reason}")
    names.add(name)
    unsure = [*choices.unsure, *_troubles(trial)]
    _note_unused(choices, draft.looks)
    total = counted(trial.read + trial.refused, "row")
    says = f"{trial.read:,} of {total} read, in {counted(len(paths), 'file')}"
    choices.evidence.append(Evidence("rows", f"{trial.read:,}", says))
    head = [*_head(paths, trial, choices), ""]
    return Proposal(
        name, paths, "\n".join(head) + _write(choices), tuple(choices.evidence), tuple(unsure), tuple(trial.sample)
    )


def _troubles(trial: Trial) -> list[str]:
    told = trial.trouble[:_TROUBLES_TOLD]
    left = len(trial.trouble) - len(told)
    return [*told, f"... and {left:,} more files with refused rows"] if left else told


def _note_unused(choices: Choices, looks: Sequence[Look]) -> None:
    unused = [name.strip() for name in looks[0].header if name.strip() not in choices.columns.values()]
    if unused:
        choices.evidence.append(Evidence("columns", ", ".join(unused), "columns left aside"))


def _name(draft: _Draft, taken: set[str]) -> str:
    """A plain name for the layout's file: the market where there is one, else the folder or file."""
    match = re.search(r"\(\?P<market>([A-Z0-9]+)\)", draft.reading.expression)
    path = draft.looks[0].path
    folder = next((part for part in reversed(path.split("/")[:-1]) if not part.isdecimal()), "")
    stem = re.sub(r"\d+", "", path.rpartition("/")[2].partition(".")[0])
    for text in (match[1] if match else "", folder, stem, "proposed"):
        name = re.sub(r"[^a-z0-9]+", "_", text.lower()).strip("_")[:30]
        if name:
            break
    number, unique = 2, name
    while unique in taken:
        unique, number = f"{name}_{number}", number + 1
    return unique


def _head(paths: Sequence[str], trial: Trial, choices: Choices) -> list[str]:
    named, left = ", ".join(paths[:_FILES_NAMED]), len(paths) - _FILES_NAMED
    total = counted(trial.read + trial.refused, "row")
    lines = _comment(f"Proposed for {named}" + (f" and {left:,} more." if left > 0 else "."))
    lines += _comment(f"Reads {trial.read:,} of {total} of {', '.join(trial.markets[:10])}.")
    if choices.notation != "decimal":
        lines.append(f'# The market\'s own file has to say price_notation = "{choices.notation}".')
    return lines


def _write(choices: Choices) -> str:
    """The layout as TOML, each key under its evidence."""
    told = {item.key: item for item in choices.evidence}
    lines: list[str] = []
    for key, value in choices.keys.items():
        if key in told:
            lines += _comment(told[key].text)
        lines.append(f"{key} = {toml_text(value)}")
    by_default = [item for item in choices.evidence if item.key in ("encoding", "decimal", "thousands", "missing")]
    for item in by_default:
        if item.key not in choices.keys:
            lines += _comment(f"{item.key} is left as it is by default: {item.text}")
    lines += ["", "[columns]"]
    for key, name in choices.columns.items():
        why = told.get(f"columns.{key}")
        if why is not None and why.text:
            lines += _comment(why.text)
        lines.append(f"{key} = {toml_text(name)}")
    if "columns" in told:
        lines += _comment(f"columns left aside: {told['columns'].choice}")
    return "\n".join(lines) + "\n"


def _comment(text: str) -> list[str]:
    """A comment, broken at blanks where it is long."""
    lines, line = [], "#"
    for word in comment_text(text).split(" "):
        if len(line) + 1 + len(word) > _COLUMN_WIDTH and line != "#":
            lines.append(line)
            line = "#"
        line += f" {word}"
    return [*lines, line]
