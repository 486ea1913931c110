"""One evaluation of a caller's function of moments or spins, with the usual slips explained."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import InputError


def evaluate(f: Callable[[Any], Any], argument: Any) -> NDArray[np.float64]:
    """Return f(argument) as an array of real numbers.

    Parameters
    ----------
    f : callable
        Gives a number or an array of numbers.
    argument : Moments or ndarray
        What f takes.

    Raises
    ------
    InputError
        A value that is no real number, or an f that takes an `Estimate` for the array inside it.
    """
    if not callable(f):
        raise InputError(f"f must be a function, such as those of anneal_ref.observables; got {f!r}")
    try:
        value = f(argument)
    except (AttributeError, TypeError) as error:
        if "Estimate" not in str(error):
            raise
        raise InputError(
            f"f failed: {error}; entries of the moments are Estimates, and their numbers are in .value, as in "
            "m.zz.value.max()"
        ) from error
    try:
        array = np.asarray(value)
        if value is None or array.dtype.kind in "cSUmM":
            raise TypeError
        return array.astype(np.float64)
    except (TypeError, ValueError) as error:
        text = repr(value)
        raise InputError(
            "f must give a real number or an array of real numbers (of an Estimate, its .value); "
            f"got {text if len(text) <= 60 else f'{text[:57]}...'}"
        ) from error
