"""The reading order of the package: a module imports only modules that stand before it.

Every import counts, those inside functions too. A new module must be given its place in `BANDS`.
"""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import gapfit

BANDS: dict[str, tuple[str, ...]] = {
    "ground": ("errors", "units", "hall", "rounding", "intervals"),
    "files": (
        "columns",
        "dialect",
        "delimited",
        "tabular",
    ),
    "measurement": (
        "smoothing",
        "passes",
        "traces",
        "cutting",
        "symmetry",
        "calibration",
        "dips",
        "anchors",
        "density",
        "fillings",
        "series",
        "straight",
        "gather",
        "readings",
        "minima",
        "readoff",
        "loading",
    ),
    "models": ("mechanisms", "curve", "priors"),
    "synthetic data": ("instrument", "landscape", "demo_samples", "demo_studies", "simulate"),
    "inference": (
        "optimise",
        "posterior",
        "diagnostics",
        "tempering",
        "explore",
        "sampling",
        "averaging",
        "engines",
        "verdict",
        "fit",
    ),
    "record": ("storage", "archive", "folders", "digest", "tablecells", "tables", "typeset", "report"),
    "figures": (
        "style",
        "scales",
        "panels",
        "arrhenius",
        "marginals",
        "measured",
        "surveys",
        "plots",
        "gallery",
    ),
    "study": ("complaints", "sources", "blocks", "study", "guessing", "drafts", "recognise"),
    "running": ("measurement", "workflow"),
    "faces": ("cli", "__init__", "__main__"),
}
ORDER = [module for band in BANDS.values() for module in band]

# Each outside library is met in few modules; numpy and scipy are everywhere. Imports for type checkers
# only do not count.
HOMES: dict[str, set[str]] = {
    "corner": {"marginals"},
    "emcee": {"sampling"},
    "h5netcdf": {"archive"},
    "h5py": {"archive", "tabular"},
    "jinja2": {"report"},
    "markupsafe": {"report"},
    "matplotlib": {"gallery", "style"},
    "pandas": {"fit", "report", "storage", "tables", "typeset", "workflow"},
    "pydantic": {"blocks", "sources", "study"},
    "rich": {"cli"},
    "typer": {"cli"},
}

FOLDER = Path(gapfit.__file__).parent
MODULES = sorted(path.stem for path in FOLDER.glob("*.py"))
every_module = pytest.mark.parametrize("module", MODULES)


def tree_of(module: str) -> ast.Module:
    return ast.parse((FOLDER / f"{module}.py").read_text(encoding="utf-8"))


def imports(tree: ast.AST, types_too: bool = True) -> Iterator[tuple[int, str, str]]:
    """(line, module, name) of all imports at any depth."""
    for node in ast.iter_child_nodes(tree):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name, "") for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            origin = "." * node.level + (node.module or "")
            yield from ((node.lineno, origin, alias.name) for alias in node.names)
        elif types_too or not (isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test)):
            yield from imports(node, types_too)


def inner_imports(module: str) -> Iterator[tuple[int, str]]:
    """(line, module of gapfit) that a module imports; the version of the package is free to all."""
    for line, origin, name in imports(tree_of(module)):
        parts = origin.split(".")
        if origin == "gapfit" and name != "__version__":
            yield line, name if name in MODULES else "__init__"
        elif parts[0] == "gapfit" and len(parts) > 1:
            yield line, parts[1]


def test_every_module_has_its_place():
    """Add a new module to BANDS in this file, after everything that it imports."""
    missing, gone = sorted(set(MODULES) - set(ORDER)), sorted(set(ORDER) - set(MODULES))
    assert not missing, f"add {', '.join(missing)} to BANDS in {__file__}, after all that they import"
    assert not gone, f"take {', '.join(gone)} out of BANDS in {__file__}: there is no such module"
    assert len(set(ORDER)) == len(ORDER)


@every_module
def test_modules_import_only_what_stands_before_them(module):
    if module not in ORDER:
        pytest.fail(f"add {module} to BANDS in {__file__}, after all that it imports")
    before = set(ORDER[: ORDER.index(module)])
    wrong = [
        f"{module}.py line {line} imports {other}, which stands later"
        for line, other in inner_imports(module)
        if other not in before
    ]
    assert not wrong, "; ".join(wrong)


@every_module
def test_imports_are_absolute(module):
    assert not [line for line, origin, _ in imports(tree_of(module)) if origin.startswith(".")]


@every_module
def test_no_module_reaches_for_private_names_of_another(module):
    private = [
        f"line {line}: {origin}.{name}"
        for line, origin, name in imports(tree_of(module))
        if origin.startswith("gapfit") and name.startswith("_") and not name.startswith("__")
    ]
    assert not private


@every_module
def test_outside_libraries_keep_to_their_homes(module):
    found = {origin.split(".")[0] for _, origin, _ in imports(tree_of(module), types_too=False)}
    outside = found - set(sys.stdlib_module_names) - {"gapfit", "numpy", "scipy"}
    strange = {library for library in outside if module not in HOMES.get(library, set())}
    assert not strange, f"{module} imports {', '.join(sorted(strange))}; see HOMES in {__file__}"


@every_module
def test_public_names_exist_and_are_documented(module):
    tree = tree_of(module)
    assert ast.get_docstring(tree) or module == "__main__"
    defined = {node.name: node for node in tree.body if isinstance(node, ast.FunctionDef | ast.ClassDef)}
    for name in public_names(tree):
        if name in defined:
            assert ast.get_docstring(defined[name]), f"{module}.{name} has no docstring"


def public_names(tree: ast.Module) -> list[str]:
    for node in tree.body:
        if isinstance(node, ast.Assign) and ast.unparse(node.targets[0]) == "__all__":
            return [str(name) for name in ast.literal_eval(node.value)]
    return []


def test_the_inference_knows_nothing_of_the_forward_model():
    """Demo data come from a model of their own; the fitter neither gives nor takes a law."""
    synthetic = set(BANDS["synthetic data"])
    fitting = {"mechanisms", "curve", "priors", *BANDS["inference"]}
    assert not [
        (module, other) for module in fitting for _, other in inner_imports(module) if other in synthetic
    ]
    assert not [
        (module, other) for module in synthetic for _, other in inner_imports(module) if other in fitting
    ]
