"""Where a result comes from: the attributes that every Dataset carries."""

import functools
import importlib.metadata
import json
import platform

from branchlab.errors import InputError
from branchlab.launch import Setup


@functools.cache
def versions() -> dict[str, str]:
    """Return the versions of what computed a result."""
    names = ("branchlab", "numpy", "scipy", "numba", "xarray")
    return {"python": platform.python_version(), **{name: importlib.metadata.version(name) for name in names}}


def setup_of(result) -> Setup:
    """Return the setup that a result carries.

    Raises
    ------
    InputError
        The result carries none, or one that this version cannot read.
    """
    if "setup" not in result.attrs:
        raise InputError("this Dataset has no attribute 'setup': it is not a result of branchlab.")
    return Setup.from_json(result.attrs["setup"])


def provenance(setup: Setup, *, model: str) -> dict[str, str]:
    """Return the attributes of a result: complete setup, versions, sides, length unit, model.

    Parameters
    ----------
    setup : Setup
    model : str
        Which Hamiltonian: rays and waves of different models are never called a validity range.
    """
    return {
        "model": model,
        "sides": setup.sides,
        "length_unit": setup.length_unit,
        "normalisation": setup.source.normalisation,
        "setup": setup.to_json(),
        "versions": json.dumps(versions()),
    }
