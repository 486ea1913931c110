"""Sample files: read with every doubt refused, written so that they read back the same.

CSV (.csv, .txt, .dat) is described in `anneal_ref.observe.text`. NPY holds the array alone. NPZ holds `spins` and optionally
`counts`, `groups`, `values` ("spins" or "bits") and `manifest` (JSON text). HDF5 (.h5, .hdf5) has the attributes `format`, `n_sites` and
`manifest` (JSON text) and the datasets `bits` (see `anneal_ref.observe.bits`) and optionally `groups`, with checksums. Beside any of them a sidecar
`<file>.manifest.json` is read; NPY needs it to keep its manifest.
"""

from __future__ import annotations

import os
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import IO, Any, Literal

import h5py
import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import choice
from anneal_ref.base.errors import InputError
from anneal_ref.observe import text
from anneal_ref.observe.bits import pack, unpack
from anneal_ref.observe.manifest import FORMAT, VERSION, Manifest, check_format
from anneal_ref.observe.table import Table, expand, to_spins

Contents = tuple[NDArray[np.int8], Manifest, NDArray[np.int64] | None]


def read(path: Path, values: Literal["spins", "bits"] | None = None, manifest: Manifest | None = None) -> Contents:
    """Return spins, manifest and groups (or None) of a file; see `Samples.read`."""
    if values is not None:
        choice("values", values, ("spins", "bits"))
    reader = _format(path)[0]
    if not path.is_file():
        raise InputError(f"{path}: no such file")
    if path.stat().st_size == 0:
        raise InputError(f"{path}: the file is empty; a sample file holds at least one shot")
    table = reader(path)
    if values is not None and table.values not in (None, values):
        raise InputError(f"{path}: the file says that it holds {table.values}, the caller says {values}; drop the argument if the file is right")
    spins, groups = expand(to_spins(table, values or table.values), table)
    found = table.manifest
    sidecar = _sidecar(path)
    if sidecar.is_file():
        beside = Manifest.from_json(sidecar.read_text(encoding="utf-8"), str(sidecar))
        found = found.merged(beside, (str(path), str(sidecar)))
    if manifest is not None:
        found = found.merged(manifest, (str(path), "the manifest given by the caller"))
    if found.n_columns not in (None, spins.shape[1]):
        raise InputError(f"{path}: the manifest speaks of {found.n_columns} sites; the file has {spins.shape[1]} columns of spins")
    return spins, found, groups


def write(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    """Write a file in the format of its suffix; see `Samples.write`."""
    _format(path)[1](path, spins, manifest, groups)


def _format(path: Path) -> tuple[Callable[[Path], Table], Callable[..., None]]:
    suffix = path.suffix.lower()
    if suffix not in _FORMATS:
        raise InputError(f"{path}: a sample file ends in one of {', '.join(_FORMATS)}; got {suffix or 'no suffix'!r}")
    return _FORMATS[suffix]


def _sidecar(path: Path) -> Path:
    return path.with_name(path.name + ".manifest.json")


def _aside(path: Path, fill: Callable[[IO[bytes]], None]) -> None:
    """Write beside the file, sync, and put it in place in one step."""
    part = path.with_name(path.name + ".part")
    try:
        with part.open("w+b") as file:
            fill(file)
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, path)
    finally:
        part.unlink(missing_ok=True)


