"""Who may know whom: floors of the house, no cycles, cheap doors, no LAPACK, files opened in few places.

The table is the design's own: imports go down only; workshops import each other only along listed
arrows; voices compute nothing. Every check is tried on a planted fault as well.
"""

from __future__ import annotations

import ast
import os
import subprocess
import sys
from collections.abc import Iterator, Mapping
from functools import cache
from pathlib import Path

import pytest

import designer

HOUSE = Path(designer.__file__).parent

# lowest first; a module may import its own floor (workshops: along ARROWS only) and those named in MAY
FLOORS: dict[str, set[str]] = {
    "vocabulary": {"arrays", "errors", "expressions", "findings", "outcomes", "records", "units"},
    "paper": {"checkdocument", "documents", "planfiles", "planrows", "schema", "studyfile", "templates"},
    "workshops": {
        "beliefs",
        "continuous",
        "dimensions",
        "evidence",
        "freeorder",
        "gates",
        "halflife",
        "information",
        "likelihood",
        "plainlaw",
        "reactions",
        "region",
        "repair",
        "rival",
        "signals",
        "trajectories",
        "weights",
    },
    "wiring": {
        "allowed",
        "budget",
        "cautions",
        "checking",
        "checkup",
        "courses",
        "explaining",
        "laws",
        "layout",
        "limits",
        "loading",
        "locally",
        "measuring",
        "noting",
        "oddities",
        "ordering",
        "planning",
        "purposes",
        "rating",
        "readback",
        "rounding",
        "search",
        "setting",
        "stated",
        "steepest",
        "usual",
        "virtual",
    },
    "voices": {
        "checksheet",
        "cli",
        "expectations",
        "figures",
        "frames",
        "planfigure",
        "reasons",
        "runsheet",
        "sampletable",
        "schema_reference",
        "wording",
    },
    "door": {"__init__"},
}
MAY = {
    "vocabulary": {"vocabulary"},
    "paper": {"vocabulary", "paper"},
    "workshops": {"vocabulary"},
    "wiring": {"vocabulary", "paper", "workshops", "wiring"},
    "voices": {"vocabulary", "paper", "voices"},
    "door": set(),
}
# workshops that know another: laws of a file, candidates -> trajectories -> signals -> evidence, criteria
ARROWS = {
    ("halflife", "plainlaw"),
    ("freeorder", "plainlaw"),
    ("signals", "beliefs"),
    ("signals", "trajectories"),
    ("likelihood", "signals"),
    ("evidence", "likelihood"),
    ("evidence", "signals"),
    ("repair", "evidence"),
    ("repair", "likelihood"),
    ("repair", "signals"),
    ("gates", "evidence"),
    ("gates", "likelihood"),
    ("gates", "repair"),
    ("weights", "information"),
    ("continuous", "information"),
    ("continuous", "region"),
    ("continuous", "weights"),
    ("rival", "region"),
}
OPEN_FILES = {"cli", "planfiles", "studyfile", "templates"}
HEAVY = ("jax", "jaxlib", "pymc", "arviz", "pandas", "pint", "matplotlib", "scipy", "diffrax")

Graph = Mapping[str, set[str]]


@cache
def sources() -> list[tuple[str, ast.Module]]:
    """(module of the flat package, its syntax); rooms of a folder count as the folder."""
    found = []
    for path in sorted(HOUSE.rglob("*.py")):
        name = path.relative_to(HOUSE).with_suffix("").parts[0]
        found.append((name, ast.parse(path.read_text(encoding="utf-8"))))
    return found


def imported(tree: ast.Module) -> set[str]:
    """Modules of the package that a module imports, anywhere but for the type checker."""
    found: set[str] = set()
    for node in _really_run(tree):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.split(".")[0] == "designer":
            parts = node.module.split(".")
            found |= {parts[1]} if len(parts) > 1 else {alias.name for alias in node.names}
        if isinstance(node, ast.Import):
            names = [alias.name.split(".") for alias in node.names]
            found |= {parts[1] for parts in names if parts[0] == "designer" and len(parts) > 1}
    return found


def _really_run(tree: ast.AST) -> Iterator[ast.AST]:
    for node in ast.iter_child_nodes(tree):
        if isinstance(node, ast.If) and isinstance(node.test, ast.Name) and node.test.id == "TYPE_CHECKING":
            continue
        yield node
        yield from _really_run(node)


@cache
def graph() -> dict[str, set[str]]:
    found: dict[str, set[str]] = {}
    for name, tree in sources():
        found.setdefault(name, set()).update(imported(tree) - {name})
    return found


def floor(module: str) -> str:
    return next((name for name, rooms in FLOORS.items() if module in rooms), "nowhere")


