"""Waves summed over rays."""
