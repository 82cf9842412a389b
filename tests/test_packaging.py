"""The files around the code agree with each other: pyproject, environment, README, CI, doctests."""

import doctest
import importlib
import os
import pathlib
import pkgutil
import re
import subprocess
import sys
import tomllib

import pytest

import branchlab
from branchlab.cli.arguments import build_parser

ROOT = pathlib.Path(__file__).parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
EXTRAS = ("fast", "test")


def wanted():
    """Return the requirements of pyproject.toml: the program's and those of the extras."""
    project = PROJECT["project"]
    lists = [project["dependencies"], *(project["optional-dependencies"][extra] for extra in EXTRAS)]
    return {canonical(one) for some in lists for one in some} | {f"python{project['requires-python']}"}


def canonical(requirement):
    return requirement.replace(" ", "").replace("_", "-").lower()


def listed(text):
    """Return the requirements that an environment file lists (pip itself aside)."""
    body = text.split("dependencies:", 1)[1]
    entries = re.findall(r"^\s*-\s*([^\s#].*?)\s*$", body, flags=re.MULTILINE)
    return {canonical(one) for one in entries if one.rstrip(":") != "pip"}


def test_environment_equals_pyproject():
    assert listed((ROOT / "environment.yml").read_text(encoding="utf-8")) == wanted()


def test_a_differing_environment_is_noticed():
    text = (ROOT / "environment.yml").read_text(encoding="utf-8")
    assert listed(text.replace("numba>=0.61", "numba>=0.62")) != wanted()
    assert listed(text.replace("  - tqdm>=4.66\n", "")) != wanted()
    assert listed(text + "  - dask\n") != wanted()


def test_version_is_one():
    assert PROJECT["project"]["version"] == branchlab.__version__


def blocks(text, language):
    """Return the fenced blocks of a language in a Markdown text."""
    return re.findall(rf"^```{language}\n(.*?)^```", text, flags=re.MULTILINE | re.DOTALL)


def readme_commands(text):
    """Return the README's first two commands: the study's and the tests'."""
    lines = [line for block in blocks(text, "sh") for line in block.splitlines() if line.strip()]
    return lines[0], lines[1]


README = (ROOT / "README.md").read_text(encoding="utf-8")


def command_faults(readme, ci):
    """Return what is wrong with the README's two commands and the CI script, in words."""
    study, test = readme_commands(readme)
    found = []
    for command in (study, test):
        if not command.startswith("python3 -m venv .venv && .venv/bin/pip install -e '.["):
            found.append(f"does not set everything up: {command}")
    arguments = study.split(".venv/bin/branchlab ", 1)[-1].split()
    try:
        build_parser().parse_args(arguments)
    except SystemExit:
        found.append(f"the program does not take {arguments}")
    if not test.endswith(".venv/bin/python -m pytest"):
        found.append(f"does not run the whole suite: {test}")
    if test not in ci.splitlines():
        found.append("the CI script does not run the README's test command")
    for setting in ("CI=true", "BRANCHLAB_REQUIRE_BROWSER=1"):
        if setting not in ci:
            found.append(f"the CI script does not set {setting}")
    for extra in re.findall(r"\.\[([\w,]+)\]", study + test):
        found += [f"no extra {one}" for one in extra.split(",") if one not in EXTRAS]
    return found


def test_readme_and_ci_agree():
    script = ROOT / ".ci" / "run"
    assert command_faults(README, script.read_text(encoding="utf-8")) == []
    assert os.access(script, os.X_OK)


def test_disagreement_is_noticed():
    ci = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    study, test = readme_commands(README)
    assert "does not run the README's" in command_faults(README, ci.replace("pytest", "pytest -x"))[0]
    assert "does not set CI" in command_faults(README, ci.replace("CI=true", ""))[0]
    assert "does not take" in command_faults(README.replace(study, study + " --figur x"), ci)[0]
    assert "does not set everything up" in command_faults(README.replace(study, ".venv/bin/branchlab study"), ci)[0]


def test_readme_example_runs():
    """The README's lines of code run as they stand, on a smaller window."""
    (code,) = blocks(README, "python")
    assert len(code.strip().splitlines()) <= 12
    small = code.replace("length=20", "length=6").replace("width=16", "width=8")
    assert small != code
    scope = {}
    exec(compile(small, "README.md", "exec"), scope)
    assert scope["result"].attrs["kind"] == "comparison"


def modules():
    for found in pkgutil.walk_packages(branchlab.__path__, "branchlab."):
        if not found.name.endswith("__main__"):
            yield importlib.import_module(found.name)


def test_doctests_are_collected():
    options = PROJECT["tool"]["pytest"]["ini_options"]
    assert "--doctest-modules" in options["addopts"]
    assert "branchlab" in options["testpaths"]
    finder = doctest.DocTestFinder(exclude_empty=True)
    examples = sum(len(test.examples) for module in modules() for test in finder.find(module, module.__name__))
    assert examples >= 10


@pytest.mark.parametrize("document", ["README.md", "DEVELOPERS.md"])
def test_paths_in_documents_exist(document):
    """Every file or folder of ours that a document names is there."""
    text = (ROOT / document).read_text(encoding="utf-8")
    named = set(re.findall(r"`((?:branchlab|tests|notebooks|\.ci)/[\w./-]*)`", text))
    assert named
    assert [name for name in sorted(named) if not (ROOT / name).exists()] == []


def commands_of(text):
    return [line for block in blocks(text, "sh") for line in block.splitlines() if line.strip()]


@pytest.mark.parametrize("command", commands_of((ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")))
def test_commands_of_the_guide_work(command):
    """Commands that run tests find some; those that run the linter are run in tests/test_hygiene.py."""
    for part in command.split(" && "):
        tool, *arguments = part.split()
        if tool == ".venv/bin/ruff":
            assert arguments in (["check", "."], ["format", "--check", "."])
            continue
        assert [tool, *arguments[:2]] == [".venv/bin/python", "-m", "pytest"]
        found = subprocess.run(
            [sys.executable, "-m", "pytest", "--collect-only", "-q", *arguments[2:]],
            cwd=ROOT,
            capture_output=True,
            text=True,
        )
        assert found.returncode == 0, found.stdout[-2000:]
