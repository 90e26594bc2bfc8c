"""The house keeps its rooms: who may import whom, what each module shows, what lies on the top level."""

import ast
import importlib
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "simulator"
ROOMS = (
    "errors", "files", "case", "grid", "dispatch", "horizon", "prices", "causes", "reasons",
    "network_results", "results", "audit", "studies", "report", "cli",
)  # fmt: skip
TOP_LEVEL = {
    "README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "simulator", "profiles", "tests",
    "outputs", ".ci", ".gitignore",
}  # fmt: skip
MODULES = sorted(PACKAGE.rglob("*.py"))
BORDERS = {
    "pyomo": lambda path: path.parts[0] == "dispatch",
    "highspy": lambda path: path == Path("dispatch/solver.py"),
    "typer": lambda path: path == Path("cli.py"),
}
"""Libraries that only one room or module imports."""


def imports(text: str, package: str) -> Iterator[str]:
    """Yield the dotted name of everything a module imports, wherever in it."""
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            up = package.split(".")[: len(package.split(".")) - node.level + 1]
            base = ".".join([*(up if node.level else []), *([node.module] if node.module else [])])
            yield from (f"{base}.{alias.name}" for alias in node.names)


def imports_of(path: Path) -> list[str]:
    package = ".".join(path.relative_to(ROOT).parent.parts)
    return list(imports(path.read_text(), package))


def room_of(path: Path) -> str:
    return path.relative_to(PACKAGE).with_suffix("").parts[0]


def wrong_way(room: str, names: list[str]) -> list[str]:
    """What of these imports comes from a room that is not above."""
    above = ROOMS[: ROOMS.index(room) + 1]
    inside = [name for name in names if name.split(".")[0] == "simulator"]
    return [name for name in inside if name != "simulator" and name.split(".")[1] not in above]


def identify(path: Path) -> str:
    return str(path.relative_to(ROOT))


@pytest.mark.parametrize("path", MODULES, ids=identify)
def test_rooms_import_only_from_rooms_above_them(path):
    if path == PACKAGE / "__init__.py":
        return
    assert room_of(path) in ROOMS
    assert wrong_way(room_of(path), imports_of(path)) == []


@pytest.mark.parametrize("path", MODULES, ids=identify)
def test_a_library_behind_a_border_is_imported_there_only(path):
    for library, allowed in BORDERS.items():
        if any(name.split(".")[0] == library for name in imports_of(path)):
            assert allowed(path.relative_to(PACKAGE)), library


def test_each_border_has_someone_behind_it():
    found = {name.split(".")[0] for path in MODULES for name in imports_of(path)}
    assert set(BORDERS) <= found


def test_an_import_the_wrong_way_is_seen():
    text = "from ..dispatch import solver\nimport simulator.errors\nfrom . import network\n"
    names = list(imports(text, "simulator.grid"))
    assert wrong_way("grid", names) == ["simulator.dispatch.solver"]


@pytest.mark.parametrize("path", MODULES, ids=identify)
def test_every_module_says_what_it_shows_and_has_it(path):
    name = ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")
    module = importlib.import_module(name)
    assert module.__doc__
    if path.name == "__init__.py" and not any(imports_of(path)):
        return  # a package that shows nothing itself
    for shown in module.__all__:
        assert hasattr(module, shown), shown


@pytest.mark.parametrize("path", MODULES, ids=identify)
def test_modules_stay_under_600_lines(path):
    assert len(path.read_text().splitlines()) < 600


def test_only_what_belongs_there_lies_on_the_top_level():
    listed = subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False
    )
    if listed.returncode:
        pytest.skip("not a git checkout")
    assert {line.split("/")[0] for line in listed.stdout.splitlines()} <= TOP_LEVEL
