"""Floors and doors: who may import whom, what stays out of the number wing, public names, and wording of notices."""

from __future__ import annotations

import ast
import graphlib
import json
import re
import string
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import pytest
from oracle import CASES, Case

import change_assess as ca
from change_assess.errors import Notice
from change_assess.reporting import texts

PACKAGE = Path(ca.__file__).parent

FLOORS = {
    "errors": 0,
    "files": 1,
    "legend": 1,
    "engine": 1,
    "measures": 2,
    "csvfile": 2,
    "tables": 2,
    "samples": 2,
    "vectors": 2,
    "study": 2,
    "maps": 3,
    "sample": 4,
    "labels": 4,
    "results": 4,
    "reporting": 5,
    "scenario": 6,
    "interpreters": 6,
    "first_study": 6,
    "walkthrough": 6,
    "cli": 7,
}
"""Floor of each room; a room imports only from floors below."""

SIBLINGS = {
    ("tables", "vectors"),
    ("samples", "tables"),
    ("tables", "csvfile"),
    ("walkthrough", "scenario"),
    ("walkthrough", "interpreters"),
    ("interpreters", "scenario"),
}
"""The only imports between rooms of one floor, from the first to the second."""

DOORS = {
    "rasterio": {"maps.grid", "maps.cells", "maps.strata", "maps.tally"},
    "geopandas": {"vectors"},
    "pyogrio": {"vectors"},
    "pyarrow": {"csvfile", "samples"},
    "pyproj": {"maps.area", "sample.draw"},
    "matplotlib": {"reporting.figures"},
    "rich": {"reporting.terminal", "cli.run"},
    "typer": {"cli", "cli.estimate", "cli.labels", "cli.maps", "cli.options", "cli.setup"},
}
"""The only modules that import each heavy or outward library."""

MAP_WING = {"maps", "sample", "scenario", "interpreters", "walkthrough", "cli", "first_study"}
"""Rooms that touch pixels, themselves or through others."""


@dataclass(frozen=True)
class Import:
    """One imported module, and whether the import stands inside a function."""

    name: str
    lazy: bool


def walk(node: ast.AST, lazy: bool = False) -> Iterator[Import]:
    """Every import below a node, those for type checks only excepted."""
    for child in ast.iter_child_nodes(node):
        if isinstance(child, ast.If) and "TYPE_CHECKING" in ast.unparse(child.test):
            continue
        if isinstance(child, ast.Import):
            yield from (Import(alias.name, lazy) for alias in child.names)
        elif isinstance(child, ast.ImportFrom):
            assert child.level == 0, "imports name the package"
            module = child.module or ""
            yield from (Import(f"{module}.{alias.name}", lazy) for alias in child.names)
        yield from walk(child, lazy or isinstance(child, ast.FunctionDef))


@cache
def trees() -> dict[str, ast.Module]:
    """Syntax tree of each module, by its name without the package's: "" for the package, "maps.grid", …"""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE).with_suffix("").parts
        name = ".".join(parts[:-1] if parts[-1] == "__init__" else parts)
        found[name] = ast.parse(path.read_text(encoding="utf-8"))
    return found


def own_imports(module: str) -> dict[str, bool]:
    """Modules of the package that a module imports, and whether only inside functions."""
    found: dict[str, bool] = {}
    for item in walk(trees()[module]):
        if not item.name.startswith("change_assess."):
            continue
        parts = item.name.split(".")[1:]
        name = next((n for n in (".".join(parts[:i]) for i in range(len(parts), 0, -1)) if n in trees()), "")
        if name:
            found[name] = found.get(name, True) and item.lazy
    return found


def room(module: str) -> str:
    return module.partition(".")[0]


FREE = {"", "__main__"}
"""The package itself, which loads names when they are used, and the entry point."""


def test_every_module_has_a_floor():
    """Each module of the package belongs to a room with a floor, and no floor is listed for nothing."""
    assert {room(m) for m in trees() if m not in FREE} == set(FLOORS)


@pytest.mark.parametrize("module", [m for m in trees() if m not in FREE])
def test_a_module_imports_only_from_floors_below(module):
    """Imports flow one way, those inside functions too; siblings are listed."""
    mine = room(module)
    for other in own_imports(module):
        theirs = room(other)
        allowed = mine == theirs or FLOORS[theirs] < FLOORS[mine] or (mine, theirs) in SIBLINGS
        assert allowed, f"{module} imports {other}"


def test_siblings_are_listed_for_a_reason():
    """Each listed pair of siblings is of one floor, is really imported, and only one way."""
    used = {(room(m), room(o)) for m in trees() if m not in FREE for o in own_imports(m)}
    for pair in SIBLINGS:
        assert FLOORS[pair[0]] == FLOORS[pair[1]]
        assert pair in used
        assert pair[::-1] not in used


def test_no_module_imports_itself_in_a_circle():
    """Inside the rooms too, no chain of imports comes back to where it began."""
    graph = {m: set(own_imports(m)) - {m} for m in trees() if m not in FREE}
    list(graphlib.TopologicalSorter(graph).static_order())