def violations(known: Graph) -> list[str]:
    """Imports that go up, or along no arrow."""
    found = []
    for module, others in known.items():
        for other in sorted(others):
            allowed = floor(other) in MAY.get(floor(module), set()) or (module, other) in ARROWS
            if module != "cli" and not allowed:
                found.append(f"{module} ({floor(module)}) imports {other} ({floor(other)})")
    return found


def cycle(known: Graph) -> list[str]:
    """One cycle of imports; empty where there is none."""
    done: set[str] = set()

    def visit(module: str, path: list[str]) -> list[str]:
        if module in path:
            return [*path[path.index(module) :], module]
        if module in done:
            return []
        for other in sorted(known.get(module, ())):
            found = visit(other, [*path, module])
            if found:
                return found
        done.add(module)
        return []

    return next((found for module in known if (found := visit(module, []))), [])


def opens(tree: ast.Module) -> list[str]:
    """Calls that open, write or make files."""
    names = {"open", "read_text", "write_text", "read_bytes", "write_bytes", "mkdir", "unlink", "mkdtemp"}
    found = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            called = node.func
            name = called.attr if isinstance(called, ast.Attribute) else getattr(called, "id", "")
            found += [name] if name in names else []
    return found


def lapack(tree: ast.Module) -> list[str]:
    """Uses of jax's own linear algebra, which hangs for ever on few cores."""
    found = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Attribute) and node.attr == "linalg":
            base = ast.unparse(node.value)
            found += [base] if base == "jnp" or base.startswith("jax") else []
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("jax"):
            found += [a.name for a in node.names if "linalg" in f"{node.module}.{a.name}"]
        if isinstance(node, ast.Import):
            found += [a.name for a in node.names if a.name.startswith("jax") and "linalg" in a.name]
    return found


def test_every_module_has_a_floor() -> None:
    rooms = [room for level in FLOORS.values() for room in level]
    assert sorted(graph()) == sorted(rooms)


def test_imports_go_down_only() -> None:
    assert violations(graph()) == []
    used = {(module, other) for module, others in graph().items() for other in others}
    assert used >= ARROWS  # no arrow that nobody walks


def test_no_cycle() -> None:
    assert cycle(graph()) == []


def test_the_table_notices_faults() -> None:
    planted = {
        "runsheet": {"planning"},
        "units": {"signals"},
        "beliefs": {"evidence"},
        "gates": {"studyfile"},
    }
    assert len(violations(planted)) == 4
    assert cycle({"a": {"b"}, "b": {"c"}, "c": {"a"}}) == ["a", "b", "c", "a"]
    uses = (
        "from jax.scipy import linalg",
        "import jax.numpy.linalg",
        "jnp.linalg.inv(a)",
        "jax.scipy.linalg.lu",
    )
    assert all(len(lapack(ast.parse(text))) == 1 for text in uses)
    assert lapack(ast.parse("np.linalg.inv(a)")) == []
    assert opens(ast.parse("open(p)\np.write_text('x')")) == ["open", "write_text"]


def test_no_linear_algebra_of_jax() -> None:
    assert {name: uses for name, tree in sources() if (uses := lapack(tree))} == {}


def test_only_paper_and_the_command_line_open_files() -> None:
    assert {name for name, tree in sources() if opens(tree)} <= OPEN_FILES


def loaded_by(code: str) -> set[str]:
    """Heavy packages loaded once ``code`` has run in a fresh interpreter."""
    report = f"\nprint('LOADED', *[m for m in {HEAVY!r} if m in sys.modules])"
    environment = {**os.environ, "PYTHONPATH": str(HOUSE.parent)}
    run = subprocess.run(
        [sys.executable, "-c", "import sys\n" + code + report],
        capture_output=True,
        text=True,
        timeout=120,
        env=environment,
        check=True,
    )
    return set(run.stdout.rsplit("LOADED", 1)[1].split())


def test_cheap_doors() -> None:
    assert loaded_by("import designer") == set()
    command = (
        "sys.argv = ['aliquot', '--help']\nfrom designer.cli import main\n"
        "try:\n    main()\nexcept SystemExit:\n    pass"
    )
    assert loaded_by(command) == set()
    assert "pint" in loaded_by("from designer import units; units.read('5 mM')")  # the detector works


def test_the_door_lists_what_it_shows() -> None:
    assert list(designer.__all__) == sorted(designer.__all__)
    assert dir(designer) == designer.__all__
    for name in designer.__all__:
        assert getattr(designer, name) is not None
    with pytest.raises(AttributeError, match="has no attribute 'plann'"):
        designer.plann  # noqa: B018
