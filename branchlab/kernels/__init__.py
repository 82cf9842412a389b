"""Compiled loops and transforms: arrays in, arrays out; no xarray, no files, no raise."""
