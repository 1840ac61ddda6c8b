"""The plan of the house, held: which room may import which, and which library stands where."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

SRC = Path(__file__).parents[1] / "src" / "rigtally"

FLOOR = {
    "errors": 0,
    "files": 0,
    "quantities": 0,
    "records": 1,
    "forms": 1,
    "estimation": 2,
    "physics": 2,
    "tallying": 3,
    "rating": 3,
    "planning": 3,
    "reporting": 4,
    "cli": 5,
}
# library: the rooms (or modules) that may import it
ONLY_IN = {
    "matplotlib": ("reporting",),
    "jinja2": ("reporting",),
    "click": ("cli",),
    "rich": ("cli", "reporting"),
    "h5py": ("records",),
    "pandas": ("records",),
    "lmfit": ("estimation", "tallying"),
    "sympy": ("physics/formula",),
    "pint": ("quantities",),
}


def modules() -> list[Path]:
    return sorted(SRC.rglob("*.py"))


def room(path: Path) -> str:
    relative = path.relative_to(SRC)
    return relative.parts[0] if len(relative.parts) > 1 else relative.stem


def imported(path: Path) -> Iterator[tuple[str, bool]]:
    """Every module name that a file imports, and whether it does so when it is itself imported."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    inside: set[ast.AST] = set()
    for node in ast.walk(tree):
        lazy = isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef)
        typing_only = isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test)
        if lazy or typing_only:
            inside.update(ast.walk(node))
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node not in inside
        elif isinstance(node, ast.ImportFrom) and node.module:
            yield node.module, node not in inside


@pytest.mark.parametrize("path", modules(), ids=lambda p: str(p.relative_to(SRC)))
def test_a_room_imports_only_floors_below(path: Path) -> None:
    """A room imports itself and lower floors; rooms of one floor never import each other."""
    here = room(path)
    if here == "__init__":
        return
    for name, _ in imported(path):
        if not name.startswith("rigtally."):
            continue
        there = name.split(".")[1]
        allowed = there == here or FLOOR[there] < FLOOR[here]
        both_ground = FLOOR[there] == FLOOR[here] == 0
        assert allowed or both_ground, f"{path.relative_to(SRC)} imports {name}"


@pytest.mark.parametrize("path", modules(), ids=lambda p: str(p.relative_to(SRC)))
def test_a_library_stands_in_its_room_alone(path: Path) -> None:
    """matplotlib in reporting, click in cli, pandas and h5py in records, and so on."""
    place = path.relative_to(SRC).as_posix()
    for name, _ in imported(path):
        rooms = ONLY_IN.get(name.split(".")[0])
        if rooms:
            assert place.startswith(rooms), f"{place} imports {name}"


def test_no_circular_imports() -> None:
    """Modules import each other in one direction (imports at call time aside)."""
    graph: dict[str, set[str]] = {}
    for path in modules():
        name = ".".join(("rigtally", *path.relative_to(SRC).with_suffix("").parts)).removesuffix(".__init__")
        graph[name] = {
            other for other, at_import in imported(path) if at_import and other.startswith("rigtally")
        }
    done: set[str] = set()

    def visit(name: str, trail: tuple[str, ...]) -> None:
        assert name not in trail, " -> ".join((*trail, name))
        if name in done:
            return
        for other in graph.get(name, ()):
            visit(other, (*trail, name))
        done.add(name)

    for name in graph:
        visit(name, ())


def test_modules_stay_small() -> None:
    """One person can hold a module in the head: at most 400 lines."""
    long = {
        str(p.relative_to(SRC)): n for p in modules() if (n := len(p.read_text("utf-8").splitlines())) > 400
    }
    assert not long


def test_help_imports_no_heavy_library() -> None:
    """`rigtally --help` answers at once."""
    code = (
        "import sys\nfrom rigtally.cli.main import run\nrun(['--help'])\n"
        "heavy = {'numpy','scipy','pandas','matplotlib','lmfit','h5py','pint','sympy','jinja2','rich'}\n"
        "sys.exit(' '.join(sorted(heavy & set(sys.modules))) or 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    for command in ("inspect", "fit", "predict", "tally", "starter"):
        assert command in done.stdout


def test_import_of_the_package_is_lazy() -> None:
    """`import rigtally` imports nothing but itself, and names what it promises."""
    code = (
        "import sys, rigtally\n"
        "sys.exit('numpy' in sys.modules or not {'fit', 'read', 'tally'} <= set(dir(rigtally)))"
    )
    assert subprocess.run([sys.executable, "-c", code]).returncode == 0


def test_no_assert_in_source() -> None:
    """Nothing in the program depends on `assert` (it is gone under python -O)."""
    for path in modules():
        tree = ast.parse(path.read_text(encoding="utf-8"))
        assert not [n.lineno for n in ast.walk(tree) if isinstance(n, ast.Assert)], path


def test_top_level_holds_what_is_agreed() -> None:
    """Top level: the agreed files and folders, besides dotfiles and what git ignores."""
    root = SRC.parents[1]
    done = subprocess.run(["git", "ls-files"], cwd=root, capture_output=True, text=True)
    if done.returncode != 0:
        pytest.skip("not a git checkout")
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "src", "tests", "sample_data", "scripts",
               "benchmarks", "docs", "CHANGELOG.md", "LICENSE"}  # fmt: skip
    found = {name.split("/")[0] for name in done.stdout.splitlines()}
    assert {name for name in found if not name.startswith(".")} <= allowed
