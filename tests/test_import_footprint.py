"""What `import branchlab` and `branchlab --help` load: no compiler, no notebook library, no plotting."""

import subprocess
import sys

import pytest

HEAVY = ("numba", "matplotlib", "bqplot", "ipywidgets", "dask", "llvmlite", "IPython")
REPORT = "import sys\nprint(*(m for m in {heavy!r} if m in sys.modules))"


def loaded(statement):
    """Return the heavy libraries that a fresh interpreter has loaded after a statement."""
    code = f"{statement}\n{REPORT.format(heavy=HEAVY)}"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()[-1].split()


@pytest.mark.parametrize(
    "statement",
    [
        "import branchlab",
        "import branchlab as bl; dir(bl)",
        "import branchlab.errors, branchlab.values",
        "import branchlab as bl; bl.Setup(bl.RandomMedium(0.1, 1.0, 7), bl.PlaneWave(), 4.0, 8.0).to_json()",
        "import sys; sys.argv = ['branchlab', '--help']\n"
        "from branchlab.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass",
        "import sys; sys.argv = ['branchlab', 'study', '--help']\n"
        "from branchlab.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass",
    ],
    ids=["import", "dir", "lower layers", "setup", "help", "study help"],
)
def test_nothing_heavy_is_loaded(statement):
    assert loaded(statement) == []


def test_a_heavy_library_is_noticed():
    assert "numba" in loaded("import branchlab as bl; bl.RayEnsemble")


def test_import_time_is_told(record_property):
    # printed and recorded, not limited: the machine may be busy (the aim is 0.8 s)
    code = "import time\nt = time.perf_counter()\nimport branchlab\nprint(time.perf_counter() - t)"
    times = [
        float(subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout)
        for _ in range(3)
    ]
    record_property("import_seconds", min(times))
    print(f"import branchlab: {min(times):.3f} s (least of {len(times)}; aim 0.8 s)")
    assert min(times) > 0
