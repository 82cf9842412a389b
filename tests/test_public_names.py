"""The public names are exactly these, in the order of the work; each can be loaded and says what it is."""

import inspect
import types

import pytest

import branchlab

NAMES = [
    # the medium
    "RandomMedium", "SampledMedium", "Duct", "Lens", "Ramp", "BumpMedium", "settings",
    # what is sent through it
    "PlaneWave", "PointSource", "Beam", "FieldSource", "AngularSpread", "Setup", "Band", "Packet",
    # the predictors
    "RayEnsemble", "SemiclassicalSum", "ParaxialWave", "FullWave", "PacketCloud", "WavePacket", "overlap",
    # the verdict
    "compare", "misplaced_flux", "displacement", "correlation", "scintillation", "branches", "validity_range", "verdict",
    "divergence", "paraxial_error", "Study",
]  # fmt: skip


def faults(package):
    """Return what is wrong with the public names of a package, in words."""
    found = []
    if list(package.__all__) != NAMES:
        found.append(f"names differ: {sorted(set(package.__all__) ^ set(NAMES)) or 'their order'}")
    for name in package.__all__:
        thing = getattr(package, name, None)
        if thing is None:
            found.append(f"{name} cannot be loaded")
            continue
        if not (inspect.getdoc(thing) or "").strip():
            found.append(f"{name} has no docstring")
        if inspect.isclass(thing):
            found += [
                f"{name}.{method} has no docstring"
                for method, body in vars(thing).items()
                if not method.startswith("_") and callable(body) and not (body.__doc__ or "").strip()
            ]
    return found


def test_public_names():
    assert faults(branchlab) == []


def test_faults_are_noticed():
    package = types.SimpleNamespace(**{name: getattr(branchlab, name) for name in NAMES}, __all__=[*NAMES])
    assert faults(package) == []

    class Bare:
        def act(self):
            pass

    package.Duct = Bare
    assert faults(package) == ["Duct has no docstring", "Duct.act has no docstring"]
    package.Duct = None
    assert faults(package) == ["Duct cannot be loaded"]
    package = types.SimpleNamespace(**vars(branchlab))
    package.__all__ = NAMES[::-1]
    assert faults(package) == ["names differ: their order"]
    package.__all__ = [*NAMES, "Bench"]
    assert faults(package) == ["names differ: ['Bench']", "Bench cannot be loaded"]


def test_compare_stays_a_function():
    # `branchlab.compare` is also a folder: importing from it must not hide the function
    import branchlab.compare.measures

    assert callable(branchlab.compare)
    assert branchlab.compare.__module__.startswith("branchlab.compare")


def test_unknown_names_are_refused():
    with pytest.raises(AttributeError, match="has no attribute 'RayEnsembel'"):
        _ = branchlab.RayEnsembel
    assert set(NAMES) <= set(dir(branchlab))
