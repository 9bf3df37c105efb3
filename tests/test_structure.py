"""What holds the folders together: which way imports run, and the names that the outside may rely on."""

import ast
import dataclasses
import importlib
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import skewline.calib
import skewline.node
from skewline.tools.cli import VERBS

ROOT = Path(__file__).resolve().parent.parent
LAYERS = ("calib", "node", "tools")  # each may import those before it
SOURCES = sorted(path for layer in LAYERS for path in (ROOT / layer).rglob("*.py"))
LONGEST_MODULE = 450


def relative(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


def module_name(path: Path) -> str:
    """Name a source file as it installs: tools/cell/cell.py is skewline.tools.cell.cell."""
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(("skewline", *(parts[:-1] if parts[-1] == "__init__" else parts)))


MODULES = {module_name(path): path for path in SOURCES}
# go.py runs before the project is installed, as a file and never as a module.
IMPORTABLE = [name for name in MODULES if name != "skewline.tools.go"]


def imported_names(source: str, package: str) -> Iterator[str]:
    """Name all that a source imports, wherever in it; relative names resolved against its package."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            above = package.split(".")[: len(package.split(".")) - node.level + 1] if node.level else []
            base = ".".join([*above, *([node.module] if node.module else [])])
            yield from (f"{base}.{alias.name}" for alias in node.names)


def names_in_text(source: str) -> Iterator[str]:
    """Give the modules named by a string, as importlib and ``python -m`` take them."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Constant) and isinstance(node.value, str) and node.value.startswith("skewline."):
            yield node.value


def package_of(path: Path) -> str:
    name = module_name(path)
    return name if path.name == "__init__.py" else name.rpartition(".")[0]


def layers_imported(source: str, package: str) -> set[str]:
    names = [name.split(".") for name in (*imported_names(source, package), *names_in_text(source))]
    return {parts[1] for parts in names if parts[0] == "skewline" and len(parts) > 1}


@pytest.mark.parametrize(
    ("source", "package", "layers"),
    [
        ("from ..tools import cell", "skewline.node", {"tools"}),
        ("from ...calib.rig import Rig", "skewline.node.sources", {"calib"}),
        ("from .. import tools", "skewline.node", {"tools"}),
        ("from . import match\nfrom .errors import NodeError", "skewline.node", {"node"}),
        ("import skewline.tools.cli as c", "skewline.calib", {"tools"}),
        ("def f():\n    from skewline import node", "skewline.calib", {"node"}),
        ("importlib.import_module('skewline.tools.cell')", "skewline.node", {"tools"}),
        ("import numpy.linalg\nfrom pathlib import Path", "skewline.calib", set()),
    ],
)
def test_the_check_of_imports_sees_every_way_to_write_one(source: str, package: str, layers: set[str]) -> None:
    assert layers_imported(source, package) == layers


@pytest.mark.parametrize("path", SOURCES, ids=relative)
def test_imports_run_from_tools_to_node_to_calib_and_never_back(path: Path) -> None:
    layer = path.relative_to(ROOT).parts[0]
    allowed = set(LAYERS[: LAYERS.index(layer) + 1])
    assert layers_imported(path.read_text(encoding="utf-8"), package_of(path)) <= allowed


def test_every_layer_was_looked_at() -> None:
    assert {path.relative_to(ROOT).parts[0] for path in SOURCES} == set(LAYERS)
    for expected in ("skewline.calib.rig", "skewline.node", "skewline.node.sources.folder", "skewline.tools.cli"):
        assert expected in MODULES


def test_go_needs_nothing_but_the_standard_library() -> None:
    source = (ROOT / "tools/go.py").read_text(encoding="utf-8")
    tops = {name.split(".")[0] for name in imported_names(source, "skewline.tools")}
    assert tops
    assert tops <= sys.stdlib_module_names


def test_every_module_imports_without_a_warning() -> None:
    # A fresh interpreter, so that no module is there already; importing the command line must do nothing.
    code = f"import importlib\nfor name in {IMPORTABLE!r}: importlib.import_module(name)"
    done = subprocess.run([sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, timeout=60)
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")


@pytest.mark.parametrize("name", ["skewline.calib", "skewline.node", "skewline.tools.cell"])
def test_a_package_s_public_names_are_sorted_and_there(name: str) -> None:
    package = importlib.import_module(name)
    assert package.__all__ == sorted(package.__all__)
    assert len(set(package.__all__)) == len(package.__all__)
    for public in package.__all__:
        assert getattr(package, public) is not None, public


@pytest.mark.parametrize("layer", ["calib", "node"])
def test_the_names_that_robot_programs_use_are_public(layer: str) -> None:
    names = {
        "calib": {"CalibrationError", "Camera", "Rig", "RigFileError"},
        "node": {"DepthEngine", "DepthFrame", "DepthSubscriber", "NodeError"},
    }
    package = importlib.import_module(f"skewline.{layer}")
    assert names[layer] <= set(package.__all__)


def test_public_classes_offer_what_robot_programs_call() -> None:
    for name in ("from_opencv", "to_opencv", "load", "save", "fingerprint"):
        assert hasattr(skewline.calib.Rig, name), name
    for name in ("project", "rays", "undistort"):
        assert callable(getattr(skewline.calib.Camera, name)), name
    fields = {field.name for field in dataclasses.fields(skewline.node.DepthFrame)}
    assert {"depth", "sigma", "K", "T_a_view", "T_base_a", "stamp_ns", "fingerprint", "sequence"} <= fields
    assert callable(skewline.node.DepthFrame.points)
    assert callable(skewline.node.DepthEngine.compute)
    for name in ("latest", "__iter__", "__enter__", "__exit__"):
        assert callable(getattr(skewline.node.DepthSubscriber, name)), name


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_has_a_help_with_a_worked_example(verb: str) -> None:
    module = importlib.import_module(f"skewline.tools.verbs.{verb}")
    assert callable(module.configure)
    assert callable(module.run)
    command = [sys.executable, "-m", "skewline.tools.cli", verb, "--help"]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60)
    assert (done.returncode, done.stderr) == (0, "")
    assert "example" in done.stdout
    assert f"skewline {verb}" in done.stdout.partition("example")[2], "the example calls the verb itself"


def test_every_verb_module_is_on_the_command_line() -> None:
    modules = {path.stem for path in (ROOT / "tools/verbs").glob("*.py")} - {"__init__"}
    assert modules <= VERBS.keys()


@pytest.mark.parametrize("layer", LAYERS)
def test_every_package_says_that_it_is_typed(layer: str) -> None:
    assert (ROOT / layer / "py.typed").is_file()


def undocumented(tree: ast.Module) -> Iterator[str]:
    """Name the public functions and classes, and the public methods of public classes, that have no docstring."""
    if ast.get_docstring(tree) is None:
        yield "the module"
    holders: list[ast.Module | ast.ClassDef] = [tree]
    for holder in holders:
        for node in holder.body:
            if not isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)) or node.name.startswith("_"):
                continue
            if ast.get_docstring(node) is None:
                yield f"{node.name} in line {node.lineno}"
            if isinstance(node, ast.ClassDef):
                holders.append(node)


