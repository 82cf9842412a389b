"""Rays: traced once for every wavelength, their density, caustics and sections."""
