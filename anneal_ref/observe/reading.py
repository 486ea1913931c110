"""Sample files: read with every doubt refused, written so that they read back the same.

CSV (.csv, .txt, .dat) is described in `anneal_ref.observe.text`. NPY holds the array alone. NPZ holds `spins` and
optionally `counts`, `groups`, `values` ("spins" or "bits") and `manifest` (JSON text). HDF5 (.h5, .hdf5) is a record of
`anneal_ref.base.storage` with the attributes `kind`, `version`, `n_sites` and `manifest` (JSON text), the array
`bits` (packed spins, see `anneal_ref.observe.bits`) and optionally `groups`. Beside any of them a sidecar
`<file>.manifest.json` is read; NPY needs it to keep its manifest.
"""

from __future__ import annotations

import os
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import IO, Any, Literal

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import choice
from anneal_ref.base.errors import AnnealRefError, InputError, in_words
from anneal_ref.base.storage import PART, Record, read_record, write_record
from anneal_ref.observe import text
from anneal_ref.observe.bits import pack, unpack
from anneal_ref.observe.manifest import VERSION, Manifest
from anneal_ref.observe.table import Table, expand, to_spins

_KIND = "samples"

Contents = tuple[NDArray[np.int8], Manifest, NDArray[np.int64] | None]


def read(
    path: Path,
    values: Literal["spins", "bits"] | None = None,
    manifest: Manifest | None = None,
    values_by: str = "the argument `values`",
) -> Contents:
    """Return spins, manifest and groups (or None) of a file; see `Samples.read`.

    `values_by` is what messages call the place where `values` was said: an argument, an option or a key of a file.
    """
    if values is not None:
        choice("values", values, ("spins", "bits"))
    reader = _format(path)[0]
    if not path.is_file():
        raise InputError(f"{path}: no such file")
    if path.stat().st_size == 0:
        raise InputError(f"{path}: the file is empty; a sample file holds at least one shot")
    try:
        table = reader(path)
    except AnnealRefError:
        raise
    except OSError as error:
        raise InputError(f"{path}: the file cannot be read: {in_words(error)}") from error
    if reader is text.read and values is not None and table.values not in (None, values):
        raise InputError(
            f"{path}: the file says that it holds {table.values}, and {values_by} says {values}; it is meant for files "
            "that do not say, so remove it if the file is right"
        )
    spins, groups = expand(to_spins(table, table.values or values), table)
    found = table.manifest
    file = sidecar(path)
    if file.is_file():
        try:
            said = file.read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as error:
            raise InputError(f"{file}: the manifest cannot be read: {in_words(error)}") from error
        beside = Manifest.from_json(said, str(file))
        found = found.merged(beside, (str(path), str(file)))
    if manifest is not None:
        found = found.merged(manifest, (str(path), "the manifest given by the caller"))
    if found.n_columns not in (None, spins.shape[1]):
        raise InputError(
            f"{path}: the manifest speaks of {found.n_columns} sites; the file has {spins.shape[1]} columns of spins"
        )
    return spins, found, groups


def write(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    """Write a file in the format of its suffix; see `Samples.write`."""
    _format(path)[1](path, spins, manifest, groups)


def _format(path: Path) -> tuple[Callable[[Path], Table], Callable[..., None]]:
    suffix = path.suffix.lower()
    if suffix not in _FORMATS:
        raise InputError(f"{path}: a sample file ends in one of {', '.join(_FORMATS)}; got {suffix or 'no suffix'!r}")
    return _FORMATS[suffix]


def sidecar(path: Path) -> Path:
    """Return where the manifest of a samples file may lie beside it."""
    return path.with_name(path.name + ".manifest.json")


def _aside(path: Path, fill: Callable[[IO[bytes]], object]) -> None:
    """Write beside the file, sync, and put it in place in one step."""
    part = path.with_name(path.name + PART)
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
        given = f"dtype {value.dtype}, shape {value.shape}"
        raise InputError(f"{path}: {name} must be numbers of shape {shape}; got {given}")
    return np.asarray(value)


def _whole(value: Any, path: Path, name: str, low: int | None, length: int) -> NDArray[np.int64]:
    array = _array(value, path, name, 1)
    if len(array) != length:
        raise InputError(f"{path}: {name} must have one entry for each of {length} shots; got {len(array)}")
    bad = ~np.isfinite(array) | (array != np.round(array)) | ((array < low) if low is not None else False)
    if bad.any():
        k = int(bad.argmax())
        limit = "" if low is None else f" of at least {low}"
        raise InputError(f"{path}: {name}[{k}] must be a whole number{limit}; got {array[k]}")
    return array.astype(np.int64)


def _read_npy(path: Path) -> Table:
    try:
        with path.open("rb") as file:
            array = np.load(file, allow_pickle=False)
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
    _aside(sidecar(path), lambda file: file.write(manifest.to_json().encode()))


def _read_npz(path: Path) -> Table:
    try:
        with path.open("rb") as file, np.load(file, allow_pickle=False) as archive:
            arrays = {name: archive[name] for name in archive.files}
    except (ValueError, EOFError, OSError, zipfile.BadZipFile, AttributeError) as error:
        raise InputError(f"{path}: not readable as NPZ: {error}") from error
    known = ("spins", "counts", "groups", "values", "manifest")
    unknown = sorted(set(arrays) - set(known))
    if "spins" not in arrays or unknown:
        given = ", ".join(arrays) or "nothing"
        raise InputError(f"{path}: an NPZ file holds spins and optionally {', '.join(known[1:])}; got {given}")
    spins = _array(arrays["spins"], path, "spins", 2)
    manifest = str(arrays["manifest"]) if "manifest" in arrays else "{}"
    return Table(
        spins,
        str(path),
        values=choice(f"{path}: values", str(arrays["values"]), ("spins", "bits")) if "values" in arrays else None,
        manifest=Manifest.from_json(manifest, f"{path}: manifest"),
        counts=_whole(arrays["counts"], path, "counts", 0, len(spins)) if "counts" in arrays else None,
        groups=_whole(arrays["groups"], path, "groups", None, len(spins)) if "groups" in arrays else None,
    )


def _write_npz(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    arrays: dict[str, Any] = {"spins": spins, "values": np.array("spins"), "manifest": np.array(manifest.to_json())}
    if groups is not None:
        arrays["groups"] = groups
    _aside(path, lambda file: np.savez_compressed(file, **arrays))


def _read_hdf5(path: Path) -> Table:
    record = read_record(path)
    kind = (record.attributes.get("kind"), record.attributes.get("version"))
    if kind != (_KIND, VERSION):
        given = f"{kind[0]!r} and {kind[1]!r}"
        raise InputError(f"{path}: a sample file has kind {_KIND!r} and version {VERSION}; got {given}")
    groups = record.arrays.get("groups")
    spins = unpack(record.arrays["bits"], int(record.attributes["n_sites"]))
    return Table(
        spins,
        str(path),
        values="spins",
        manifest=Manifest.from_json(str(record.attributes["manifest"]), f"{path}: manifest"),
        groups=None if groups is None else groups.astype(np.int64),
    )


def _write_hdf5(path: Path, spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    attributes: dict[str, str | int | float] = {"kind": _KIND, "version": VERSION, "n_sites": spins.shape[1]}
    arrays: dict[str, NDArray[Any]] = {"bits": pack(spins)}
    dims: dict[str, tuple[str, ...]] = {"bits": ("shot", "byte")}
    if groups is not None:
        arrays["groups"] = groups
        dims["groups"] = ("shot",)
    write_record(path, Record(attributes | {"manifest": manifest.to_json()}, arrays, dims))


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
