"""Imports run downwards: each folder may import only from folders below it. The tables here are the design."""

import ast
import pathlib

import pytest

PACKAGE = pathlib.Path(__file__).parents[1] / "branchlab"
LEVELS = [
    {"errors", "conventions"}, {"values"}, {"kernels"}, {"media"}, {"launch"}, {"results"}, {"rays", "waves"},
    {"semiclassics"}, {"compare"}, {"studies"}, {"session"}, {"widgets", "page", "cli"},
]  # fmt: skip
LEVEL = {name: i for i, names in enumerate(LEVELS) for name in names}
NARROW = {  # folders that may see less than their level allows
    "errors": set(),
    "conventions": set(),
    "kernels": set(),
    "compare": {"errors", "conventions", "values", "results"},
    "semiclassics": {"errors", "conventions", "values", "kernels", "media", "launch", "results", "rays"},
    "widgets": {"errors", "conventions", "results", "session"},
    "page": {"errors", "conventions", "results"},
    "cli": {"errors", "conventions", "values", "media", "launch", "results", "studies", "page"},
}
OUTSIDE = {  # libraries with one home
    "ipywidgets": {"widgets"}, "bqplot": {"widgets"}, "IPython": {"widgets"}, "traitlets": {"session", "widgets"},
    "dask": {"studies"}, "distributed": {"studies"}, "zarr": {"results", "studies"}, "numba": {"kernels"},
    "pyfftw": {"kernels"}, "matplotlib": {"page"}, "argparse": {"cli"}, "tqdm": {"cli"},
}  # fmt: skip
FACADE = {"branchlab", "importlib", "sys", "types"}  # what __init__.py may import: its names come when they are used


def imports(path):
    """Yield every module a file imports, inside functions too, and those it loads by name."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            yield from (f"{'.' * node.level}{node.module or ''}.{a.name}" for a in node.names)
        elif isinstance(node, ast.Import):
            yield from (a.name for a in node.names)
        elif isinstance(node, ast.Call) and ast.unparse(node.func).endswith("import_module"):
            yield from (a.value for a in node.args if isinstance(a, ast.Constant))


def folder_of(path):
    """Return the first folder below the package, or the name of a file that lies there itself."""
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def fault(path):
    """Return the first forbidden import of a file in words, or None."""
    here = folder_of(path)
    if here == "__init__":
        strange = [name for name in imports(path) if name.split(".")[0] not in FACADE]
        return f"{path.name} imports {strange[0]}: the public names load when they are used" if strange else None
    if here == "__main__":
        here = "cli"
    if here not in LEVEL:
        return f"{here}/ has no level: add it to LEVELS"
    for name in imports(path):
        root, *rest = name.split(".")
        if not root:
            return f"{path} imports {name}: a relative import"
        if here not in OUTSIDE.get(root, {here}):
            return f"{path} imports {root}, which belongs in {sorted(OUTSIDE[root])}"
        if root != "branchlab" or not rest or rest[0] in (here, "__version__"):
            continue
        below = {f for f, level in LEVEL.items() if level < LEVEL[here]}
        if rest[0] not in NARROW.get(here, below):
            return f"{path} imports branchlab.{rest[0]}, which {here}/ may not see"
    return None


FILES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_run_downwards(path):
    assert fault(path) is None, fault(path)


def own_imports_inside_functions(path):
    """Yield the places where a function imports branchlab: a cycle hidden there is still a cycle."""
    for function in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(function, (ast.FunctionDef, ast.AsyncFunctionDef)):
            for node in ast.walk(function):
                names = []
                if isinstance(node, ast.ImportFrom):
                    names = [node.module or "."]
                elif isinstance(node, ast.Import):
                    names = [a.name for a in node.names]
                if any(name.split(".")[0] in ("branchlab", "") for name in names):
                    yield f"{path.name}:{node.lineno} imports {names[0]} inside {function.name}()"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_own_imports_stand_at_the_top(path):
    assert list(own_imports_inside_functions(path)) == []


@pytest.mark.parametrize(
    ("file", "line", "reason"),
    [
        ("waves/helmholtz.py", "from branchlab.rays import density", "may not see"),
        ("rays/trace.py", "from branchlab.waves import march", "may not see"),
        ("semiclassics/sum.py", "from branchlab.waves import march", "may not see"),
        ("compare/measures.py", "def f():\n    import branchlab.waves.full", "may not see"),
        ("compare/measures.py", "from branchlab.launch import Setup", "may not see"),
        ("kernels/phase.py", "from branchlab import errors", "may not see"),
        ("values.py", "from branchlab.media import Medium", "may not see"),
        ("media/sampled.py", "import importlib\nimportlib.import_module('branchlab.rays')", "may not see"),
        ("media/sampled.py", "from .base import Medium", "relative"),
        ("session/views.py", "import bqplot", "belongs in"),
        ("rays/density.py", "import matplotlib.pyplot as plt", "belongs in"),
        ("rays/density.py", "from numba import njit", "belongs in"),
        ("novel/thing.py", "", "no level"),
        ("__init__.py", "import xarray", "when they are used"),
        ("__main__.py", "from branchlab.rays import RayEnsemble", "may not see"),
    ],
)
def test_a_wrong_import_is_noticed(file, line, reason, tmp_path, monkeypatch):
    monkeypatch.setattr(f"{__name__}.PACKAGE", tmp_path)
    path = tmp_path / file
    path.parent.mkdir(exist_ok=True)
    path.write_text(line + "\n", encoding="utf-8")
    assert reason in fault(path)


def test_an_import_inside_a_function_is_noticed(tmp_path):
    path = tmp_path / "late.py"
    path.write_text("def f():\n    from branchlab import errors\n", encoding="utf-8")
    assert len(list(own_imports_inside_functions(path))) == 1
