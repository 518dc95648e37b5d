"""The stages of the package: imports go down the list only, and what is public is one short list."""

from __future__ import annotations

import ast
import inspect
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from pyarrow import csv

import journeys
from journeys.results import Result

PACKAGE = Path(journeys.__file__).parent
DEMO = PACKAGE.parent / "demo_data"
STAGES = ("errors", "checks", "files", "markup", "kernels", "results", "intake", "tally", "models", "questions", "show",
          "nightly", "command")

# The one import that goes up: a method of the fit that forwards to a question, imported when it is called.
FORWARDS = {("models.fit", "questions.moves")}

PUBLIC = [
    "DatabaseLog", "JourneyFit", "JourneyModel", "JourneyRules", "Tally", "__version__", "audit", "check", "comeback",
    "compare", "credit", "first_passage", "from_wide", "memory_check", "outcomes", "passage_curve", "plots", "removal",
    "return_time", "sensitivity", "stages", "summarise", "tally", "tally_spark", "time_to_convert", "worth",
    "write_report",
]

MODULES = {
    ".".join(path.relative_to(PACKAGE).with_suffix("").parts): path
    for path in sorted(PACKAGE.rglob("*.py"))
    if path.stem not in ("__init__", "__main__")
}


def stage(module: str) -> int:
    return STAGES.index(module.partition(".")[0])


def nodes(tree: ast.AST, where: str = "module") -> Iterator[tuple[ast.AST, str]]:
    """Walk a module's tree, saying of each node whether it runs at import, when called, or for types only."""
    for child in ast.iter_child_nodes(tree):
        here = where
        if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            here = "function"
        elif isinstance(child, ast.If) and ast.unparse(child.test) == "TYPE_CHECKING":
            here = "types"
        yield child, here
        yield from nodes(child, here)


def imports(path: Path) -> Iterator[tuple[str, str]]:
    """Return what a file imports, in full, and where it does."""
    for node, where in nodes(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name}: imports are written out in full"
            yield from ((f"{node.module}.{alias.name}", where) for alias in node.names)
        elif isinstance(node, ast.Import):
            yield from ((alias.name, where) for alias in node.names)


def own_imports(path: Path) -> Iterator[tuple[str, str]]:
    """Return the modules of the package that a file imports."""
    for name, where in imports(path):
        top, _, rest = name.partition(".")
        if top != "journeys":
            continue
        found = rest if rest in MODULES else rest.rpartition(".")[0]
        # `from journeys import checks` names a module; `from journeys.tally import x` a stage's own front.
        yield found if found in MODULES else rest.partition(".")[0], where


def test_every_file_belongs_to_a_stage() -> None:
    assert {module.partition(".")[0] for module in MODULES} <= set(STAGES)
    assert len(MODULES) > 40


@pytest.mark.parametrize("module", MODULES)
def test_imports_go_down_only(module: str) -> None:
    for imported, where in own_imports(MODULES[module]):
        if (module, imported) in FORWARDS:
            assert where != "module", f"{module} imports {imported} when it is itself imported"
            continue
        assert stage(imported) <= stage(module), f"{module} imports {imported}, which lies above it ({where})"


def test_the_walk_sees_imports_of_every_kind(tmp_path: Path) -> None:
    lines = [
        "from typing import TYPE_CHECKING", "import journeys.show.tables", "from journeys import results",
        "if TYPE_CHECKING:", "    from journeys.tally.tally import Tally", "class Fit:", "    def moves(self):",
        "        if True:", "            from journeys.questions.moves import moves",
    ]
    path = tmp_path / "module.py"
    path.write_text("\n".join(lines), encoding="utf-8")
    assert list(own_imports(path)) == [
        ("show.tables", "module"), ("results", "module"), ("tally.tally", "types"), ("questions.moves", "function"),
    ]


def test_no_circle_at_import() -> None:
    """Files of one stage import each other in one direction; the way back is taken only when called."""
    waiting = {
        module: {found for found, where in own_imports(path) if where == "module" and found in MODULES}
        for module, path in MODULES.items()
    }
    while free := [module for module, needs in waiting.items() if not needs & set(waiting)]:
        for module in free:
            del waiting[module]
    assert not waiting


def test_kernels_know_only_arrays() -> None:
    for module, path in MODULES.items():
        if module.startswith("kernels."):
            tops = {name.partition(".")[0] for name, _ in imports(path)}
            assert tops <= {*sys.stdlib_module_names, "journeys", "numpy", "scipy"}, module


def test_public_names() -> None:
    assert journeys.__all__ == PUBLIC
    assert all(hasattr(journeys, name) for name in PUBLIC)
    assert set(PUBLIC) <= set(dir(journeys))
    with pytest.raises(AttributeError, match="no attribute 'outcome'"):
        journeys.outcome  # noqa: B018


