"""The house: imports run one way, the library keeps quiet, one door, small modules, docstrings."""

import ast
import importlib
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import trackfit

ROOT = Path(trackfit.__file__).resolve().parent
MODULES = {
    ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__"): path
    for path in sorted(ROOT.rglob("*.py"))
}
TREES = {name: ast.parse(path.read_text(encoding="utf-8")) for name, path in MODULES.items()}

STUDY = (
    "study",
    "study_faults",
    "study_fixes",
    "study_lines",
    "study_schema",
    "study_screening",
    "study_table",
    "study_trials",
    "study_values",
)

ORDER = (
    ("faults", "compiled", "counted"),
    ("fix_files", "fixes"),
    ("frame",),
    ("errors",),
    ("layers",),
    ("motion",),
    ("inference",),
    ("sea", "screening", "judgement"),
    STUDY,
    ("model", "paths", "responses", "usable"),
    ("analysis",),
    ("criticism",),
    ("results", "report"),
    ("outputs",),
)
"""Storeys from the ground up: a module may import from its own storey and those below.

The study stands above the engine only because its units and its planes are those of `layers` and
`frame`; nothing below `model` knows a study.
"""

LEVEL = {name: level for level, storey in enumerate(ORDER) for name in storey}
HEAVY = {"jax", "geopandas", "xarray", "matplotlib", "rasterio", "scipy", "pandas", "numpy"}
LIGHT = ["faults", *STUDY]


def is_type_checking(node) -> bool:
    return isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING"


def imports_of(tree, *, at_top=False, typing_too=True):
    """Full names of the modules a tree imports; from a package, the names that are modules."""
    if at_top:
        nodes = [n for part in tree.body if typing_too or not is_type_checking(part)
                 for n in ([part] if not isinstance(part, ast.If) else ast.walk(part))]  # fmt: skip
    else:
        nodes = ast.walk(tree)
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are absolute"
            for alias in node.names:
                full = f"{node.module}.{alias.name}"
                yield full if full.removeprefix("trackfit.") in MODULES else str(node.module)


def own(name: str) -> str | None:
    """The storey name of one of our modules: its first part below the package."""
    parts = name.split(".")
    return parts[1] if parts[0] == "trackfit" and len(parts) > 1 else None


def test_every_module_has_its_storey():
    assert {name.split(".")[0] for name in MODULES} == set(LEVEL) | {"__init__"}


@pytest.mark.parametrize("module", [name for name in MODULES if name != "__init__"])
def test_imports_run_downwards(module):
    here = LEVEL[module.split(".")[0]]
    for name in imports_of(TREES[module]):
        target = own(name)
        if target is not None:
            assert LEVEL[target] <= here, f"trackfit.{module} imports {name}"
        assert name.split(".")[0] not in ("trackfit_cli", "click", "rich"), module


def test_every_package_is_installed():
    listed = tomllib.loads((ROOT.parent / "pyproject.toml").read_text())["tool"]["setuptools"]
    folders = [path.parent for path in ROOT.rglob("__init__.py")]
    packages = {".".join(folder.relative_to(ROOT.parent).parts) for folder in folders}
    assert packages == {name for name in listed["packages"] if name.startswith("trackfit")} - {
        "trackfit_cli",
        "trackfit_demo",
    }


def test_no_module_imports_itself_in_a_circle():
    """Imports at the top of modules, followed to their end."""
    edges = {
        name: {
            target.removeprefix("trackfit.")
            for target in imports_of(tree, at_top=True, typing_too=False)
            if target.startswith("trackfit.")
        }
        for name, tree in TREES.items()
    }
    done: set[str] = set()

    def visit(name, above):
        assert name not in above, " -> ".join([*above, name])
        if name not in done:
            for target in sorted(edges.get(name, ())):
                visit(target, (*above, name))
            done.add(name)

    for name in edges:
        visit(name, ())
    assert done >= set(edges)


