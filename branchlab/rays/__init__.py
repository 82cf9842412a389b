"""Rays: traced once for every wavelength, their density, caustics and sections."""

from branchlab.rays.ensemble import RayEnsemble

__all__ = ["RayEnsemble"]
