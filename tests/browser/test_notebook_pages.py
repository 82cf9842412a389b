"""Every notebook, opened and run in JupyterLab: pictures on the page, no complaint of cells, page or network."""

import os
import pathlib

import nbformat
import pytest

NOTEBOOKS = sorted((pathlib.Path(__file__).parents[2] / "notebooks").glob("*.ipynb"))


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda p: p.stem)
def test_notebook_in_jupyterlab(lab, path, tmp_path):
    lab.open(nbformat.read(path, as_version=4), path.name)
    lab.run_all()
    assert lab.complaints() == []
    figures = lab.page.locator(".jp-OutputArea-output img")
    assert figures.count() >= 1
    shots = pathlib.Path(os.environ.get("BRANCHLAB_SCREENSHOTS", tmp_path))
    for theme in ("Light", "Dark"):
        lab.theme(f"JupyterLab {theme}")
        for number in range(figures.count()):
            figure = figures.nth(number)
            figure.scroll_into_view_if_needed()
            assert figure.evaluate("image => image.complete && image.naturalWidth > 400")
            lab.page.screenshot(path=shots / f"{path.stem}-{theme.lower()}-{number}.png")


def test_a_page_that_complains_is_noticed(lab):
    notebook = nbformat.v4.new_notebook(
        cells=[nbformat.v4.new_code_cell("import sys; sys.stderr.write('told by a cell')")]
    )
    lab.open(notebook, "slip.ipynb")
    lab.run_all()
    assert lab.complaints() == ["told by a cell"]
    lab.page.evaluate("() => console.error('told by the page')")
    lab.page.wait_for_timeout(100)
    assert lab.problems == ["told by the page"]
    lab.problems.clear()
