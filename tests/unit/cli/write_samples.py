"""Writes a netCDF file of a wave speed, with netCDF4 and numpy alone: run as a process of its own by the tests.

    python write_samples.py FILE [fault]

The speed is a sum of a few cosines with fixed phases.
"""

import sys

import netCDF4
import numpy as np


def speed(x, y):
    """1500 m/s, uneven by some percent: smooth, with no period in the window."""
    modes = ((0.9, 0.7, 0.3), (0.5, 1.3, 1.1), (1.7, 0.4, 2.0), (0.2, 2.1, 4.0), (1.1, 1.9, 5.2), (2.3, 0.9, 0.9))
    field = sum(np.cos(a * x[:, None] + b * y[None, :] + c) for a, b, c in modes)
    return 1500.0 + 30.0 * field


def main(path, fault=""):
    x, y = np.arange(81) * 0.15, np.arange(161) * 0.15
    c = speed(x, y)
    if fault == "nan":
        c[40, 30] = np.nan
    if fault == "reversed":
        y = y[::-1]
    if fault == "uneven":
        y = y + 0.05 * (np.arange(161) == 80)
    if fault == "negative":
        c[3, 4] = -1.0
    if fault == "strong":
        c[60, 80] = 20000.0
    if fault == "rough":
        c = 1500.0 + 3.0 * np.random.default_rng(1).normal(size=c.shape)
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("y", y.size)
        file.createDimension("x", x.size)
        for name, axis in (("x", x), ("y", y)):
            variable = file.createVariable(name, "f8", (name,))
            variable.units = "mm"
            variable[:] = axis
        variable = file.createVariable("c", "f8", ("y", "x"))
        variable.units = "m/s"
        variable[:] = c.T


if __name__ == "__main__":
    main(*sys.argv[1:])