def test_the_check_of_docstrings_sees_what_lacks_one() -> None:
    source = '"""A."""\nclass C:\n    """C."""\n    def m(self): ...\n    def _p(self): ...\ndef f(): ...\n'
    assert list(undocumented(ast.parse(source))) == ["f in line 6", "m in line 4"]


@pytest.mark.parametrize("path", [path for path in SOURCES if path.relative_to(ROOT).parts[0] != "tools"], ids=relative)
def test_every_public_name_of_calib_and_node_is_explained(path: Path) -> None:
    assert list(undocumented(ast.parse(path.read_text(encoding="utf-8")))) == []


@pytest.mark.parametrize("path", SOURCES, ids=relative)
def test_no_module_outgrows_a_reader(path: Path) -> None:
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST_MODULE


def test_the_top_of_the_repository_holds_these_and_no_more() -> None:
    if not (ROOT / ".git").exists():
        pytest.skip("not a git checkout, so there is no telling what belongs to it")
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True)  # noqa: S607
    tops = {line.partition("/")[0] for line in listed.stdout.splitlines()}
    files = {"DEVELOPERS.md", "LICENSE", "README.md", "pyproject.toml"}
    assert {*LAYERS, "tests", "pyproject.toml", "README.md", "LICENSE"} <= tops
    assert {top for top in tops if not top.startswith(".")} <= {*files, *LAYERS, "tests"}


def test_every_package_folder_is_named_in_pyproject() -> None:
    # setuptools is given the list by hand, and a package that is missing there is missing from a wheel alone.
    text = (ROOT / "pyproject.toml").read_text(encoding="utf-8")
    for path in SOURCES:
        if path.name == "__init__.py":
            assert f'"{module_name(path)}"' in text
