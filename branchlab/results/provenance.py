"""Where a result comes from: the attributes that every Dataset carries."""

import functools
import importlib.metadata
import json
import platform


@functools.cache
def versions() -> dict[str, str]:
    """Return the versions of what computed a result."""
    names = ("branchlab", "numpy", "scipy", "numba", "xarray")
    return {"python": platform.python_version(), **{name: importlib.metadata.version(name) for name in names}}


def provenance(setup, *, model: str) -> dict[str, str]:
    """Return the attributes of a result: complete setup, versions, sides, length unit, model.

    Parameters
    ----------
    setup : Setup
        Anything with `to_json`, `sides` and `length_unit`.
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
