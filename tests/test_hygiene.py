"""Habits that a linter does not know. Each check is a function of text, and a companion shows it finding a fault."""

import ast
import json
import pathlib
import re
import subprocess
import sys

import pytest

ROOT = pathlib.Path(__file__).parents[1]
PACKAGE_LINES, TEST_LINES = 400, 500
GUIDED_KEYWORDS = {"with_"}  # takes **changes, which the constructor checks by name
GLOBAL_RANDOM = {
    "seed", "rand", "randn", "random", "random_sample", "randint", "normal", "uniform", "choice", "shuffle",
    "permutation", "standard_normal", "poisson", "exponential", "RandomState", "get_state", "set_state",
}  # fmt: skip
# pieces, so that this file does not hold what it looks for
MACHINE = re.compile(r"(?<![\w.~-])/" + r"(?:work|home|root|Users|tmp)/\w")
REGISTRY = re.compile(
    "|".join(["py" + r"pi\.org", "python" + "hosted", "registry" + r"\.npm", "conda" + r"\.anaconda"])
)
NOTE_TO_SELF = re.compile("TO" + "DO|FIX" + "ME|X" + "XX")


def tree_files():
    """Return the files of the project: those git knows, or every one outside hidden and built folders."""
    try:
        listed = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, check=True, text=True).stdout
        files = [ROOT / name for name in listed.split("\0") if name]
    except (OSError, subprocess.CalledProcessError):
        files = [p for folder in ("branchlab", "tests", "notebooks") for p in (ROOT / folder).rglob("*")]
        files += list(ROOT.glob("*.*"))
    return sorted(p for p in files if p.is_file() and "__pycache__" not in p.parts)


FILES = tree_files()
PYTHON = [p for p in FILES if p.suffix == ".py"]
PACKAGE = [p for p in PYTHON if p.is_relative_to(ROOT / "branchlab")]
NOTEBOOKS = [p for p in FILES if p.suffix == ".ipynb"]
TEXT = [p for p in FILES if p.suffix not in {".png", ".nc"}]


def name_of(path):
    return str(path.relative_to(ROOT))


def calls(tree):
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            yield node, ast.unparse(node.func)


def global_random(text):
    """Calls of numpy's global generator, which make a result depend on what ran before."""
    for node, name in calls(ast.parse(text)):
        parts = name.split(".")
        if parts[-2:-1] == ["random"] and parts[0] in ("np", "numpy") and parts[-1] in GLOBAL_RANDOM:
            yield f"line {node.lineno}: {name}"


def fastmath(text):
    """fastmath=True, under which isnan(nan) is false."""
    for node, name in calls(ast.parse(text)):
        for keyword in node.keywords:
            if keyword.arg == "fastmath" and getattr(keyword.value, "value", None) is True:
                yield f"line {node.lineno}: {name}(fastmath=True)"


def relative_imports(text):
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.ImportFrom) and node.level:
            yield f"line {node.lineno}: from {'.' * node.level}{node.module or ''}"


def loose_asserts(text):
    """Asserts that pass for a wrong reason: `assert a if c else b`, `assert (a, "text")`, `assert "text"`."""
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Assert):
            constant = isinstance(node.test, ast.Constant) and node.test.value
            if constant or isinstance(node.test, (ast.IfExp, ast.Tuple)):
                yield f"line {node.lineno}: {ast.unparse(node)[:60]}"


def open_signatures(text):
    """Public functions and methods that take **anything: a misspelt name would pass unnoticed."""

    def visit(node, public):
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.ClassDef):
                yield from visit(child, public and not child.name.startswith("_"))
            elif isinstance(child, (ast.FunctionDef, ast.AsyncFunctionDef)):
                private = child.name.startswith("_") and not child.name.startswith("__")
                if public and not private and child.args.kwarg and child.name not in GUIDED_KEYWORDS:
                    yield f"line {child.lineno}: {child.name}(**{child.args.kwarg.arg})"

    yield from visit(ast.parse(text), public=True)


def raises(text):
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Raise):
            yield f"line {node.lineno}: {ast.unparse(node)[:60]}"


def matches(pattern):
    def find(text):
        for number, line in enumerate(text.splitlines(), 1):
            if pattern.search(line):
                yield f"line {number}: {pattern.search(line).group()}"

    return find


def too_long(limit):
    def find(text):
        lines = text.count("\n")
        if lines > limit:
            yield f"{lines} lines, limit {limit}: one noun a file"

    return find


