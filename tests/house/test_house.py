"""The house rules that a machine can hold: light imports, documented names, short files."""

import ast
import importlib
import pkgutil
import subprocess
import sys
from pathlib import Path

import pytest

import anneal_ref

PACKAGE = Path(anneal_ref.__file__).parent
FILES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("arguments", [["-c", "import anneal_ref"], ["-m", "anneal_ref.views.cli", "--help"]])
def test_face_and_help_load_nothing_heavy(arguments):
    code = "import sys, runpy; sys.argv = sys.argv[1:]\n"
    if arguments[0] == "-c":
        code += arguments[1] + "\n"
    else:
        code += (
            "try:\n    runpy.run_module('anneal_ref.views.cli', run_name='__main__')\nexcept SystemExit:\n    pass\n"
        )
    code += "heavy = {'quimb', 'numba', 'scipy', 'matplotlib', 'pydantic', 'h5py'} & set(sys.modules)\n"
    code += "print('loaded:', sorted(heavy))"
    out = subprocess.run(
        [sys.executable, "-c", code, *arguments[1:]], capture_output=True, text=True, check=True
    ).stdout
    assert out.splitlines()[-1] == "loaded: []"


def test_every_public_name_loads():
    for name in anneal_ref.__all__:
        assert getattr(anneal_ref, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        anneal_ref.nonsense  # noqa: B018


def test_stub_names_the_same_face():
    stub = ast.parse((PACKAGE / "__init__.pyi").read_text())
    named = {
        alias.asname or alias.name for node in stub.body if isinstance(node, ast.ImportFrom) for alias in node.names
    }
    named |= {node.target.id for node in stub.body if isinstance(node, ast.AnnAssign)}
    assert named == set(anneal_ref.__all__)


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_file_is_short_and_documented(path):
    text = path.read_text()
    assert text.count("\n") <= 500
    tree = ast.parse(text)
    assert ast.get_docstring(tree), "the module has no docstring"
    for node in tree.body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            assert ast.get_docstring(node), f"{node.name} has no docstring"


def test_every_module_imports():
    for module in pkgutil.walk_packages([str(PACKAGE)], "anneal_ref."):
        assert importlib.import_module(module.name)