def test_the_front_names_places_and_nothing_else() -> None:
    """What type checkers read and what is looked up at run time are one list, and there is no other logic."""
    tree = ast.parse((PACKAGE / "__init__.py").read_text(encoding="utf-8"))
    (choice,) = (node for node in tree.body if isinstance(node, ast.If))
    others = {type(node) for node in tree.body[1:] if node is not choice}
    assert others <= {ast.Import, ast.ImportFrom, ast.Assign}
    assert ast.unparse(choice.test) == "TYPE_CHECKING"
    read = {}
    for node in choice.body:
        assert isinstance(node, ast.ImportFrom)
        for alias in node.names:
            assert alias.asname is None
            inner = f"{node.module}.{alias.name}"
            read[alias.name] = inner if inner.removeprefix("journeys.") in MODULES else node.module
    assert read == journeys._PLACES
    assert [type(node) for node in choice.orelse] == [ast.Assign, ast.FunctionDef, ast.FunctionDef]
    for name, place in journeys._PLACES.items():
        thing = getattr(journeys, name)
        assert thing is sys.modules[place] if name == "plots" else thing.__module__ == place


@pytest.mark.parametrize("name", [name for name in PUBLIC if not name.startswith("_")])
def test_public_names_are_explained_with_an_example(name: str) -> None:
    thing = getattr(journeys, name)
    text = inspect.getdoc(thing) or ""
    assert text.splitlines()[0].endswith((".", "?"))
    is_result = isinstance(thing, type) and issubclass(thing, Result)
    assert is_result or ("Examples\n--------" in text and ">>>" in text)
    if inspect.isfunction(thing):
        for parameter in inspect.signature(thing).parameters:
            line = rf"^(\w+, )*{parameter}(, \w+)* : "
            assert re.search(line, text, re.MULTILINE), f"{name} says nothing of {parameter}"


def loaded_after(code: str) -> set[str]:
    """Return the modules that a fresh Python has imported once the code has run."""
    code += "; import sys; print(*sys.modules)"
    ran = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=PACKAGE.parent)
    return set(ran.stdout.splitlines()[-1].split())


def test_import_is_light() -> None:
    """What few calls need is imported by those; no extra, and no option, comes with the package."""
    loaded = loaded_after("import journeys; [getattr(journeys, name) for name in journeys.__all__]")
    assert "journeys.models.fit" in loaded
    extras = {"statsmodels", "matplotlib", "jinja2", "polars", "duckdb", "pyspark", "adbc_driver_manager", "numba"}
    slow = {"pandas", "tqdm", "scipy.stats", "scipy.sparse", "scipy.linalg"}
    assert not loaded & {*extras, *slow, "journeys.show.summary", "journeys.command"}
    loaded = loaded_after("import journeys")
    later = ("journeys.models", "journeys.questions", "journeys.show", "pyarrow.compute")
    assert not [name for name in loaded if name.startswith(later)]


@pytest.mark.parametrize("kind", ["parquet", "csv", "arrow", "folder"])
def test_counting_files_is_light(kind: str, tmp_path: Path) -> None:
    """The nightly count never waits for pandas, whichever files the log is kept in."""
    rules = tmp_path / "rules.toml"
    text = (DEMO / "rules.toml").read_text(encoding="utf-8")
    if kind == "folder":
        assert "{ staff = [true] }" in text
        text = text.replace("{ staff = [true] }", '{ staff = [true], part = ["third"] }')
    rules.write_text(text, encoding="utf-8")
    words = ["tally", str(kept_as(kind, tmp_path)), "--rules", str(rules), "--out", str(tmp_path / "tally.parquet")]
    loaded = loaded_after(f"from journeys.command.main import main; assert main({words!r}) == 0")
    assert "journeys.tally.store" in loaded
    assert not loaded & {"pandas", "scipy.stats", "tqdm", "journeys.models", "journeys.questions", "journeys.show"}
    counted = journeys.Tally.load(tmp_path / "tally.parquet")
    expected = journeys.tally(DEMO / "club_log.parquet", journeys.JourneyRules.from_toml(DEMO / "rules.toml"))
    for name in ("moves", "entries", "journeys", "customers"):
        assert counted.table(name).equals(expected.table(name))


def kept_as(kind: str, folder: Path) -> Path:
    """Return the demo log in a kind of file, or in two folders that give a column by their names."""
    log = DEMO / "club_log.parquet"
    if kind == "parquet":
        return log
    table = pq.read_table(log)
    path = folder / f"log.{kind}"
    if kind == "csv":
        csv.write_csv(table, path)
    elif kind == "arrow":
        with pa.ipc.new_file(str(path), table.schema) as writer:
            writer.write_table(table)
    else:
        for part, rows in (("first", table.slice(0, 20_000)), ("second", table.slice(20_000))):
            (path / f"part={part}").mkdir(parents=True)
            pq.write_table(rows, path / f"part={part}" / "rows.parquet")
    return path


@pytest.mark.parametrize("module", MODULES)
def test_modules_are_short(module: str) -> None:
    assert len(MODULES[module].read_text(encoding="utf-8").splitlines()) <= 350


def test_the_quick_part_has_every_stage() -> None:
    tests = PACKAGE.parent / "tests"
    lines = (tests / "quick.txt").read_text(encoding="utf-8").split()
    paths = [tests.parent / line.partition("::")[0] for line in lines]
    assert [path for path in paths if not path.is_file()] == []
    folders = {path.parent.name for path in paths}
    assert [stage for stage in STAGES if (tests / stage).is_dir() and stage not in folders] == []
