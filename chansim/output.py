"""Writing results: CF netCDF or Zarr, never half a file, never over an older one unasked."""

import os
import shutil
import tempfile
from pathlib import Path

from chansim.errors import OutputError

EXISTING = ("keep", "replace")


def check_target(path, existing="keep"):
    """Make sure a result can be written before hours are spent on it.

    path : file (.nc) or store (.zarr); existing : "keep" or "replace"

    Raises
    ------
    OutputError : exists and is to be kept, no such folder, not writable, unknown kind of file
    """
    path = Path(path)
    if existing not in EXISTING:
        raise OutputError(f"existing={existing!r}: use one of {', '.join(EXISTING)}")
    if path.suffix not in (".nc", ".zarr"):
        raise OutputError(f"{path}: write to a name that ends in .nc (netCDF) or .zarr (Zarr)")
    if path.exists() and existing == "keep":
        raise OutputError(f"{path}: exists and is kept; choose another name or ask for replacement (--replace)")
    if not path.parent.is_dir():
        raise OutputError(f"{path}: the folder {path.parent} does not exist; make it first")
    if not os.access(path.parent, os.W_OK):
        raise OutputError(f"{path}: the folder {path.parent} is not writable")


def write_dataset(dataset, path, existing="keep"):
    """Write a result to netCDF (.nc) or Zarr (.zarr) and return the path.

    The data go to a temporary name in the same folder first and are renamed
    when complete; an interrupt leaves nothing behind. Raises OutputError.
    """
    path = Path(path)
    check_target(path, existing)
    temporary = Path(tempfile.mkdtemp(prefix=f".{path.stem}-", dir=path.parent)) / path.name
    try:
        if path.suffix == ".zarr":
            dataset.to_zarr(temporary, mode="w", consolidated=False)
        else:
            dataset.to_netcdf(temporary, engine="netcdf4", encoding=_packing(dataset))
        if path.is_dir():
            shutil.rmtree(path)
        os.replace(temporary, path)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error})") from error
    finally:
        shutil.rmtree(temporary.parent, ignore_errors=True)
    return path


def _packing(dataset):
    numbers = (name for name, v in dataset.data_vars.items() if v.dtype.kind == "f" and v.ndim > 0)
    return {name: {"zlib": True, "complevel": 4, "shuffle": True} for name in numbers}
