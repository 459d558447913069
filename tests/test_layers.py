"""Imports point one way: a package sees only the rows above its own."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "service" / "pinlight"

# Lowest layer first; a package may import any of the rows above its own, and itself.
ROWS = [
    {"errors", "version", "resources"},
    {"sky", "photometry"},
    {"diameters", "fringes", "arrays"},
    {"ranking"},
    {"planning", "assessment"},
    {"catalogue"},
    {"faces"},
]
# Libraries that only some packages may know.
ONLY_IN = {
    "sqlalchemy": {"catalogue"},
    "alembic": {"catalogue"},
    "flask": {"faces"},
    "werkzeug": {"faces"},
    "click": {"faces"},
    "rich": {"faces"},
    "waitress": {"faces"},
}
MODULES = sorted(PACKAGE.rglob("*.py"))


def imports_of(path: Path) -> set[str]:
    """Dotted names of everything a module imports, wherever in it."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path} imports relatively"
            module = node.module or ""
            found |= {f"{module}.{alias.name}" for alias in node.names} if module == "pinlight" else {module}
    return found


def package_of(path: Path) -> str:
    parts = path.relative_to(PACKAGE).parts
    return parts[0].removesuffix(".py")


def row_of(package: str) -> int:
    return next(index for index, row in enumerate(ROWS) if package in row)


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_a_module_imports_only_from_rows_above_its_own(path):
    package = package_of(path)
    if package == "__init__":
        return
    for name in imports_of(path):
        if name.startswith("pinlight."):
            other = name.split(".")[1]
            assert other == package or row_of(other) < row_of(package), f"{path} imports {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_only_the_catalogue_knows_the_database_and_only_faces_know_http(path):
    for name in imports_of(path):
        allowed = ONLY_IN.get(name.split(".")[0])
        assert allowed is None or package_of(path) in allowed, f"{path} imports {name}"


def test_the_check_would_notice_a_wrong_arrow(tmp_path):
    wrong = tmp_path / "wrong.py"
    wrong.write_text("from pinlight.faces.library import rank\n", encoding="utf-8")
    assert imports_of(wrong) == {"pinlight.faces.library"}
    wrong.write_text("from pinlight import faces\n", encoding="utf-8")
    assert imports_of(wrong) == {"pinlight.faces"}
    assert not row_of("faces") < row_of("sky")
