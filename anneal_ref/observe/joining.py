"""Several runs of one instance as one: what their manifests have in common, and where each shot comes from."""

from __future__ import annotations

from collections.abc import Hashable, Sequence

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import InputError
from anneal_ref.observe.manifest import Manifest


def join_manifests(manifests: Sequence[Manifest]) -> Manifest:
    """Return what all runs, their gauges undone, say alike.

    Raises
    ------
    InputError
        Runs that differ in instance, duration or sites; gauge, batch and source may differ and are left out then.
    """
    entries = [manifest.to_dict() for manifest in manifests]
    for key in ("instance", "duration", "sites"):
        for k, entry in enumerate(entries):
            if entry.get(key) != entries[0].get(key):
                raise InputError(
                    f"runs must agree in {key}; run 0 has {entries[0].get(key)}, run {k} has {entry.get(key)} "
                    "(for_instance brings sites into one order)"
                )
    common = {key: value for key, value in entries[0].items() if all(entry.get(key) == value for entry in entries)}
    if "gauge" not in common:
        common.pop("undone", None)
    return Manifest(**common)


def join_groups(
    manifests: Sequence[Manifest], groups: Sequence[NDArray[np.int64] | None], shots: Sequence[int]
) -> NDArray[np.int64]:
    """Return the group of each shot, numbered from 0: by gauge where any run has one, else by batch, else by run.

    Groups that a run has already stay apart from each other and from those of other runs.
    """
    by = _distinction(manifests)
    numbers: dict[Hashable, int] = {}
    joined = []
    for k, (manifest, own, count) in enumerate(zip(manifests, groups, shots, strict=True)):
        if own is not None:
            found, inverse = np.unique(own, return_inverse=True)
            codes = [numbers.setdefault(("group", k, int(group)), len(numbers)) for group in found]
            joined.append(np.array(codes, dtype=np.int64)[inverse])
            continue
        mark = manifest.to_dict().get(by) if by else None
        key = ("run", k) if mark is None else (by, tuple(mark) if isinstance(mark, list) else mark)
        joined.append(np.full(count, numbers.setdefault(key, len(numbers)), dtype=np.int64))
    return np.concatenate(joined)


def unevenness(
    manifests: Sequence[Manifest], groups: Sequence[NDArray[np.int64] | None], names: Sequence[str]
) -> str | None:
    """Say which runs name no gauge where others do, or else no batch where others do; None if they are alike.

    Parameters
    ----------
    manifests, groups : sequences of Manifest and of ndarray or None
        Of the runs; one with groups of its own needs no mark.
    names : sequence of str
        What messages call the runs.
    """
    by = _distinction(manifests)
    if by is None:
        return None
    lacking = [
        name
        for name, one, own in zip(names, manifests, groups, strict=True)
        if own is None and getattr(one, by) is None
    ]
    if not lacking:
        return None
    marked = sum(getattr(one, by) is not None for one in manifests)
    listed = ", ".join(lacking[:6]) + (f" and {len(lacking) - 6} more" if len(lacking) > 6 else "")
    what = "were taken as they are, each as a gauge of its own" if by == "gauge" else "count as a batch each"
    remedy = ", all +1 where there was none" if by == "gauge" else ""
    return (
        f"{marked} of {len(manifests)} runs give a {by} and {len(lacking)} do not ({listed}); those without {what}; "
        f"give every run its {by}{remedy}"
    )


def _distinction(manifests: Sequence[Manifest]) -> str | None:
    """Return what tells the runs apart: the gauge where any has one, else the batch where any has one."""
    return next((key for key in ("gauge", "batch") if any(getattr(one, key) is not None for one in manifests)), None)