def test_motion_knows_no_files_and_inference_no_projection():
    for module, tree in TREES.items():
        names = set(imports_of(tree))
        if module.startswith("motion"):
            assert not names & {"pathlib", "os", "pandas"}, module
        if module.startswith(("motion", "inference")):
            assert not any("pyproj" in name or "frame" in name for name in names), module


@pytest.mark.parametrize("module", list(MODULES))
def test_the_library_never_prints(module):
    for node in ast.walk(TREES[module]):
        if isinstance(node, ast.Call):
            called = ast.unparse(node.func)
            assert called not in ("print", "sys.stdout.write", "sys.stderr.write", "sys.exit")
            assert not called.startswith("warnings.warn("), called
        assert not (isinstance(node, ast.Attribute) and ast.unparse(node) == "sys.stdout")


@pytest.mark.parametrize("module", list(MODULES))
def test_a_module_is_one_concept_of_400_lines_at_most(module):
    assert len(MODULES[module].read_text(encoding="utf-8").splitlines()) <= 400


def public_definitions(tree):
    for node in tree.body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            yield node.name, node
            if isinstance(node, ast.ClassDef):
                for inner in node.body:
                    if isinstance(inner, ast.FunctionDef) and not inner.name.startswith("_"):
                        yield f"{node.name}.{inner.name}", inner


@pytest.mark.parametrize("module", list(MODULES))
def test_everything_public_says_what_it_is(module):
    tree = TREES[module]
    assert ast.get_docstring(tree), "the module"
    for name, node in public_definitions(tree):
        assert ast.get_docstring(node), name


@pytest.mark.parametrize("module", list(MODULES))
def test_everything_is_annotated(module):
    for node in ast.walk(TREES[module]):
        if isinstance(node, ast.FunctionDef):
            arguments = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
            bare = [
                a.arg for a in arguments if a.annotation is None and a.arg not in ("self", "cls")
            ]
            assert not bare, (node.name, bare)
            assert node.returns is not None or node.name == "__init__", node.name


def code_lines(node) -> int:
    """Lines of a function that hold code: no docstring, no comments, no blank lines."""
    body = node.body[1:] if ast.get_docstring(node) else node.body
    parts = [inner for part in body for inner in ast.walk(part) if hasattr(inner, "lineno")]
    return len({line for inner in parts for line in (inner.lineno, inner.end_lineno)})


def test_functions_are_short():
    """None passes 60 code lines; nine in ten stay under 25."""
    lengths = [
        (code_lines(node), module, node.name)
        for module, tree in TREES.items()
        for node in ast.walk(tree)
        if isinstance(node, ast.FunctionDef)
    ]
    assert max(lengths)[0] <= 60, max(lengths)
    ordered = sorted(length for length, _, _ in lengths)
    assert ordered[len(ordered) * 9 // 10] <= 25


def test_the_door_names_the_same_things_everywhere():
    """`__all__`, where to find each name, and what the type checker sees."""
    tree = TREES["__init__"]
    typed = {
        alias.asname or alias.name: node.module
        for part in tree.body
        if is_type_checking(part)
        for node in ast.walk(part)
        if isinstance(node, ast.ImportFrom)
        for alias in node.names
    }
    assert trackfit.__all__ == sorted(trackfit.__all__)
    assert set(trackfit.__all__) == set(trackfit._WHERE) == set(typed)
    for name, module in trackfit._WHERE.items():
        assert typed[name] == f"trackfit.{module}", name
        assert getattr(trackfit, name) is getattr(importlib.import_module(typed[name]), name)
    assert dir(trackfit) == sorted(trackfit.__all__)
    with pytest.raises(AttributeError, match="module 'trackfit' has no attribute 'fit_all'"):
        trackfit.fit_all  # noqa: B018


def test_the_study_is_read_without_heavy_libraries():
    """In a fresh process: what help and the reading of a study may load."""
    modules = [f"trackfit.{name}" for name in LIGHT]
    code = f"import sys, trackfit, {', '.join(modules)}; print(*sorted(sys.modules))"
    loaded = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    ).stdout.split()
    assert "trackfit.study_schema" in loaded
    assert not HEAVY & set(loaded)
