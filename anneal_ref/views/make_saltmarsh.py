"""Make the samples of the demo *Saltmarsh*, once: `python -m anneal_ref.views.make_saltmarsh FOLDER`.

Saltmarsh is the small analog processor that an invented coastal metrology laboratory wants to accept. It solves every
anneal of `study.toml` exactly, but for three imperfections that are stated here and that a study should find:

- all couplings are 4 % too weak (an error of the energy scale);
- on the ladder, one coupler is 25 % too weak on top of that, and only that one;
- on the triangular piece, the spin with label 6 is read out wrongly: up as down with a chance of 3 %, down as up
  with 6 %.

Every case has 1000 shots, 40 in each of 25 gauges. The spins are written as the processor reads them, gauge not
undone, each file with its manifest.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.exact.state_vector import StateVector
from anneal_ref.base.identity import digest
from anneal_ref.model.anneal import Anneal
from anneal_ref.model.instances import Instance

SCALE = 0.96
WEAK_COUPLER = ("ladder", (6, 8), 0.75)
READOUT = ("triangle", 6, 0.03, 0.06)
GAUGES, SHOTS = 25, 40
SEED = 2


def make(folder: Path) -> None:
    """Write the samples files of the study in a folder; they must not be there yet."""
    from anneal_ref.studies.building import make_instance, make_schedule
    from anneal_ref.studies.schema import read_table

    path = folder / "study.toml"
    table = read_table(path)
    schedule = make_schedule(table.schedule, path)
    for k, entry in enumerate(table.instance):
        instance = make_instance(entry, k, path)
        for duration in table.durations or []:
            meant = Anneal(instance, schedule, duration=duration)
            state = StateVector(tolerance=1e-6).evolve(replace(meant, instance=imperfect(entry.name, instance)))
            for gauge in range(GAUGES):
                seed = int(digest({"seed": SEED, "case": entry.name, "duration": duration, "gauge": gauge})[:12], 16)
                signs = (1 - 2 * np.random.default_rng(seed).integers(0, 2, instance.n_sites)).astype(np.int8)
                # the dynamics is the same in every gauge, so that one evolution serves all; the readout is not
                spins = read_out(entry.name, instance, state.sample(SHOTS, seed + 1).spins * signs, seed + 2)
                file = folder / "samples" / f"{entry.name}_{duration:g}ns" / f"gauge{gauge:02d}.csv"
                file.parent.mkdir(parents=True, exist_ok=True)
                file.write_text(as_text(instance, duration, signs, gauge, spins), encoding="utf-8")


def imperfect(name: str, instance: Instance) -> Instance:
    """Return the instance that the processor solves when it is given this one."""
    couplings = SCALE * np.array(instance.couplings)
    if name == WEAK_COUPLER[0]:
        pair = set(WEAK_COUPLER[1])
        labels = instance.lattice.labels[instance.lattice.edges].tolist()
        couplings[[set(edge) for edge in labels].index(pair)] *= WEAK_COUPLER[2]
    return Instance(instance.lattice, couplings, fields=instance.fields)


def read_out(name: str, instance: Instance, spins: NDArray[np.int8], seed: int) -> NDArray[np.int8]:
    """Return what the processor reads when the spins are these, shape (shots, n_sites)."""
    wanted, label, up_wrong, down_wrong = READOUT
    if name != wanted:
        return spins
    site = instance.lattice.labels.tolist().index(label)
    wrong = np.random.default_rng(seed).random(len(spins)) < np.where(spins[:, site] > 0, up_wrong, down_wrong)
    read = spins.copy()
    read[wrong, site] *= -1
    return read


def as_text(instance: Instance, duration: float, gauge: NDArray[np.int8], batch: int, spins: NDArray[np.int8]) -> str:
    """Return the text of a samples file with bits: 0 for up, 1 for down."""
    lines = [
        "# format: anneal_ref samples 1",
        "# values: bits",
        f"# instance: {instance.identity}",
        f"# duration: {duration:g}",
        f"# gauge: {gauge.tolist()}",
        f"# batch: {batch}",
        "# source: Saltmarsh (invented)",
        ",".join(f"s{label}" for label in instance.lattice.labels),
    ]
    lines += [",".join("0" if spin > 0 else "1" for spin in row) for row in spins]
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    make(Path(sys.argv[1]))
