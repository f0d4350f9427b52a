"""A result as one NetCDF file, which appears whole or not at all, and whose damage does not pass unseen."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from inverse.description.arguments import checked_path

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["load", "save"]

_SEAL = "sha256"


def save(result: xr.DataTree, path: str | os.PathLike[str]) -> Path:
    """Write a result to one NetCDF file; the file appears whole or not at all, and damage to it does not pass unseen.

    Every array carries Fletcher's checksum, which any reader of HDF5 checks; a hash of all there is, `load` checks.

    Parameters
    ----------
    result : xarray.DataTree
    path : path
        Ends in ``.nc``.

    Raises
    ------
    ValueError
        If the path does not end in .nc, its folder does not exist, or `result` is not a sampling result.
    """
    target = checked_path(path)
    if not hasattr(result, "to_netcdf") or "inverse" not in getattr(result, "attrs", {}):
        raise ValueError(f"save takes the result of sample_posterior, not {type(result).__name__}.")
    if target.suffix != ".nc":
        raise ValueError(f"'{target.name}' does not end in .nc; results are NetCDF files.")
    if not target.parent.is_dir():
        raise ValueError(f"The folder '{target.parent}' does not exist; create it first.")
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        sealed = result.copy()
        sealed.attrs[_SEAL] = _hash(result)
        sealed.to_netcdf(part, engine="h5netcdf", encoding=_checksums(result))
        part.replace(target)
    finally:
        part.unlink(missing_ok=True)
    return target


def load(path: str | os.PathLike[str]) -> xr.DataTree:
    """Read a result that `save` wrote.

    Raises
    ------
    ValueError
        If the file does not exist, is damaged or holds no result of this library.
    """
    import h5py
    import xarray as xr

    source = checked_path(path)
    if not source.is_file():
        raise ValueError(f"There is no file '{source}'.")
    try:
        # h5netcdf leaves noise behind where a file cannot be opened at all.
        h5py.File(source, "r").close()
        with xr.open_datatree(source, engine="h5netcdf") as tree:
            loaded = tree.load()
    # What damage makes of HDF5's own tables ends in any of these, some without a word.
    except (OSError, ValueError, KeyError, RuntimeError, TypeError, AttributeError, IndexError) as error:
        said = str(error) or type(error).__name__
        raise ValueError(
            f"'{source}' is damaged or not a NetCDF file this library can read ({said}); take another copy of it."
        ) from None
    if "inverse" not in loaded.attrs:
        raise ValueError(f"'{source}' holds no result of sample_posterior.")
    seal = loaded.attrs.pop(_SEAL, None)
    if seal != _hash(loaded):
        raise ValueError(
            f"'{source}' does not hold what save wrote: it is damaged or was changed since; take another copy of it."
        )
    _refuse_holes(source, loaded)
    return loaded


def _checksums(result: xr.DataTree) -> dict[str, dict[str, dict[str, Any]]]:
    """Ask for a checksum of every array; a scalar has no chunks that could carry one."""
    return {
        node.path: {
            str(name): {"fletcher32": True}
            for name, variable in node.to_dataset(inherit=False).variables.items()
            if variable.ndim and variable.size and variable.dtype.kind in "biuf"
        }
        for node in result.subtree
    }


def _hash(result: xr.DataTree) -> str:
    """Hash what a result holds: names, numbers and attributes, whatever their order and width in the file."""
    digest = hashlib.sha256()
    for node in sorted(result.subtree, key=lambda node: node.path):
        digest.update(f"{node.path}{_plain(node.attrs)}".encode())
        for name, variable in sorted(node.to_dataset(inherit=False).variables.items(), key=str):
            digest.update(f"{name}{variable.dims}{variable.shape}{_plain(variable.attrs)}".encode())
            kind = variable.dtype.kind
            wide = {"f": np.float64, "c": np.complex128, "b": np.int64, "i": np.int64, "u": np.int64}.get(
                kind
            )
            text = str(variable.values.tolist()).encode() if wide is None else None
            digest.update(text or np.ascontiguousarray(variable.values, dtype=wide).tobytes())
    return digest.hexdigest()


def _plain(attrs: Mapping[Any, Any]) -> list[tuple[str, str]]:
    return sorted((str(key), str(np.asarray(value).tolist())) for key, value in attrs.items() if key != _SEAL)


def _refuse_holes(source: Path, loaded: xr.DataTree) -> None:
    """Refuse draws of an unknown that are not finite or not laid out as chain and draw."""
    groups = loaded.children
    if "posterior" not in groups:
        raise ValueError(f"'{source}' is damaged: it has no group 'posterior'; take another copy of it.")
    for name, variable in groups["posterior"].to_dataset().data_vars.items():
        if variable.attrs.get("role") == "derived":
            continue
        if variable.dims[:2] != ("chain", "draw") or not np.isfinite(variable.values).all():
            raise ValueError(
                f"'{source}' is damaged: the draws of {name} are not finite numbers on (chain, draw); take another "
                "copy of it."
            )