def stored_outputs(text):
    """Outputs, execution counts or machine metadata that a notebook holds."""
    notebook = json.loads(text)
    for number, cell in enumerate(notebook["cells"]):
        if cell["cell_type"] == "code" and (cell.get("outputs") or cell.get("execution_count") is not None):
            yield f"cell {number} holds an output or a count"
        if cell.get("metadata", {}).keys() - {"tags"}:
            yield f"cell {number} holds metadata {sorted(cell['metadata'])}"
    if "widgets" in notebook.get("metadata", {}):
        yield "the notebook holds widget state"


CHECKS = [
    ("global random numbers", global_random, PYTHON),
    ("fastmath", fastmath, PYTHON),
    ("relative imports", relative_imports, PYTHON),
    ("loose asserts", loose_asserts, PYTHON),
    ("open signatures", open_signatures, PACKAGE),
    ("raise in kernels", raises, [p for p in PACKAGE if "kernels" in p.parts]),
    ("long files", too_long(PACKAGE_LINES), PACKAGE),
    ("long tests", too_long(TEST_LINES), [p for p in PYTHON if p not in PACKAGE]),
    ("machine paths", matches(MACHINE), TEXT),
    ("registries", matches(REGISTRY), TEXT),
    ("notes to self", matches(NOTE_TO_SELF), TEXT),
    ("stored outputs", stored_outputs, NOTEBOOKS),
]


@pytest.mark.parametrize(("find", "files"), [c[1:] for c in CHECKS], ids=[c[0] for c in CHECKS])
def test_habits(find, files):
    assert files, "nothing is checked"
    found = [f"{name_of(path)} {fault}" for path in files for fault in find(path.read_text(encoding="utf-8"))]
    assert found == []


@pytest.mark.parametrize(
    ("find", "bad", "good"),
    [
        (global_random, "np.random.seed(1)", "np.random.default_rng(1)"),
        (global_random, "numpy.random.rand(3)", "rng.normal(3)"),
        (fastmath, "@njit(nogil=True, fastmath=True)\ndef f(): pass", "@njit(fastmath={'contract'})\ndef f(): pass"),
        (relative_imports, "from .base import Medium", "from branchlab.media.base import Medium"),
        (loose_asserts, "assert a == 1 if b else True", "assert (a == 1) is b"),
        (loose_asserts, "assert (a == 1, 'text')", "assert a == 1, 'text'"),
        (open_signatures, "def f(a, **rest): pass", "def _f(a, **rest): pass"),
        (open_signatures, "class A:\n    def f(self, **rest): pass", "class A:\n    def with_(self, **changes): pass"),
        (raises, "def f():\n    raise ValueError", "def f():\n    return 1"),
        (too_long(2), "a\nb\nc\n", "a\nb\n"),
        (matches(MACHINE), "see /ho" + "me/someone/x", "see https://example.org/home/x and ./work/x"),
        (matches(REGISTRY), "https://py" + "pi.org/simple", "pip install numpy"),
        (matches(NOTE_TO_SELF), "# TO" + "DO later", "# to do so"),
        (
            stored_outputs,
            json.dumps({"cells": [{"cell_type": "code", "outputs": [{}], "execution_count": None}]}),
            json.dumps({"cells": [{"cell_type": "code", "outputs": [], "execution_count": None, "metadata": {}}]}),
        ),
        (
            stored_outputs,
            json.dumps({"cells": [], "metadata": {"widgets": {}}}),
            json.dumps({"cells": [], "metadata": {"kernelspec": {}}}),
        ),
    ],
)
def test_a_bad_habit_is_noticed(find, bad, good):
    assert len(list(find(bad))) == 1
    assert list(find(good)) == []


@pytest.mark.parametrize("command", [["check", "."], ["format", "--check", "."]], ids=["lint", "format"])
def test_ruff(command):
    done = subprocess.run([sys.executable, "-m", "ruff", *command], cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout[-4000:] + done.stderr[-1000:]


def test_ruff_notices(tmp_path):
    path = tmp_path / "bad.py"
    path.write_text("import os\nx=1\n", encoding="utf-8")
    for command in ("check", "format"):
        options = ["--check"] if command == "format" else ["--select", "F"]
        done = subprocess.run([sys.executable, "-m", "ruff", command, *options, path], capture_output=True, text=True)
        assert done.returncode == 1, done.stdout + done.stderr