def _write_text(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    _aside(path, lambda file: text.write(file, spins, manifest, groups))


def _array(value: Any, path: Path, name: str, ndim: int) -> NDArray[Any]:
    if value.dtype.kind not in "biuf" or value.ndim != ndim or 0 in value.shape:
        shape = "(n_shots, n_sites)" if ndim == 2 else "(n_shots,)"
        raise InputError(f"{path}: {name} must be numbers of shape {shape}; got dtype {value.dtype}, shape {value.shape}")
    return np.asarray(value)


def _whole(value: Any, path: Path, name: str, low: int | None, length: int) -> NDArray[np.int64]:
    array = _array(value, path, name, 1)
    if len(array) != length:
        raise InputError(f"{path}: {name} must have one entry for each of {length} shots; got {len(array)}")
    bad = ~np.isfinite(array) | (array != np.round(array)) | ((array < low) if low is not None else False)
    if bad.any():
        k = int(bad.argmax())
        raise InputError(f"{path}: {name}[{k}] must be a whole number{'' if low is None else f' of at least {low}'}; got {array[k]}")
    return array.astype(np.int64)


def _read_npy(path: Path) -> Table:
    try:
        array = np.load(path, allow_pickle=False)
    except (ValueError, EOFError, OSError) as error:
        raise InputError(f"{path}: not readable as NPY: {error}") from error
    if not isinstance(array, np.ndarray):
        raise InputError(f"{path}: the file is no NPY array; an NPZ archive ends in .npz")
    return Table(_array(array, path, "the array", 2), str(path))


def _write_npy(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    if groups is not None:
        raise InputError(f"{path}: NPY has no room for the groups of the shots; write .npz, .h5 or .csv")
    _aside(path, lambda file: np.save(file, spins))
    # always written, so that no sidecar of an earlier file stays behind
    _aside(_sidecar(path), lambda file: (file.write(manifest.to_json().encode()), None)[1])


def _read_npz(path: Path) -> Table:
    try:
        with np.load(path, allow_pickle=False) as file:
            arrays = {name: file[name] for name in file.files}
    except (ValueError, EOFError, OSError, zipfile.BadZipFile, AttributeError) as error:
        raise InputError(f"{path}: not readable as NPZ: {error}") from error
    known = ("spins", "counts", "groups", "values", "manifest")
    unknown = sorted(set(arrays) - set(known))
    if "spins" not in arrays or unknown:
        raise InputError(f"{path}: an NPZ file holds spins and optionally {', '.join(known[1:])}; got {', '.join(arrays) or 'nothing'}")
    spins = _array(arrays["spins"], path, "spins", 2)
    return Table(
        spins,
        str(path),
        values=choice(f"{path}: values", str(arrays["values"]), ("spins", "bits")) if "values" in arrays else None,
        manifest=Manifest.from_json(str(arrays["manifest"]), f"{path}: manifest") if "manifest" in arrays else Manifest(),
        counts=_whole(arrays["counts"], path, "counts", 0, len(spins)) if "counts" in arrays else None,
        groups=_whole(arrays["groups"], path, "groups", None, len(spins)) if "groups" in arrays else None,
    )


def _write_npz(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    arrays: dict[str, Any] = {"spins": spins, "values": np.array("spins"), "manifest": np.array(manifest.to_json())}
    if groups is not None:
        arrays["groups"] = groups
    _aside(path, lambda file: np.savez_compressed(file, allow_pickle=False, **arrays))


def _read_hdf5(path: Path) -> Table:
    try:
        with h5py.File(path, "r") as file:
            check_format(file.attrs.get("format", "none"), str(path))
            n_sites = int(file.attrs["n_sites"])
            bits = np.asarray(file["bits"])
            groups = np.asarray(file["groups"]) if "groups" in file else None
            manifest = Manifest.from_json(str(file.attrs["manifest"]), f"{path}: manifest")
    except (OSError, KeyError) as error:
        raise InputError(f"{path}: not readable as an HDF5 sample file: {error}") from error
    try:
        spins = unpack(bits, n_sites)
    except InputError as error:
        raise InputError(f"{path}: {error}") from error
    return Table(
        _array(spins, path, "bits", 2),
        str(path),
        values="spins",
        manifest=manifest,
        groups=None if groups is None else _whole(groups, path, "groups", None, len(spins)),
    )


def _write_hdf5(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    def fill(part: IO[bytes]) -> None:
        with h5py.File(part, "w") as file:
            file.attrs["format"] = f"{FORMAT} {VERSION}"
            file.attrs["n_sites"] = spins.shape[1]
            file.attrs["manifest"] = manifest.to_json()
            file.create_dataset("bits", data=pack(spins), fletcher32=True, chunks=True)
            if groups is not None:
                file.create_dataset("groups", data=groups, fletcher32=True, compression="gzip", chunks=True)

    _aside(path, fill)


_TEXT = (text.read, _write_text)
_HDF5 = (_read_hdf5, _write_hdf5)
_FORMATS: dict[str, tuple[Callable[[Path], Table], Callable[..., None]]] = {
    ".csv": _TEXT,
    ".txt": _TEXT,
    ".dat": _TEXT,
    ".npy": (_read_npy, _write_npy),
    ".npz": (_read_npz, _write_npz),
    ".h5": _HDF5,
    ".hdf5": _HDF5,
}
