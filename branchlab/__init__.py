"""Where ray density may stand in for wave intensity in branched flow, and where it may not.

The public names, in the order of the work. Each is loaded when it is first used, so that importing the
package is quick and loads no compiler and no notebook library.
"""

import importlib
import sys
import types

_HOMES = {
    # the medium
    "RandomMedium": "branchlab.media",
    "SampledMedium": "branchlab.media",
    "Duct": "branchlab.media",
    "Lens": "branchlab.media",
    "Ramp": "branchlab.media",
    "BumpMedium": "branchlab.media",
    "settings": "branchlab.media.settings",
    # what is sent through it
    "PlaneWave": "branchlab.launch",
    "PointSource": "branchlab.launch",
    "Beam": "branchlab.launch",
    "FieldSource": "branchlab.launch",
    "AngularSpread": "branchlab.launch",
    "Setup": "branchlab.launch",
    "Band": "branchlab.launch",
    "Packet": "branchlab.launch",
    # the predictors
    "RayEnsemble": "branchlab.rays",
    "SemiclassicalSum": "branchlab.semiclassics",
    "ParaxialWave": "branchlab.waves",
    "FullWave": "branchlab.waves",
    "PacketCloud": "branchlab.rays",
    "WavePacket": "branchlab.waves",
    "overlap": "branchlab.waves",
    # the verdict
    "compare": "branchlab.compare",
    "misplaced_flux": "branchlab.compare",
    "displacement": "branchlab.compare",
    "correlation": "branchlab.compare",
    "scintillation": "branchlab.compare",
    "branches": "branchlab.compare",
    "validity_range": "branchlab.compare",
    "verdict": "branchlab.compare",
    "divergence": "branchlab.compare",
    "paraxial_error": "branchlab.studies",
    "Study": "branchlab.studies",
}
__all__ = list(_HOMES)
__version__ = "0.1.0"


class _Package(types.ModuleType):
    """Keeps `branchlab.compare` the function: importing the folder of that name would put the folder there."""

    def __setattr__(self, name, thing):
        if not (name == "compare" and isinstance(thing, types.ModuleType)):
            super().__setattr__(name, thing)


sys.modules[__name__].__class__ = _Package


def __getattr__(name):
    """Load a public name from its home on first use."""
    if name not in _HOMES:
        raise AttributeError(f"module 'branchlab' has no attribute {name!r}")
    home = importlib.import_module(_HOMES[name])
    thing = home if home.__name__.endswith(f".{name}") and not hasattr(home, name) else getattr(home, name)
    globals()[name] = thing
    return thing


def __dir__():
    """List the public names."""
    return [*__all__, "__version__"]
