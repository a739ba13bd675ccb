"""The house keeps its direction: flows -> catalog -> contracts, and top to bottom within contracts."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
ROOMS = ("contracts", "catalog", "flows")
# The way the data goes; a file may import those before it.
ORDER = (
    "errors", "columns", "tables", "lined_up", "deliveries", "declared", "markets", "layouts", "notation", "sessions",
    "calendar_table", "due", "unpack", "intake", "proposal_marks", "proposal_columns", "proposal_text",
    "proposal_paths", "proposal_trial", "proposal_choices", "proposal", "arrivals", "panel", "quality",
    "findings", "checks", "repairs", "rolls", "checks.rolled", "splice", "trend", "impact", "compared", "evidence",
    "written", "build",
)  # fmt: skip


def imports_of(file: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{file}: relative import"
            found.add(node.module or "")
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return found


def files_of(room: str) -> list[Path]:
    return sorted((ROOT / room).rglob("*.py"))


def offences(room: str, forbidden: tuple[str, ...]) -> list[str]:
    return [
        f"{file.relative_to(ROOT)}: {name}"
        for file in files_of(room)
        for name in sorted(imports_of(file))
        if name.split(".")[0] in forbidden
    ]


@pytest.mark.parametrize(
    ("room", "forbidden"),
    [
        ("contracts", ("catalog", "flows", "prefect", "duckdb", "tests", "sample_raw")),
        ("catalog", ("flows", "prefect", "tests", "sample_raw")),
        ("flows", ("duckdb", "tests", "sample_raw")),
    ],
)
def test_room_imports_only_downward(room: str, forbidden: tuple[str, ...]) -> None:
    assert offences(room, forbidden) == []


def place_of(module: str) -> int | None:
    """Position of a module of contracts in the order; checks other than those named stand at `checks`."""
    parts = module.split(".")
    if parts[0] != "contracts" or len(parts) < 2:
        return None
    for name in (".".join(parts[1:3]), parts[1]):
        if name in ORDER:
            return ORDER.index(name)
    raise AssertionError(f"{module} has no place in the order")


def test_contracts_read_top_to_bottom() -> None:
    wrong = []
    for file in files_of("contracts"):
        module = ".".join(file.relative_to(ROOT).with_suffix("").parts)
        if file.name == "__init__.py":
            continue
        own = place_of(module)
        for name in imports_of(file):
            if name.startswith("contracts.") and name.count(".") >= 1:
                other = place_of(name)
                if own is not None and other is not None and other > own:
                    wrong.append(f"{module} imports {name}")
    assert wrong == []


def test_contracts_write_no_file() -> None:
    """No call that opens a path for writing, in the pure room."""
    wrong = []
    for file in files_of("contracts"):
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call):
                name = getattr(node.func, "attr", getattr(node.func, "id", ""))
                if name in ("write_text", "write_bytes", "mkdir", "unlink", "rename", "replace_file") or name == "open":
                    owner = getattr(getattr(node.func, "value", None), "id", "")
                    if not (name == "open" and owner == "archive"):
                        wrong.append(f"{file.relative_to(ROOT)}:{node.lineno}: {name}")
    assert wrong == []


@pytest.mark.parametrize("room", ROOMS)
def test_modules_stay_short_and_say_what_belongs_in_them(room: str) -> None:
    wrong = []
    for file in files_of(room):
        text = file.read_text(encoding="utf-8")
        doc = " ".join((ast.get_docstring(ast.parse(text)) or "").split())
        if text.count("\n") > 500:
            wrong.append(f"{file.relative_to(ROOT)}: {text.count(chr(10))} lines")
        if "Does not belong" not in doc:
            wrong.append(f"{file.relative_to(ROOT)}: its docstring does not say what belongs in it and what does not")
    assert wrong == []


def test_top_level_holds_the_agreed_names() -> None:
    agreed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "flows", "contracts", "tests", "catalog", "sample_raw"}
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")}
    made_here = {"published", "build", "dist", "__pycache__"} | {name for name in found if name.endswith(".egg-info")}
    assert found - made_here <= agreed
