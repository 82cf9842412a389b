"""Results in netCDF files: what is written is read back equal, complex fields included."""

import pathlib

import numpy as np
import xarray as xr

from branchlab.errors import InputError

ENGINE = "h5netcdf"


def save(result: xr.Dataset, path) -> pathlib.Path:
    """Write a result to a netCDF file; it appears whole or not at all.

    Complex variables are written as two real ones, `name_real` and `name_imag`.

    Parameters
    ----------
    result : Dataset
    path : path
        The file, replaced if it exists.

    Raises
    ------
    InputError
        The folder does not exist or cannot be written to.
    """
    path = pathlib.Path(path)
    flat = result.copy()
    for name, variable in result.variables.items():
        if np.iscomplexobj(variable):
            flat[f"{name}_real"] = variable.copy(data=variable.values.real)
            flat[f"{name}_imag"] = variable.copy(data=variable.values.imag)
            flat = flat.drop_vars(name)
        elif variable.dtype == bool:
            flat[name] = variable.copy(data=variable.values.astype(np.int8))
            flat[name].attrs["flag"] = "bool"
    compressed = {name: {"zlib": True, "complevel": 4} for name, v in flat.data_vars.items() if v.size > 1024}
    part = path.with_name(path.name + ".part")
    try:
        flat.to_netcdf(part, engine=ENGINE, encoding=compressed)
        part.replace(path)
    except OSError as fault:
        part.unlink(missing_ok=True)
        raise InputError(
            f"{path} cannot be written: {fault}. Choose a folder that exists and can be written to."
        ) from None
    return path


def load(path) -> xr.Dataset:
    """Read a result that `save` wrote.

    Raises
    ------
    InputError
        There is no such file, or it is not netCDF.
    """
    try:
        with xr.open_dataset(path, engine=ENGINE) as file:
            flat = file.load()
    except FileNotFoundError:
        raise InputError(f"there is no file {path}.") from None
    except (OSError, ValueError) as fault:
        raise InputError(f"{path} is not a netCDF file that can be read: {fault}.") from None
    for name in [n for n in flat.variables if str(n).endswith("_real") and f"{n[:-5]}_imag" in flat.variables]:
        whole = name[:-5]
        real = flat[name]
        flat[whole] = real.copy(data=real.values + 1j * flat[f"{whole}_imag"].values)
        flat = flat.drop_vars([name, f"{whole}_imag"])
    for name, variable in flat.variables.items():
        if variable.attrs.get("flag") == "bool":
            flat[name] = variable.copy(data=variable.values.astype(bool))
            del flat[name].attrs["flag"]
    return flat
