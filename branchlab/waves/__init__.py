"""Waves: the paraxial wave that marches with the rays' Hamiltonian, and packets in time."""

from branchlab.waves.packet import WavePacket, overlap
from branchlab.waves.paraxial import ParaxialWave

__all__ = ["ParaxialWave", "WavePacket", "overlap"]
