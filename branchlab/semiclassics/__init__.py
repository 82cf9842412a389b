"""Waves summed over rays."""

from branchlab.semiclassics.sum import SemiclassicalSum

__all__ = ["SemiclassicalSum"]
