"""Safe records on disk: one HDF5 file that is either whole, or not there.

A record is built in memory, sealed, written aside in its folder, synced and renamed, so that a crash, a full disk or
an interrupt leaves at most a `.part` file that nobody reads. Two SHA-256 sums guard it:

- the attribute `sha256` covers the contents (attributes, and name, dimensions, type, shape and bytes of every array),
  whatever the layout of the file: it survives a repack by other tools;
- the seal, one line of text behind the end of the HDF5 data, covers every byte of the file. HDF5 has bytes that no
  reader looks at; with the seal a flipped bit is found wherever it is. HDF5 readers ignore what follows their data.
"""

from __future__ import annotations

import hashlib
import os
import secrets
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import frozen
from anneal_ref.base.errors import ArchiveError, InputError, in_words
from anneal_ref.base.identity import canonical
from anneal_ref.base.provenance import library_version, now

FORMAT = "anneal_ref"
FORMAT_VERSION = 1
PART = ".part"

_HEADER = ("format", "format_version", "library_version", "created_at", "sha256")
_SEAL = b"\nanneal_ref seal sha256 "
_SEAL_LENGTH = len(_SEAL) + 64 + 1
_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_LONGEST_TEXT = 60_000  # HDF5 keeps an attribute in the object header, which ends at 64 KiB
_WORTH_COMPRESSING = 4096  # bytes; below, a chunk index costs more than it saves
_CHUNK = 1 << 20  # bytes
_NO_VALUES = "This is a netCDF dimension but not a netCDF variable. %9d"


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """What one file holds.

    Parameters
    ----------
    attributes : dict of str to str, int or float
        Few and short (60 000 bytes of text at most); finite numbers.
    arrays : dict of str to ndarray
        Integer or floating-point arrays of one axis or more, not empty.
    dims : dict of str to tuple of str
        Names of the axes of every array. A dimension has one length in the whole record and comes once in an array.
        An array that bears the name of its only dimension holds the coordinates of that dimension.
    header : dict of str to str or int
        Filled by the reader: format, format_version, library_version, created_at, sha256.

    Examples
    --------
    >>> record = Record({"kind": "note"}, {"z": np.zeros((2, 3))}, {"z": ("run", "site")})
    >>> record.lengths
    {'run': 2, 'site': 3}
    """

    attributes: dict[str, str | int | float]
    arrays: dict[str, NDArray[Any]]
    dims: dict[str, tuple[str, ...]]
    header: dict[str, str | int] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Check names, types and lengths."""
        for name, value in self.attributes.items():
            if name in _HEADER:
                raise InputError(f"the attribute name {name!r} is taken by the header; use another")
            if not isinstance(value, str | int | float) or isinstance(value, bool):
                raise InputError(f"attribute {name!r} must be a str, int or float; got a {type(value).__name__}")
            if isinstance(value, str) and len(value.encode()) > _LONGEST_TEXT:
                raise InputError(f"attribute {name!r} has {len(value)} characters; store it as an array of bytes")
        canonical(self.attributes)  # refuses nan and infinity
        if set(self.arrays) != set(self.dims):
            given = f"{sorted(self.arrays)} and {sorted(self.dims)}"
            raise InputError(f"arrays and dims must name the same arrays; got {given}")
        for name, array in self.arrays.items():
            names = self.dims[name]
            if array.dtype.kind not in "iuf" or array.size == 0 or array.ndim != len(names):
                raise InputError(
                    f"array {name!r} must hold integers or floats, have entries, and one name per axis; "
                    f"got dtype {array.dtype}, shape {array.shape}, dims {names}"
                )
            if len(set(names)) != len(names) or (name in self.all_dims and names != (name,)):
                raise InputError(
                    f"array {name!r} must name each axis apart and not bear the name of another axis; got {names}"
                )
        _ = self.lengths

    @property
    def all_dims(self) -> set[str]:
        """Names of all dimensions."""
        return {dim for names in self.dims.values() for dim in names}

    @property
    def lengths(self) -> dict[str, int]:
        """Length of every dimension, in the order in which they first come."""
        lengths: dict[str, int] = {}
        for name, array in self.arrays.items():
            for dim, length in zip(self.dims[name], array.shape, strict=True):
                if lengths.setdefault(dim, length) != length:
                    raise InputError(
                        f"dimension {dim!r} must have one length; array {name!r} has {length}, not {lengths[dim]}"
                    )
        return lengths

    def digest(self) -> str:
        """SHA-256 (64 hexadecimal digits) of the contents without the header."""
        total = hashlib.sha256(canonical(self.attributes).encode())
        for name in sorted(self.arrays):
            array = _little(self.arrays[name])
            total.update(canonical([name, list(self.dims[name]), array.dtype.str, list(array.shape)]).encode())
            total.update(array.tobytes())
        return total.hexdigest()


def write_record(path: str | os.PathLike[str], record: Record) -> Path:
    """Write a record so that the file is either whole or not there.

    Parameters
    ----------
    path : path
        Where the file will be; a file of that name is replaced in one step. Its folder must exist.
    record : Record

    Returns
    -------
    Path
        The path of the file.

    Raises
    ------
    ArchiveError
        The folder is missing or read-only, the disk is full, or any other refusal of the file system. Nothing of the
        new file is left; an old file of that name is untouched.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = write_record(f"{folder}/a.h5", Record({"note": "hello"}, {"z": np.eye(2)}, {"z": ("site", "other")}))
    ...     read_record(path).attributes
    {'note': 'hello'}
    """
    path = Path(path)
    image = _pack(record)
    seal = _SEAL + hashlib.sha256(image).hexdigest().encode() + b"\n"
    part = path.with_name(f"{path.name}.{os.getpid()}-{secrets.token_hex(4)}{PART}")
    try:
        _write_aside(part, image + seal)
        os.replace(part, path)
    except BaseException as error:
        part.unlink(missing_ok=True)
        if isinstance(error, OSError):
            raise _refused(path, error) from error
        raise
    _sync_folder(path.parent)
    return path


def read_record(path: str | os.PathLike[str]) -> Record:
    """Read a record and verify every byte of it.

    Parameters
    ----------
    path : path
        A file of `write_record`.

    Returns
    -------
    Record
        With read-only arrays and the header filled.

    Raises
    ------
    ArchiveError
        No such file, not a file of this package, cut short, altered anywhere, or of a newer format.
    """
    path = Path(path)
    try:
        content = path.read_bytes()
    except OSError as error:
        raise _broken(path, f"it cannot be read ({in_words(error)})", "check the path and its permissions") from error
    image, seal = content[:-_SEAL_LENGTH], content[-_SEAL_LENGTH:]
    if not content.startswith(_SIGNATURE):
        raise _broken(path, "it is not an HDF5 file, or its beginning is damaged", _RESTORE)
    if not seal.startswith(_SEAL):
        raise _broken(path, *_without_seal(content))
    if seal[len(_SEAL) :] != hashlib.sha256(image).hexdigest().encode() + b"\n":
        raise _broken(path, "its bytes do not match its checksum", _RESTORE)
    try:
        header, record = _unpack(image)
    except (OSError, KeyError, ValueError, RuntimeError, InputError) as error:
        raise _broken(path, f"its contents cannot be decoded ({error})", _RESTORE) from error
    if header.get("format") != FORMAT:
        raise _broken(path, "it is not a file of this package", "take it out of the folder")
    version = header.get("format_version")
    if not isinstance(version, int) or version > FORMAT_VERSION:
        raise _broken(
            path,
            f"its format version is {version}, this library (version {library_version()}) reads up to {FORMAT_VERSION}",
            f"install the library version that wrote it ({header.get('library_version')}) or a later one",
        )
    if record.digest() != header.get("sha256"):
        raise _broken(path, "its contents do not match their checksum", _RESTORE)
    return record


_RESTORE = "restore it from a copy, or compute it again; the file was left as it is"


def _pack(record: Record) -> bytes:
    """Return the HDF5 file as bytes; building in memory keeps the failures of disks out of the HDF5 library."""
    header = {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "library_version": library_version(),
        "created_at": now(),
        "sha256": record.digest(),
    }
    with h5py.File(secrets.token_hex(8), "w", driver="core", backing_store=False, libver=("earliest", "v110")) as file:
        for key, value in {**header, **record.attributes}.items():
            file.attrs[key] = value
        scales = {}
        for dim, length in record.lengths.items():
            if dim in record.arrays:
                scale = _create(file, dim, record.arrays[dim])
                scale.make_scale(dim)
            else:
                scale = file.create_dataset(dim, shape=(length,), dtype=">f4")
                scale.make_scale(_NO_VALUES % length)
            scales[dim] = scale
        for name, array in record.arrays.items():
            if name not in scales:
                dataset = _create(file, name, array)
                for axis, dim in enumerate(record.dims[name]):
                    dataset.dims[axis].attach_scale(scales[dim])
        file.flush()
        return bytes(file.id.get_file_image())


def _create(file: Any, name: str, array: NDArray[Any]) -> Any:
    array = _little(array)
    if array.nbytes < _WORTH_COMPRESSING:
        return file.create_dataset(name, data=array)
    rows = max(1, min(array.shape[0], _CHUNK * array.shape[0] // array.nbytes))
    return file.create_dataset(
        name,
        data=array,
        chunks=(rows, *array.shape[1:]),
        shuffle=array.itemsize > 1,
        compression="gzip",
        compression_opts=1,
        fletcher32=True,
    )


def _unpack(image: bytes) -> tuple[dict[str, Any], Record]:
    with h5py.File(h5py.h5f.open_file_image(image)) as file:
        attributes = {key: _plain(value) for key, value in file.attrs.items()}
        header = {key: attributes.pop(key) for key in _HEADER if key in attributes}
        arrays, dims = {}, {}
        names_of = {}
        for name, dataset in file.items():
            if dataset.is_scale:
                names_of[dataset.id] = name
        for name, dataset in file.items():
            if not dataset.is_scale:
                dims[name] = tuple(names_of[axis[0].id] for axis in dataset.dims)
            elif dataset.attrs["NAME"].decode() == name:
                dims[name] = (name,)
            else:
                continue
            arrays[name] = frozen(dataset[...])
        return header, Record(attributes, arrays, dims, header)


def _plain(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value


def _little(array: NDArray[Any]) -> NDArray[Any]:
    return np.ascontiguousarray(array, dtype=array.dtype.newbyteorder("<"))


def _write_aside(part: Path, content: bytes) -> None:
    descriptor = os.open(part, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)
    with open(descriptor, "wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())


def _sync_folder(folder: Path) -> None:
    """Make the rename itself durable, where the system can."""
    if os.name == "posix":
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def _without_seal(content: bytes) -> tuple[str, str]:
    """Say why a file has no seal: another program's, or one of ours that lost its end."""
    try:
        with h5py.File(h5py.h5f.open_file_image(content)) as file:
            ours = _plain(file.attrs.get("format")) == FORMAT
    except (OSError, KeyError, ValueError, RuntimeError):
        ours = True
    if ours:
        return "it is cut short, or was changed after it was written", _RESTORE
    return "it is not a file of this package", "take it out of the folder"


def _broken(path: Path, problem: str, advice: str) -> ArchiveError:
    return ArchiveError(f"cannot use {path}: {problem}; {advice}", path=str(path), problem=problem)


def _refused(path: Path, error: OSError) -> ArchiveError:
    problem = in_words(error)
    return ArchiveError(
        f"cannot write {path}: {problem}; nothing of it was left behind; check that the folder exists, may be written "
        "and has room, or choose another one",
        path=str(path),
        problem=problem,
    )
