"""Rays: traced once for every wavelength, their density, caustics and sections; the cloud that partners a packet."""

from branchlab.rays.cloud import PacketCloud
from branchlab.rays.ensemble import RayEnsemble

__all__ = ["PacketCloud", "RayEnsemble"]