@pytest.mark.parametrize("library", DOORS)
def test_each_library_has_its_door(library):
    """Only the listed modules import a library that touches pixels, layers, figures, or the terminal."""
    found = {m for m, tree in trees().items() for item in walk(tree) if item.name.split(".")[0] == library}
    assert found == DOORS[library]


def test_only_the_grid_opens_rasters():
    """Beside maps/grid.py, modules take the type of a window from rasterio and nothing else."""
    for module in DOORS["rasterio"] - {"maps.grid"}:
        names = {i.name for i in walk(trees()[module]) if i.name.split(".")[0] == "rasterio"}
        assert names == {"rasterio.windows.Window"}, module


def test_vector_libraries_are_imported_when_called():
    """The vector door imports its libraries, and the hall imports the vector door, inside the call only."""
    for item in walk(trees()["vectors"]):
        assert item.lazy or item.name.split(".")[0] not in ("geopandas", "pyogrio")
    assert own_imports("tables")["vectors"] is True


def test_the_number_wing_does_not_lean_on_the_map_wing():
    """No room of the number wing imports one of the map wing, at any depth."""
    reached = {r for r in FLOORS if r not in MAP_WING}
    for module in trees():
        if room(module) in reached and module not in FREE:
            assert not {room(o) for o in own_imports(module)} & MAP_WING, module


# -- in a process of its own ----------------------------------------------------------------------------------


def in_a_new_process(code: str, *arguments: object) -> str:
    """Run code in a fresh interpreter with the tests' folder importable; give what it printed."""
    command = [sys.executable, "-c", code, *map(str, arguments)]
    done = subprocess.run(command, capture_output=True, text=True, check=False, cwd=Path(__file__).parent)
    assert done.returncode == 0, done.stderr
    return done.stdout


BLOCKED = ("rasterio", "geopandas", "pyogrio", "matplotlib", "pyproj", "rich", "typer", "shapely", "fiona", "dask")

WITHOUT_PIXELS = f"""
import json, sys
sys.path.insert(0, "")

class Blocker:
    def find_spec(self, name, path=None, target=None):
        if name.split(".")[0] in {BLOCKED!r}:
            raise ImportError(f"{{name}} is blocked")

sys.meta_path.insert(0, Blocker())
import change_assess as ca
import change_assess.engine.estimate, change_assess.legend, change_assess.measures, change_assess.tables
import change_assess.labels.reconcile, change_assess.reporting.texts, change_assess.results.estimate
import change_assess.study
from oracle import CASES, Case

found = []
for name in sys.argv[2:]:
    case = Case(next(c for c in CASES if c.name == name))
    for item in case.expected:
        estimate = case.look_up(item["quantity"], item["class"], item["context"])
        found.append([float(estimate.value), float(estimate.se)])
    case.result().save(sys.argv[1])
assert not {{m.split(".")[0] for m in sys.modules}} & set({BLOCKED!r})
print(json.dumps(found))
"""


def test_the_number_wing_works_without_the_map_wing_s_libraries(tmp_path):
    """Tables, engine, measures and results estimate and save with rasterio, geopandas and matplotlib blocked."""
    names = ["02-four-strata-fpc", "33-strat-post-cells", "42-two-stage-unequal-fpc", "57-three-dates-srs"]
    found = json.loads(in_a_new_process(WITHOUT_PIXELS, tmp_path, *names))
    cases = [Case(next(c for c in CASES if c.name == name)) for name in names]
    wanted = [(item["estimate"], item["se"]) for case in cases for item in case.expected]
    assert len(found) == len(wanted) > 300
    for (value, se), (right, right_se) in zip(found, wanted, strict=True):
        for ours, theirs in ((value, right), (se, right_se)):
            assert theirs is None or ours == pytest.approx(theirs, rel=1e-8, abs=1e-6)
    assert (tmp_path / "estimates.csv").exists()


@pytest.mark.parametrize("module", ["change_assess", "change_assess.cli", "change_assess.study"])
def test_importing_costs_nothing(module):
    """The package, and the command line until a command runs, load no number, map or figure library."""
    libraries = {"numpy", "scipy", "pyarrow", *BLOCKED} - ({"typer", "rich"} if module.endswith("cli") else set())
    if not module.endswith("study"):
        libraries |= {"pandas"}
    else:
        libraries -= {"numpy", "pyarrow"}
    code = f"import json, sys, {module}; print(json.dumps(sorted({{m.split('.')[0] for m in sys.modules}})))"
    assert not set(json.loads(in_a_new_process(code))) & libraries


# -- public names ---------------------------------------------------------------------------------------------


def test_public_names_are_sorted_complete_and_load():
    """`__all__` lists each public name once, in order, and every one of them can be used."""
    assert list(ca.__all__) == sorted(set(ca.__all__))
    assert set(ca.__all__) == {name for names in ca._HOMES.values() for name in names}
    assert set(ca.__all__) <= set(dir(ca))
    code = "from change_assess import *\nimport change_assess as ca\n"
    loaded = in_a_new_process(code + "print(all(callable(globals()[name]) for name in ca.__all__))")
    assert loaded == "True\n"
    with pytest.raises(AttributeError, match="has no attribute 'nonsense'"):
        _ = ca.nonsense


