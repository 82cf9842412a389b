"""Waves: the paraxial wave that marches with the rays' Hamiltonian, the full stationary wave, and packets in time."""

from branchlab.waves.full import FullWave
from branchlab.waves.packet import WavePacket, overlap
from branchlab.waves.paraxial import ParaxialWave

__all__ = ["FullWave", "ParaxialWave", "WavePacket", "overlap"]
