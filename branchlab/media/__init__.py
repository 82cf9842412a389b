"""Media: v(x, y) as frozen objects. Importing the package registers every kind for JSON."""

from branchlab.media.base import Medium
from branchlab.media.random import RandomMedium

__all__ = ["Medium", "RandomMedium"]
