"""The walls of the house: who may import whom, held by reading every import of every file.

Data flows one way: scenario, lowering and intake, run, record, table, game, findings, report. Each wall below
is also shown a planted breach, so that none of them can pass by looking at nothing.
"""

from __future__ import annotations

import ast
import subprocess
from collections.abc import Callable, Iterator, Mapping
from functools import cache
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
TOP = {"pyproject.toml", "README.md", "DEVELOPERS.md", "sim", "analysis", "tests", "scenarios", "results"}
Sources = Mapping[str, str]  # module -> its text


@cache
def sources() -> Sources:
    """Every module of `sim` and `analysis`, packages under their own names."""
    files = [file for room in ("sim", "analysis") for file in (ROOT / room).rglob("*.py")]
    return {module_of(file.relative_to(ROOT)): file.read_text(encoding="utf-8") for file in files}


def module_of(path: Path) -> str:
    parts = path.with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imports(module: str, text: str) -> Iterator[str]:
    """Every name that a module imports when it runs, wherever in the file: `from a.b import c` is `a.b.c`."""
    for node in _running(ast.parse(text)):
        if isinstance(node, ast.Import):
            yield from (one.name for one in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{module} imports relatively; name the whole module"
            yield from (f"{node.module}.{one.name}" for one in node.names)


def _running(node: ast.AST) -> Iterator[ast.AST]:
    """Every node but those that only a type checker reads."""
    yield node
    for child in ast.iter_child_nodes(node):
        if not (isinstance(child, ast.If) and getattr(child.test, "id", "") == "TYPE_CHECKING"):
            yield from _running(child)


def within(name: str, *rooms: str) -> bool:
    return any(name == room or name.startswith(room + ".") for room in rooms)


# ---- the walls: each yields the breaches that it finds ----


def forbidden(who: Callable[[str], bool], *what: str) -> Callable[[Sources], Iterator[str]]:
    """Modules for which `who` holds import nothing of `what`."""

    def breaches(texts: Sources) -> Iterator[str]:
        for module, text in texts.items():
            if who(module):
                yield from (
                    f"{module} imports {name}" for name in imports(module, text) if within(name, *what)
                )

    return breaches


def all_but(*rooms: str) -> Callable[[str], bool]:
    return lambda module: not within(module, *rooms)


def inside(*rooms: str) -> Callable[[str], bool]:
    return lambda module: within(module, *rooms)


def private_names_of_sim(texts: Sources) -> Iterator[str]:
    """`analysis` uses only the public names of `sim`."""
    for module, text in texts.items():
        if not within(module, "analysis"):
            continue
        for name in imports(module, text):
            if within(name, "sim") and any(part.startswith("_") for part in name.split(".")):
                yield f"{module} imports {name}"
        yield from (f"{module} uses {used}" for used in private_attributes(text))


def private_attributes(text: str) -> Iterator[str]:
    """`thing._name` where `thing` was imported from `sim`."""
    tree = ast.parse(text)
    known = {
        one.asname or one.name
        for node in ast.walk(tree)
        if isinstance(node, ast.ImportFrom) and within(node.module or "", "sim")
        for one in node.names
    }
    for node in ast.walk(tree):
        hidden = (
            isinstance(node, ast.Attribute) and node.attr.startswith("_") and not node.attr.startswith("__")
        )
        if hidden and getattr(node.value, "id", None) in known:
            yield f"{node.value.id}.{node.attr}"


def randomness_outside_the_intake(texts: Sources) -> Iterator[str]:
    """In `sim` only the intake draws."""
    for module, text in texts.items():
        if not within(module, "sim") or module == "sim.intake":
            continue
        drawn = [name for name in imports(module, text) if within(name, "random", "secrets", "numpy.random")]
        drawn += [
            f"{node.value.id}.random"
            for node in ast.walk(ast.parse(text))
            if isinstance(node, ast.Attribute) and node.attr == "random" and isinstance(node.value, ast.Name)
        ]
        yield from (f"{module} uses {name}" for name in drawn)


def cycles(texts: Sources) -> Iterator[str]:
    """No module imports itself by way of others."""
    graph = {module: sorted(edges(module, text, texts)) for module, text in texts.items()}
    finished: set[str] = set()

    def visit(module: str, trail: list[str]) -> Iterator[str]:
        if module in trail:
            yield " -> ".join([*trail[trail.index(module) :], module])
        elif module not in finished:
            for other in graph[module]:
                yield from visit(other, [*trail, module])
            finished.add(module)

    for module in graph:
        yield from visit(module, [])


def edges(module: str, text: str, texts: Sources) -> set[str]:
    """The modules of the house that a module imports; `from a import b` is `a.b` where that is a module."""
    found = {name if name in texts else name.rpartition(".")[0] for name in imports(module, text)}
    return {name for name in found if name in texts and name != module}


ENGINE_SIDE = ("sim.lowering", "sim.intake", "sim.reference", "sim.compiled", "sim.replicate")
DRAWING = ("seaborn", "matplotlib")
NUMBERS = ("numpy", "scipy", "pandas")
WALLS: dict[str, tuple[Callable[[Sources], Iterator[str]], tuple[str, str]]] = {
    # name: the wall, and a planted breach as (module, text)
    "sim never imports analysis": (
        forbidden(inside("sim"), "analysis"),
        ("sim.record", "def f():\n    from analysis import goals"),
    ),
    "only the reference engine imports simpy": (
        forbidden(all_but("sim.reference"), "simpy"),
        ("sim.workers", "import simpy.core"),
    ),
    "only the figures draw": (
        forbidden(lambda module: not module.startswith("analysis.figures"), *DRAWING),
        ("analysis.command.game", "from matplotlib import pyplot"),
    ),
    "numba stands in the compiled engine and the chain, and where both keep their kernels": (
        forbidden(all_but("sim.compiled", "sim.kernel_cache", "analysis.chain"), "numba"),
        ("sim.record", "from numba import njit"),
    ),
    "the chain reads the scenario, never lowering or an engine": (
        forbidden(inside("analysis.chain"), *ENGINE_SIDE),
        ("analysis.chain.exact", "from sim import lowering"),
    ),
    "the chain knows nothing of measures from runs": (
        forbidden(inside("analysis.chain"), "sim.record", "analysis.measures", "analysis.simulation"),
        ("analysis.chain.exact", "from analysis.measures import UNIT_MEASURES"),
    ),
    "the reference engine never imports the compiled one": (
        forbidden(inside("sim.reference"), "sim.compiled"),
        ("sim.reference", "from sim.compiled.kernel import run"),
    ),
    "the compiled engine never imports the reference": (
        forbidden(inside("sim.compiled"), "sim.reference"),
        ("sim.compiled.kernel", "import sim.reference"),
    ),
    "a scenario knows nothing of how it is run": (
        forbidden(inside("sim.scenario"), *ENGINE_SIDE, "sim.record", "sim.workers"),
        ("sim.scenario.load", "from sim.lowering import Rules"),
    ),
    "commands compute nothing": (
        forbidden(inside("analysis.command"), *NUMBERS),
        ("analysis.command.simulate", "def f():\n    import numpy as np"),
    ),
    "nothing but commands imports commands": (
        forbidden(all_but("analysis.command"), "analysis.command"),
        ("analysis.games", "from analysis.command.output import put_json"),
    ),
    "analysis uses public names of sim": (
        private_names_of_sim,
        ("analysis.measures", "from sim import record\nrecord._secret()"),
    ),
    "only the intake draws": (
        randomness_outside_the_intake,
        ("sim.reference", "import numpy as np\nx = np.random.default_rng()"),
    ),
    "no module imports itself by way of others": (
        cycles,
        ("sim.errors", "from sim.scenario import Scenario"),
    ),
}


@pytest.mark.parametrize("wall", WALLS)
def test_the_wall_stands(wall):
    assert list(WALLS[wall][0](sources())) == []


@pytest.mark.parametrize("wall", WALLS)
def test_the_wall_catches_a_planted_breach(wall):
    check, (module, text) = WALLS[wall]
    assert module in sources(), "the planted breach must stand in a room that exists"
    assert list(check({**sources(), module: text}))


def test_a_private_name_in_an_import_is_caught_too():
    planted = {"analysis.goals": "from sim.intake import _draw_group"}
    assert list(private_names_of_sim(planted)) == ["analysis.goals imports sim.intake._draw_group"]


def test_every_import_of_a_file_is_read():
    text = "import a.b as c\nfrom d import e, f\ndef g():\n    if True:\n        from h.i import j\n"
    assert list(imports("m", text)) == ["a.b", "d.e", "d.f", "h.i.j"]


def test_the_whole_house_is_read():
    assert {"sim.reference", "sim.scenario", "analysis.chain", "analysis.command.entry"} <= set(sources())


def test_nothing_else_stands_at_the_top():
    """The top level of the repository, dot-files aside."""
    listed = subprocess.run(["git", "-C", str(ROOT), "ls-files"], capture_output=True, text=True, check=False)
    if listed.returncode != 0 or not listed.stdout:
        pytest.skip("not a git checkout, so nothing tells the repository's own files from others")
    top = {line.partition("/")[0] for line in listed.stdout.splitlines()}
    assert {name for name in top if not name.startswith(".")} <= TOP
    assert {"pyproject.toml", "sim", "analysis", "tests"} <= top
