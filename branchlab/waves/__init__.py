"""Waves: the paraxial wave that marches with the rays' Hamiltonian."""

from branchlab.waves.paraxial import ParaxialWave

__all__ = ["ParaxialWave"]