def test_public_names_for_type_checkers_are_the_same():
    """What type checkers see imported is what is loaded on first use."""
    (block,) = [n for n in trees()[""].body if isinstance(n, ast.If)]
    seen = {(n.module, alias.name) for n in block.body if isinstance(n, ast.ImportFrom) for alias in n.names}
    assert seen == {(module, name) for module, names in ca._HOMES.items() for name in names}


def test_public_names_are_not_hidden_by_modules_of_the_same_name():
    """A public function stays that function when the module it lives in was imported first, as the command does."""
    code = "import importlib, change_assess as ca\n"
    code += "for module in ca._HOMES: importlib.import_module(module)\n"
    code += "print([name for name in ca.__all__ if not callable(getattr(ca, name))])"
    assert in_a_new_process(code) == "[]\n"


def test_the_docstring_names_every_step():
    """The package's docstring walks through public functions, and each step it lists exists."""
    steps = re.findall(r"^\d+\. `(\w+)`", ca.__doc__, flags=re.MULTILINE)
    assert len(steps) >= 5
    assert set(steps) <= set(ca.__all__)


# -- notices --------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Said:
    """A notice in the code: pattern of its code, and the facts that go with it."""

    pattern: str
    facts: frozenset[str]
    place: str


def notices() -> Iterator[Said]:
    """Every `Notice(...)` of the package."""
    for module, tree in trees().items():
        for function in (n for n in ast.walk(tree) if isinstance(n, ast.FunctionDef)):
            for call in ast.walk(function):
                if isinstance(call, ast.Call) and getattr(call.func, "id", "") == "Notice":
                    facts = _facts(call.args[1], function) if len(call.args) > 1 else frozenset()
                    yield Said(_pattern(call.args[0]), facts, f"{module}.{function.name}")


def _pattern(code: ast.expr) -> str:
    if isinstance(code, ast.JoinedStr):
        return "".join(re.escape(p.value) if isinstance(p, ast.Constant) else r"\w+" for p in code.values)
    assert isinstance(code, ast.Constant)
    return re.escape(code.value)


def _facts(given: ast.expr, function: ast.FunctionDef) -> frozenset[str]:
    """Keys of a dict, written out or put together under a name in the same function."""
    if isinstance(given, ast.Dict):
        return frozenset(k.value for k in given.keys)
    assert isinstance(given, ast.Name)
    keys: set[str] = set()
    for node in ast.walk(function):
        targets = node.targets if isinstance(node, ast.Assign) else [getattr(node, "target", None)]
        for target in targets:
            value = getattr(node, "value", None)
            if isinstance(target, ast.Name) and target.id == given.id and isinstance(value, ast.Dict):
                keys |= {k.value for k in value.keys}
            if isinstance(target, ast.Subscript) and getattr(target.value, "id", "") == given.id:
                keys.add(target.slice.value)
    return frozenset(keys)


def placeholders(code: str) -> dict[str, str]:
    """Facts that the wording of a code asks for, and how each is formatted."""
    return {name: spec or "" for _, name, spec, _ in string.Formatter().parse(texts.NOTICES[code]) if name}


def test_every_notice_has_a_wording_and_every_wording_a_notice():
    """No code is without words, no words without a code."""
    said = list(notices())
    assert len(said) >= 20
    met = {code for s in said for code in set(texts.NOTICES) if re.fullmatch(s.pattern, code)}
    wordless = [s for s in said if not any(re.fullmatch(s.pattern, code) for code in set(texts.NOTICES))]
    assert not wordless
    assert met == set(texts.NOTICES)


def test_notices_bring_the_facts_that_their_words_ask_for():
    """Each placeholder of a wording is a fact of the notice where it is made."""
    for said in notices():
        for code in (c for c in set(texts.NOTICES) if re.fullmatch(said.pattern, c)):
            assert set(placeholders(code)) <= said.facts, (said.place, code)


@pytest.mark.parametrize("code", sorted(set(texts.NOTICES)))
def test_notices_become_sentences(code):
    """With its facts a notice reads as a sentence, lists included."""
    facts = {name: 1234.5 if spec else ["a", "b"] for name, spec in placeholders(code).items()}
    text = texts.notice_text(Notice(code, facts))
    assert text[0].isupper() or text.startswith(("a, b", "1"))
    assert text.endswith(".") or text.endswith(").")
    assert not set("{}[]") & set(text)
    assert re.fullmatch(r"[a-z]+(-[a-z]+)*", code)


def test_long_lists_in_notices_are_cut():
    """Of many names the first eight are shown and the rest counted."""
    text = texts.notice_text(Notice("single-unit-strata", {"names": [f"s{i}" for i in range(20)]}))
    assert "s7 and 12 more" in text
    assert "s8" not in text


def test_a_notice_without_words_is_an_error():
    """A code that nobody worded is found at once."""
    with pytest.raises(KeyError):
        texts.notice_text(Notice("nonsense"))
