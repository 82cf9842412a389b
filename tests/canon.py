"""One canonical instance of every medium and source: a new class without one fails here, at import."""

import numpy as np

from branchlab.launch import AngularSpread, Beam, FieldSource, PlaneWave, PointSource, Setup
from branchlab.launch.sources import Source
from branchlab.media import BumpMedium, Duct, Lens, Ramp, RandomMedium, SampledMedium
from branchlab.media.base import Medium

_GRID = np.linspace(-12.0, 12.0, 97)
MEDIA = [
    RandomMedium(0.08, 1.0, seed=7),
    RandomMedium(0.05, 1.0, 3, "matern", smoothness=3.0, box=(32.0, 32.0)),
    RandomMedium(0.05, 2.0, 4, "power-law", exponent=3.0, inner_scale=0.5, box=(32.0, 32.0)),
    RandomMedium(0.05, 0.8, 5, "donor-layer"),
    BumpMedium(0.06, 0.7, 0.5, seed=2),
    Duct(0.08),
    Duct(0.1, y=0.5, profile="sech"),
    Duct(0.1, y=-0.5, half_aperture=3.0),
    Lens(0.2, 1.5, x=3.0, y=-1.0),
    Ramp(slope_x=0.002, slope_y=-0.01),
    SampledMedium(0.05 * np.outer(np.cos(0.7 * _GRID), np.sin(0.9 * _GRID + 0.3)), _GRID, _GRID),
    Lens(0.1, 1.0, x=2.0) + RandomMedium(0.05, 1.0, seed=8),
]

_Y = np.linspace(-8.0, 8.0, 129)
SOURCES = [
    PlaneWave(),
    PlaneWave(0.1),
    PointSource(-1.0, 0.5),
    Beam(1.5, y=0.5, angle=0.05, focus=12.0),
    FieldSource(_Y, 1.0, 0.2 * np.cos(2.0 * np.pi * _Y / 16.0)),
    AngularSpread(PlaneWave(), 0.05, nodes=5),
]


def setup_with(*, medium=MEDIA[0], source=SOURCES[0], length=6.0, width=16.0, sides="periodic", **options):
    """Return a small setup around one canonical object."""
    return Setup(medium, source, length, width, sides, **options)


def _concrete(base):
    for cls in base.__subclasses__():
        yield from _concrete(cls)
        if not cls.__abstractmethods__ and cls.__module__.startswith("branchlab."):
            yield cls


def missing(base, instances):
    """Return the names of the concrete subclasses of `base` that have no instance in a list."""
    return sorted({c.__name__ for c in _concrete(base)} - {type(i).__name__ for i in instances})


for _base, _instances in ((Medium, MEDIA), (Source, SOURCES)):
    assert not missing(_base, _instances), f"no canonical instance of {missing(_base, _instances)}"
