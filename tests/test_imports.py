"""The walk through the rooms is one-way, and importing the package stays light.

What is enforced, over every import statement in the package wherever it stands (also inside functions):

* a room imports itself and earlier rooms only; `panels` and `cli` are two faces and do not import each other, except
  that the command line starts the workbench's server through `schurbench.panels.serve`;
* `kernels` imports nothing of the project but `kernels`: compiled steps know no records and make no decisions;
* `policy` proposes and never touches H: it imports no kernel at all;
* one exception runs backwards: `Run.factors()` imports `schurbench.factors` when called, never at load time.
"""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import schurbench

PACKAGE = Path(schurbench.__file__).parent

#: The rooms in the order of the walk; rooms that stand in one tuple belong together and may import one another.
ROOMS = [
    ("errors", "measures", "matching", "saving"),
    ("intake",),
    ("prepare",),
    ("kernels",),
    ("policy",),
    ("iteration", "journal", "settings"),
    ("diagnosis",),
    ("comparison",),
    ("factors",),
    ("panels",),
    ("cli",),
]
RANK = {room: rank for rank, together in enumerate(ROOMS) for room in together}

#: (importing room, imported module): allowed only inside a function, because the name is needed at call time.
LATE = {("journal", "schurbench.factors")}

HEAVY = ["numba", "llvmlite", "ipywidgets", "bqplot", "pandas", "scipy", "h5py", "zarr", "IPython", "jupyterlab"]


def imports_of(path: Path) -> Iterator[tuple[str, bool, int]]:
    """Every module of the project that a file imports: (module, inside a function or not, line)."""
    tree = ast.parse(path.read_text(encoding="utf-8"))

    def walk(node: ast.AST, inside: bool) -> Iterator[tuple[str, bool, int]]:
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.If) and ast.unparse(child.test) in ("TYPE_CHECKING", "typing.TYPE_CHECKING"):
                continue  # names for the type checker; nothing is imported
            if isinstance(child, ast.Import):
                yield from ((alias.name, inside, child.lineno) for alias in child.names)
            elif isinstance(child, ast.ImportFrom):
                assert child.level == 0, f"{path.name}:{child.lineno}: relative import"
                yield child.module or "", inside, child.lineno
                # `from schurbench import intake` imports the room as well.
                yield from ((f"{child.module}.{alias.name}", inside, child.lineno) for alias in child.names)
            deeper = inside or isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
            yield from walk(child, deeper)

    yield from ((name, inside, line) for name, inside, line in walk(tree, False) if name.split(".")[0] == "schurbench")


def room_of(module: str) -> str | None:
    parts = module.split(".")
    return parts[1] if len(parts) > 1 and parts[1] in RANK else None


FILES = sorted(path for path in PACKAGE.rglob("*.py") if path.parent != PACKAGE or path.stem in RANK)


@pytest.mark.parametrize("path", FILES, ids=[str(path.relative_to(PACKAGE)) for path in FILES])
def test_rooms_import_only_earlier_rooms(path: Path) -> None:
    here = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
    assert here in RANK, f"{here} is no room of the walk; give it a place in ROOMS"
    for module, inside, line in imports_of(path):
        there = room_of(module)
        if there is None:
            continue
        where = f"{path.relative_to(PACKAGE)}:{line} imports {module}"
        if here == "kernels":
            assert there == "kernels", f"{where}: kernels know nothing else of the project"
        elif here == "policy":
            assert there != "kernels", f"{where}: policy never touches H"
            assert RANK[there] <= RANK[here], f"{where}: a later room"
        elif here == "cli" and there == "panels":
            assert module in ("schurbench.panels", "schurbench.panels.serve"), f"{where}: two faces side by side"
            assert inside, f"{where}: widgets are imported when they are opened"
        elif RANK[there] > RANK[here]:
            late = any(here == room and module.startswith(target) for room, target in LATE)
            assert late, f"{where}: a later room"
            assert inside, f"{where}: only when called"


def test_every_room_exists() -> None:
    found = {path.relative_to(PACKAGE).parts[0].removesuffix(".py") for path in FILES}
    assert found == set(RANK)


@pytest.mark.parametrize(
    "statement",
    ["import schurbench", "import schurbench; dir(schurbench)", "import schurbench.cli, schurbench.cli.options"],
)
def test_import_is_light(statement: str) -> None:
    code = f"{statement}\nimport sys\nprint(*sorted(set(sys.modules) & set({HEAVY!r})))"
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert result.stdout.split() == []


def test_help_imports_no_numerics() -> None:
    code = (
        "import sys, schurbench.cli\n"
        "assert schurbench.cli.main(['--help']) == 0\n"
        "assert schurbench.cli.main(['run', '--help']) == 0\n"
        f"print(*sorted(set(sys.modules) & set({[*HEAVY, 'numpy']!r})), file=sys.stderr)"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert result.stderr.split() == []


def test_every_public_name_is_where_the_map_says() -> None:
    for name in schurbench.__all__:
        assert getattr(schurbench, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = schurbench.nothing
