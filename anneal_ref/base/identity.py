"""Canonical form and content hash: the same physics has the same name, years later and on every machine."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from anneal_ref.base.errors import InputError


def canonical(value: Any) -> str:
    """Return the canonical JSON of plain data: sorted keys, no spaces, floats in shortest round-trip form.

    Arrays become their dtype, shape and the SHA-256 of their little-endian C-ordered bytes; minus zero counts as zero.

    Parameters
    ----------
    value : None, bool, int, float, str, ndarray, mapping with str keys, or sequence of these

    Raises
    ------
    InputError
        NaN, infinity, or a type that has no canonical form.

    Examples
    --------
    >>> canonical({"b": 2.0, "a": [1, None]})
    '{"a":[1,null],"b":2.0}'
    """
    return json.dumps(_plain(value), sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False)


def digest(value: Any) -> str:
    """Return the SHA-256 (64 hexadecimal digits) of the canonical form."""
    return hashlib.sha256(canonical(value).encode()).hexdigest()


def _plain(value: Any) -> Any:
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, np.bool_ | np.integer):
        return value.item()
    if isinstance(value, float | np.floating):
        number = float(value)
        if not np.isfinite(number):
            raise InputError(f"only finite numbers have an identity; got {number}")
        return number + 0.0
    if isinstance(value, np.ndarray):
        if value.dtype.kind not in "biuf":
            raise InputError(f"only arrays of numbers have an identity; got dtype {value.dtype}")
        if value.dtype.kind == "f" and not np.isfinite(value).all():
            raise InputError("only finite numbers have an identity; got an array with NaN or infinity")
        little = np.ascontiguousarray(value + 0.0 if value.dtype.kind == "f" else value)
        little = little.astype(little.dtype.newbyteorder("<"))
        return {
            "dtype": little.dtype.str,
            "shape": list(value.shape),
            "sha256": hashlib.sha256(little.tobytes()).hexdigest(),
        }
    if isinstance(value, Mapping):
        if not all(isinstance(key, str) for key in value):
            raise InputError(f"keys of a canonical form must be strings; got {list(value)!r}")
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, Sequence) and not isinstance(value, bytes):
        return [_plain(item) for item in value]
    raise InputError(
        f"a {type(value).__name__} has no canonical form; use numbers, strings, arrays, lists and mappings"
    )
