"""X1: reading never runs code. The package's own syntax trees are searched for everything that could."""

import ast
from pathlib import Path

import pytest

import gutz

PACKAGE = Path(gutz.__file__).parent
SOURCES = sorted(PACKAGE.rglob("*.py"))

CALLS = {"eval", "exec", "compile", "__import__", "execfile", "input", "breakpoint"}
MODULES = {
    "pickle",
    "dill",
    "cloudpickle",
    "marshal",
    "shelve",
    "yaml",
    "subprocess",
    "ctypes",
    "socket",
    "urllib",
    "requests",
    "http",
    "code",
}
METHODS = {("os", "system"), ("os", "popen"), ("os", "fork")}


def offences(tree):
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            if isinstance(node.func, ast.Name) and node.func.id in CALLS:
                yield node.lineno, node.func.id
            owner = getattr(getattr(node.func, "value", None), "id", None)
            if (owner, getattr(node.func, "attr", None)) in METHODS:
                yield node.lineno, node.func.attr
            for keyword in node.keywords:
                truth = isinstance(keyword.value, ast.Constant) and keyword.value.value is True
                if keyword.arg in ("allow_pickle", "shell") and truth:
                    yield node.lineno, keyword.arg
        names = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level == 0:
            names = [node.module or ""]
        yield from ((node.lineno, name) for name in names if name.split(".")[0] in MODULES)


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_no_source_can_run_data(path):
    assert [*offences(ast.parse(path.read_text()))] == []


def test_modules_are_imported_by_constant_names_only():
    """import_module takes names from tables in the source, never from a file or a user."""
    for path in SOURCES:
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Call) and getattr(node.func, "id", "") == "import_module":
                assert path.name == "__init__.py", path
                assert isinstance(node.args[0], ast.Subscript | ast.Constant), path


@pytest.mark.parametrize(
    "text",
    [
        "eval('1')",
        "import pickle",
        "from os import path; import subprocess",
        "np.load(f, allow_pickle=True)",
        "os.system('x')",
    ],
)
def test_the_search_would_find_it(text):
    assert [*offences(ast.parse(text))]
