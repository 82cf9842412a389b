"""Write the two files of the invented basin: `python tests/reference/make_basin.py FOLDER`.

Uses netCDF4 and scipy only, nothing of branchlab: what the tests read was not made by what they test.
"""

import pathlib
import sys

import netCDF4
import numpy as np
from scipy.io import netcdf_file

EAST = np.arange(121, dtype=np.float32) * np.float32(0.25)  # km
NORTH = np.arange(81, dtype=np.float32) * np.float32(0.25) - np.float32(10.0)  # km
# (amplitude in m, wavenumbers in 1/km east and north, phase)
WAVES = [(3.0, 0.5, 0.8, 0.3), (2.0, -1.1, 0.6, 1.7), (1.5, 0.9, -1.4, 2.9), (1.0, 1.7, 0.4, 4.1)]


def depth(east, north):
    """Depth in metres: 40 m and four waves."""
    east, north = np.asarray(east, float), np.asarray(north, float)
    return 40.0 + sum(a * np.cos(p * east[None, :] + q * north[:, None] + phase) for a, p, q, phase in WAVES)


def write_netcdf4(path):
    """Depth as packed 16-bit integers, north first, as sea charts come; a second variable with a hole."""
    with netCDF4.Dataset(path, "w") as file:
        file.title = "Invented basin, no real place"
        for name, values in (("north", NORTH), ("east", EAST)):
            file.createDimension(name, values.size)
            axis = file.createVariable(name, "f4", (name,))
            axis[:] = values
            axis.units = "km"
        file.createDimension("month", 2)
        packed = file.createVariable("depth", "i2", ("north", "east"), zlib=True, fill_value=-32768)
        packed.scale_factor, packed.units = 0.002, "m"
        packed[:] = depth(EAST, NORTH)
        surveyed = file.createVariable("surveyed_depth", "f4", ("north", "east"), zlib=True, fill_value=-1.0)
        surveyed.units = "m"
        holed = np.ma.array(depth(EAST, NORTH), mask=False)
        holed[30, 50:53] = np.ma.masked
        surveyed[:] = holed
        monthly = file.createVariable("monthly_depth", "i1", ("month", "north", "east"), zlib=True)
        monthly[:] = np.stack([depth(EAST, NORTH)] * 2)


def write_netcdf3(path):
    """Long-wave speed in the classic format, x first."""
    with netcdf_file(path, "w") as file:
        for name, values in (("x", EAST), ("y", NORTH)):
            file.createDimension(name, values.size)
            axis = file.createVariable(name, "f4", (name,))
            axis[:] = values
            axis.units = "km"
        speed = file.createVariable("speed", "f8", ("x", "y"))
        speed[:] = np.sqrt(9.80665 * depth(EAST, NORTH)).T
        speed.units = "m/s"


if __name__ == "__main__":
    folder = pathlib.Path(sys.argv[1])
    write_netcdf4(folder / "basin.nc")
    write_netcdf3(folder / "basin-classic.nc")
