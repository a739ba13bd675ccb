"""SQL is literal text with bound parameters: a value that is built into a statement fails here."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
RUNS_SQL = frozenset(
    {"execute", "executemany", "sql", "query", "run_query", "run_rule", "extract_statements", "from_query"}
)

# Where text is made into SQL all the same, by file and function, with the reason. A file's name cannot be bound
# in a view or in ATTACH; each such place quotes it.
ALLOWED = {
    ("catalog/catalog_file.py", "build_catalog"): "attaches the new catalog by its quoted path",
    ("catalog/catalog_file.py", "lay_views"): "views and macros from the project's own .sql files, paths quoted",
    ("catalog/catalog_file.py", "_lay_derived"): "the same of the views derived from them",
    ("catalog/query.py", "open_catalog"): "attaches the catalog and sets the one folder it may read, paths quoted",
    ("catalog/query.py", "run_query"): "looks what kind of statement a person typed",
    ("catalog/query.py", "_run_typed"): "runs the query a person typed, first explained within query()",
    ("flows/commands.py", "sql"): "hands the query a person typed to run_query",
    ("catalog/verify.py", "run_rule"): "a soundness rule from the project's own .sql file",
    ("catalog/verify.py", "_count_rows"): "counts the rows of each of the project's own tables",
}


def is_literal(node: ast.expr, constants: set[str]) -> bool:
    """A text written out, or the name of a constant of the module that is one."""
    if isinstance(node, ast.Constant):
        return isinstance(node.value, str)
    if isinstance(node, ast.Name):
        return node.id in constants
    if isinstance(node, ast.JoinedStr):
        return all(
            isinstance(part, ast.Constant)
            or (
                isinstance(part, ast.FormattedValue) and isinstance(part.value, ast.Name) and part.value.id in constants
            )
            for part in node.values
        )
    return False


def literal_constants(tree: ast.Module) -> set[str]:
    """Names of a module that are assigned once, at its top, a text written out."""
    constants: set[str] = set()
    for node in tree.body:
        is_one = isinstance(node, ast.Assign) and len(node.targets) == 1 and isinstance(node.targets[0], ast.Name)
        if is_one and is_literal(node.value, constants):
            constants.add(node.targets[0].id)
    return constants


def built_statements(source: str, file: str) -> list[tuple[str, str, int]]:
    """File, function and line of every statement that is not literal text."""
    tree = ast.parse(source)
    constants = literal_constants(tree)
    found = []

    def walk(node: ast.AST, function: str) -> None:
        for child in ast.iter_child_nodes(node):
            inside = child.name if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef) else function
            if isinstance(child, ast.Call):
                called = child.func.attr if isinstance(child.func, ast.Attribute) else getattr(child.func, "id", "")
                if called in RUNS_SQL and child.args:
                    is_second = called in ("run_query", "run_rule") and len(child.args) > 1
                    if not is_literal(child.args[int(is_second)], constants):
                        found.append((file, inside, child.lineno))
            walk(child, inside)

    walk(tree, "")
    return found


def files() -> list[Path]:
    return sorted(path for room in ("catalog", "flows", "contracts") for path in (ROOT / room).rglob("*.py"))


def statements_of(path: Path) -> list[tuple[str, str, int]]:
    return built_statements(path.read_text(encoding="utf-8"), path.relative_to(ROOT).as_posix())


def test_no_statement_is_built_outside_the_places_that_say_why() -> None:
    found = [place for path in files() for place in statements_of(path) if place[:2] not in ALLOWED]
    assert found == []


def test_every_place_that_says_why_still_needs_to() -> None:
    used = {place[:2] for path in files() for place in statements_of(path)}
    assert set(ALLOWED) - used == set()


@pytest.mark.parametrize(
    "call",
    [
        "connection.execute(f\"select * from series where market = '{market}'\")",
        'connection.execute("select * from series where market = \'" + market + "\'")',
        'connection.sql("select * from %s" % market)',
        'connection.execute("select * from {}".format(market))',
        "run_query(connection, text)",
        "duckdb.sql(made)",
    ],
)
def test_a_built_statement_is_found(call: str) -> None:
    assert built_statements(f"def f(connection, market, text, made):\n    {call}\n", "x.py") == [("x.py", "f", 2)]


@pytest.mark.parametrize(
    "call",
    [
        'connection.execute("select * from series where market = ?", [market])',
        "run_query(connection, ASK, [market])",
        'run_query(connection, "select 1")',
    ],
)
def test_literal_text_with_bound_values_is_not(call: str) -> None:
    assert built_statements(f'ASK = "select 1"\ndef f(connection, market):\n    {call}\n', "x.py") == []
