"""`deviating`: the anneal that is run when scales, clocks and knobs are not what they say."""

from __future__ import annotations

import warnings

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, number
from anneal_ref.base.errors import AnnealRefWarning, InputError
from anneal_ref.model.anneal import Anneal, Waveform
from anneal_ref.model.instances import Instance
from anneal_ref.model.schedules import Schedule

_SAME = 1e-12  # breaks of a schedule that differ by rounding alone


def deviating(
    anneal: Anneal,
    transverse_scale: float = 0.0,
    problem_scale: float = 0.0,
    time_scale: float = 0.0,
    time_offset: float = 0.0,
    couplings: ArrayLike = 0.0,
    fields: ArrayLike = 0.0,
    weights: ArrayLike = 0.0,
) -> Anneal:
    """Return the anneal with its inputs off by the given amounts.

        G(t) -> (1 + transverse_scale) G(t)           J_ij -> J_ij + couplings_ij
        P(t) -> (1 + problem_scale) P(t + offset)     h_i  -> h_i + fields_i
        T    -> (1 + time_scale) T                    w_i  -> (1 + weights_i) w_i

    Only the offset *between* the two control lines can be seen: a delay of both is another zero of the clock. G keeps
    its times, from 0 to T, and P is ahead of it by `time_offset` (late where that is negative), held at its first value
    before its own beginning and at its last value after its own end. Nothing is lost at the ends of a usual anneal:
    |+...+> waits unchanged where P is 0, and what P does after G has gone to 0 changes no Z.

    With `start="ground"` the start is the ground state of the deviating H(0).

    Parameters
    ----------
    anneal : Anneal
    transverse_scale, problem_scale, time_scale : float
        Relative; above -1.
    time_offset : float
        In the unit of the duration, and shorter than it.
    couplings : float or array_like, shape (n_edges,)
        Absolute.
    fields : float or array_like, shape (n_sites,)
        Absolute.
    weights : float or array_like, shape (n_sites,)
        Relative; at least -1.

    Returns
    -------
    Anneal
        To be solved. With an offset its schedule belongs to no kind that is read from a file or sent to another
        process.

    Raises
    ------
    InputError

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.chain(4), ar.disorder.plus_minus(), seed=11)
    >>> other = deviating(ar.Anneal(instance, schedule, duration=2.0), problem_scale=0.1, time_offset=0.5)
    >>> other.transverse([0.0, 1.0, 2.0]).tolist(), other.problem([0.0, 1.0, 1.5, 2.0]).tolist()
    ([20.0, 10.0, 0.0], [2.75, 8.25, 11.0, 11.0])
    """
    instance = anneal.instance
    n = anneal.n_sites
    moved = Instance(
        instance.lattice,
        instance.couplings + _each("couplings", couplings, instance.n_edges),
        instance.fields + _each("fields", fields, n),
        instance.transverse * (1.0 + _each("weights", weights, n)),
        instance.name,
    )
    duration = anneal.duration * _factor("time_scale", time_scale)
    schedule = _scaled(
        anneal.schedule, _factor("transverse_scale", transverse_scale), _factor("problem_scale", problem_scale)
    )
    waveform = anneal.waveform
    ahead = number("time_offset", time_offset, unit=anneal.time_unit) / duration
    if abs(ahead) >= 1:
        raise InputError(f"time_offset must be shorter than the duration, {duration:g}; got {time_offset!r}")
    if ahead:
        schedule, waveform = _shifted(schedule, waveform, ahead), None
    with warnings.catch_warnings():
        # whoever made the anneal was warned then
        warnings.simplefilter("ignore", AnnealRefWarning)
        return Anneal(moved, schedule, duration, anneal.start, waveform)


def _factor(name: str, deviation: float) -> float:
    factor = 1.0 + number(name, deviation)
    if factor <= 0:
        raise InputError(f"{name} must be above -1; got {deviation!r}")
    return factor


def _each(name: str, values: ArrayLike, size: int) -> NDArray[np.float64]:
    array = finite(name, values)
    if array.shape not in ((), (size,)):
        raise InputError(f"{name} must be one number or have shape ({size},); got shape {array.shape}")
    return array


def _scaled(schedule: Schedule, transverse: float, problem: float) -> Schedule:
    if transverse == problem == 1.0:
        return schedule
    content = schedule.canonical_dict()
    for name, factor in (("transverse", transverse), ("problem", problem)):
        content[name] = factor * np.asarray(content[name])
    return Schedule.from_dict(content)


def _shifted(schedule: Schedule, waveform: Waveform | None, ahead: float) -> Schedule:
    """Return both strengths over the fraction u of the duration, with P(u + ahead) for P."""
    transverse, problem = schedule.transverse_pieces, schedule.problem_pieces
    if waveform is not None:
        transverse, problem = transverse.along(waveform.u, waveform.s), problem.along(waveform.u, waveform.s)
    # an anneal takes both strengths to be smooth between the same breaks
    inner = np.unique(np.concatenate((transverse.breaks, problem.breaks - ahead)))
    inner = inner[(inner > _SAME) & (inner < 1 - _SAME)]
    u = np.concatenate(([0.0], inner[np.diff(inner, prepend=-1.0) > _SAME], [1.0]))
    transverse, problem = transverse.along(u, u), problem.along(u, np.clip(u + ahead, 0.0, 1.0))
    source = {
        "kind": "pieces",
        "s": transverse.breaks,
        "transverse": transverse.controls,
        "problem": problem.controls,
        "unit": schedule.unit,
    }
    return Schedule(source, transverse, problem, schedule.unit)
