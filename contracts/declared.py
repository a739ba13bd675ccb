"""From TOML text to a checked declaration, every mistake at once with file, key and line.

Belongs here: what reading any declaration has in common. Does not belong here: what a market, layout or
desk may say.
"""

import re
import tomllib
from typing import Any, TypeVar, get_origin

from pydantic import BaseModel, ConfigDict, ValidationError

from contracts.errors import DeskError, Mistake

Model = TypeVar("Model", bound=BaseModel)

# A code becomes a file name and part of a path, so it holds nothing that a path could mean something by.
CODE = r"[A-Z0-9]{1,12}"
PLAIN_NAME = r"[a-z0-9_]{1,40}"


class Declared(BaseModel):
    """Base of every declaration: unknown keys are mistakes, values are never coerced, nothing changes later."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)


def read_toml(text: str, file: str) -> tuple[dict[str, Any], list[Mistake]]:
    """Parse TOML; a table declared twice is reported and the rest is read all the same.

    Returns the data (empty where the text is no TOML at all) and the mistakes met on the way.
    """
    mistakes: list[Mistake] = []
    for _ in range(100):
        try:
            return tomllib.loads(text), mistakes
        except tomllib.TOMLDecodeError as error:
            where = re.search(r"at line (\d+)", str(error))
            line = int(where[1]) if where else None
            seen = re.sub(r" \(at .*\)$", "", str(error))
            twice = re.match(r"Cannot declare \((.*)\) twice", seen)
            if not twice or line is None:
                mistakes.append(Mistake(file, "(file)", seen, "valid TOML", line))
                return {}, mistakes
            key = ".".join(re.findall(r"'([^']*)'", twice[1]))
            mistakes.append(Mistake(file, key, "the same name twice", "each name once", line))
            text = _without_table(text, line)
    return {}, mistakes


def _without_table(text: str, line: int) -> str:
    """The text with the table that starts on `line` blanked, so that line numbers stay."""
    lines = text.split("\n")
    lines[line - 1] = ""
    for index in range(line, len(lines)):
        if lines[index].lstrip().startswith("["):
            break
        lines[index] = ""
    return "\n".join(lines)


def line_of(text: str, location: tuple[Any, ...]) -> int | None:
    """Physical line on which a key of a TOML text stands, as near as its names allow; None where it is absent."""
    lines = text.split("\n")
    names = [part for part in location if isinstance(part, str)]
    found: int | None = None
    start = 0
    for depth, name in enumerate(names):
        table = re.compile(r"\s*\[+\s*" + r"\s*\.\s*".join(re.escape(n) for n in names[: depth + 1]) + r"\s*\]+")
        entry = re.compile(rf"(?:^|.*[{{,\s])[\"']?{re.escape(name)}[\"']?\s*=")
        occurrence = 0
        following = location[list(location).index(name) + 1 :] if name in location else ()
        if following and isinstance(following[0], int):
            occurrence = following[0]
        matches = [i for i in range(start, len(lines)) if table.match(lines[i])]
        if not matches:
            matches = [i for i in range(start, len(lines)) if entry.match(lines[i])][:1]
        if not matches:
            continue
        start = matches[min(occurrence, len(matches) - 1)]
        found = start + 1
    return found


def validate(model: type[Model], data: dict[str, Any], text: str, file: str) -> tuple[Model | None, list[Mistake]]:
    """Check data against a model; returns the declaration, or None and all its mistakes."""
    try:
        return model.model_validate(data), []
    except ValidationError as error:
        return None, [_mistake(detail, data, text, file, model) for detail in error.errors()]


def read_declaration(model: type[Model], text: str, file: str) -> tuple[Model | None, dict[str, Any], list[Mistake]]:
    """Read one file against a model; returns the declaration or None, the data, and every mistake so far."""
    data, mistakes = read_toml(text, file)
    if mistakes and not data:
        return None, {}, mistakes
    made, more = validate(model, data, text, file)
    return made, data, mistakes + more


def insist(made: Model | None, mistakes: list[Mistake]) -> Model:
    """The declaration; raises DeskError where it could not be made or has mistakes."""
    if made is None or mistakes:
        raise DeskError(mistakes)
    return made


def _mistake(detail: Any, data: dict[str, Any], text: str, file: str, model: type[BaseModel]) -> Mistake:
    location = _without_made_index(detail["loc"], data)
    key = "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in location).lstrip(".")
    kind, context = detail["type"], detail.get("ctx", {})
    if kind == "extra_forbidden":
        parent: Any = model
        seen, expected = "an unknown key", _known_keys(parent, location)
    elif kind == "missing":
        seen, expected = "nothing", "this key"
    elif kind == "value_error":
        said = str(context.get("error", detail["msg"]))
        head, _, tail = said.partition("; expected ")
        seen, expected = head.removeprefix("seen "), tail or "a value that makes sense"
    else:
        seen, expected = _shorten(detail.get("input")), detail["msg"].removeprefix("Input should be ")
    return Mistake(file, key or "(file)", seen, expected, line_of(text, location))


def _without_made_index(location: tuple[Any, ...], data: Any) -> tuple[Any, ...]:
    """The location as the file has it: a table that stands alone was read as a list of one."""
    kept: list[Any] = []
    for part in location:
        if isinstance(part, int) and isinstance(data, dict):
            continue
        kept.append(part)
        try:
            data = data[part]
        except (KeyError, IndexError, TypeError):
            data = None
    return tuple(kept)


def _known_keys(model: Any, location: tuple[Any, ...]) -> str:
    """The keys that stand beside an unknown one, where the model says so."""
    named = False
    for part in location[:-1]:
        if isinstance(part, int) or named or not isinstance(model, type) or not issubclass(model, BaseModel):
            named = False
            continue
        field = model.model_fields.get(str(part))
        named = field is not None and get_origin(field.annotation) is dict
        model = _inner_model(field.annotation) if field else None
    if not (isinstance(model, type) and issubclass(model, BaseModel)):
        return "a known key"
    names = [field.alias or name for name, field in model.model_fields.items()]
    return "one of " + ", ".join(names)


def _inner_model(annotation: Any) -> Any:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for argument in getattr(annotation, "__args__", ()):
        inner = _inner_model(argument)
        if inner is not None:
            return inner
    return None


def _shorten(value: Any) -> str:
    shown = repr(value)
    return shown if len(shown) <= 60 else shown[:57] + "..."
