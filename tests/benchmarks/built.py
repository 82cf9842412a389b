"""C code to race against, built by gcc on this machine."""

import ctypes
import shutil
import subprocess
from pathlib import Path

import pytest


def library_from(source, folder, *flags):
    """Return the compiled library of a C file beside this one; skips the test where there is no gcc.

    Compiled and linked by two calls: gcc that links with -ffast-math adds start-up code which sets flush-to-zero for
    the whole process, so that every later test would lose its subnormal numbers.
    """
    gcc = shutil.which("gcc")
    if gcc is None:
        pytest.skip("no gcc on this machine: nothing to compare with")
    path = Path(__file__).with_name(source)
    code, target = folder / f"{path.stem}.o", folder / f"{path.stem}.so"
    subprocess.run([gcc, "-O3", "-march=native", "-fopenmp", "-fPIC", *flags, "-c", "-o", code, path], check=True)
    subprocess.run([gcc, "-fopenmp", "-shared", "-o", target, code, "-lm"], check=True)
    return ctypes.CDLL(str(target))
