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
    by = next((key for key in ("gauge", "batch") if any(getattr(one, key) is not None for one in manifests)), None)
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
