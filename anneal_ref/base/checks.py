"""Border checks: what comes in is finite, has the right shape, and belongs to the caller no longer.

Each function returns the value in the form the package works with, or raises `InputError` with what was given,
what is allowed and, where it can tell, what to do.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

from anneal_ref.base.errors import InputError


def frozen(array: NDArray[Any]) -> NDArray[Any]:
    """Return the array, made read-only in place."""
    array.flags.writeable = False
    return array


def finite(
    name: str, value: ArrayLike, shape: tuple[int | None, ...] | None = None, dtype: DTypeLike = np.float64
) -> NDArray[Any]:
    """Return a read-only copy of an array of finite numbers.

    Parameters
    ----------
    name : str
        How messages call it.
    value : array_like
    shape : tuple of int or None, optional
        The shape it must have; `None` stands for any length.
    dtype : dtype
        The type of the copy.

    Raises
    ------
    InputError
        Not numbers, another shape, NaN or infinity (the first place is named).
    """
    if isinstance(value, np.ndarray | np.generic) and np.iscomplexobj(value) and np.dtype(dtype).kind != "c":
        raise InputError(f"{name} must be an array of real numbers; got {value.dtype}; give its real part")
    try:
        array = np.array(value, dtype=dtype)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name} must be an array of numbers; got {_short(value)}") from error
    if shape is not None and (
        array.ndim != len(shape) or any(want not in (None, got) for want, got in zip(shape, array.shape, strict=True))
    ):
        wanted = (
            "("
            + ", ".join("any" if want is None else str(want) for want in shape)
            + ("," if len(shape) == 1 else "")
            + ")"
        )
        raise InputError(f"{name} must have shape {wanted}; got shape {array.shape}")
    bad = ~np.isfinite(array)
    if bad.any():
        place = tuple(int(k) for k in np.argwhere(bad)[0])
        where = f"[{', '.join(map(str, place))}]" if place else ""
        raise InputError(f"{name} must be finite; got {name}{where} = {array[place]}")
    return frozen(array)


def number(name: str, value: Any, low: float | None = None, high: float | None = None, unit: str = "") -> float:
    """Return a finite float within [low, high], or raise `InputError`."""
    allowed = f"a finite number{_range(low, high)}{' ' + unit if unit else ''}"
    if isinstance(value, bool | str | bytes) or value is None:
        raise InputError(f"{name} must be {allowed}; got {value!r}")
    try:
        result = float(value)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name} must be {allowed}; got {_short(value)}") from error
    if not math.isfinite(result) or (low is not None and result < low) or (high is not None and result > high):
        raise InputError(f"{name} must be {allowed}; got {result!r}")
    return result


def positive(name: str, value: Any, unit: str = "") -> float:
    """Return a finite float above zero, or raise `InputError`."""
    allowed = f"a positive number{' of ' + unit if unit else ''}"
    try:
        result = number(name, value)
    except InputError as error:
        raise InputError(f"{name} must be {allowed}; got {_short(value)}") from error
    if result <= 0:
        raise InputError(f"{name} must be {allowed}; got {result!r}")
    return result


def integer(name: str, value: Any, low: int | None = None, high: int | None = None) -> int:
    """Return an int within [low, high], or raise `InputError`; a float is taken only if it is whole."""
    allowed = f"a whole number{_range(low, high)}"
    whole = isinstance(value, int | np.integer) or (
        isinstance(value, float | np.floating) and float(value).is_integer()
    )
    if isinstance(value, bool | np.bool_) or not whole:
        raise InputError(f"{name} must be {allowed}; got {_short(value)}")
    result = int(value)
    if (low is not None and result < low) or (high is not None and result > high):
        raise InputError(f"{name} must be {allowed}; got {result}")
    return result


def choice(name: str, value: Any, allowed: Iterable[str]) -> str:
    """Return one of the allowed words, or raise `InputError` with the nearest of them."""
    words = list(allowed)
    if isinstance(value, str) and value in words:
        return value
    near = difflib.get_close_matches(str(value), words, n=1)
    hint = f"; did you mean {near[0]!r}?" if near else ""
    raise InputError(f"{name} must be one of {', '.join(map(repr, words))}; got {value!r}{hint}")


def signs(name: str, value: ArrayLike, shape: tuple[int | None, ...] | None = None) -> NDArray[np.int8]:
    """Return a read-only int8 copy of an array of +1 and -1, or raise `InputError`."""
    array = finite(name, value, shape)
    bad = np.abs(array) != 1
    if bad.any():
        place = tuple(int(k) for k in np.argwhere(bad)[0])
        raise InputError(f"{name} must hold +1 and -1 only; got {array[place]} at {list(place)}")
    return frozen(array.astype(np.int8))


def _range(low: float | None, high: float | None) -> str:
    if low is not None and high is not None:
        return f" from {low} to {high}"
    if low is not None:
        return f" of at least {low}"
    if high is not None:
        return f" of at most {high}"
    return ""


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."
