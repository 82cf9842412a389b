"""Every notebook runs from top to bottom in a fresh kernel, and ends with an assertion on the science it shows."""

import ast
import pathlib

import nbformat
import pytest
from nbclient import NotebookClient

FOLDER = pathlib.Path(__file__).parents[2] / "notebooks"
NOTEBOOKS = sorted(FOLDER.glob("*.ipynb"))


def code_of(notebook):
    return [cell.source for cell in notebook.cells if cell.cell_type == "code"]


def test_there_are_notebooks():
    assert NOTEBOOKS


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda p: p.stem)
def test_notebook_is_thin_and_ends_in_an_assertion(path):
    cells = code_of(nbformat.read(path, as_version=4))
    assert len(cells) <= 15
    assert any(isinstance(node, ast.Assert) for node in ast.walk(ast.parse(cells[-1])))
    for source in cells:
        assert len(source.splitlines()) <= 12
        assert not any(isinstance(node, (ast.FunctionDef, ast.ClassDef)) for node in ast.walk(ast.parse(source)))


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda p: p.stem)
def test_notebook_runs(path, tmp_path):
    notebook = nbformat.read(path, as_version=4)
    NotebookClient(
        notebook, timeout=None, kernel_name="python3", resources={"metadata": {"path": str(tmp_path)}}
    ).execute()
    outputs = [output for cell in notebook.cells for output in cell.get("outputs", [])]
    assert sum("image/png" in output.get("data", {}) for output in outputs) == 2
    warned = [output.text for output in outputs if output.output_type == "stream" and output.name == "stderr"]
    assert warned == []
