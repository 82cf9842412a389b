"""Media: v(x, y) as frozen objects. Importing the package registers every kind for JSON."""

from branchlab.media.base import Medium, SumMedium
from branchlab.media.bumps import BumpMedium
from branchlab.media.elements import Duct, Lens, Ramp
from branchlab.media.random import RandomMedium
from branchlab.media.sampled import SampledMedium
from branchlab.media.settings import Laboratory

__all__ = ["BumpMedium", "Duct", "Laboratory", "Lens", "Medium", "Ramp", "RandomMedium", "SampledMedium", "SumMedium"]
