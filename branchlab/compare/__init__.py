"""The referee: what rays and wave have in common at a resolution, where they part, and why."""

from branchlab.compare.branches import branches
from branchlab.compare.comparison import compare
from branchlab.compare.divergence import divergence
from branchlab.compare.measures import correlation, displacement, misplaced_flux
from branchlab.compare.scintillation import scintillation
from branchlab.compare.smoothing import smooth
from branchlab.compare.validity import validity_range
from branchlab.compare.verdict import verdict

__all__ = [
    "branches",
    "compare",
    "correlation",
    "displacement",
    "divergence",
    "misplaced_flux",
    "scintillation",
    "smooth",
    "validity_range",
    "verdict",
]
