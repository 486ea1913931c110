"""Tables of the command line that belong to no object of the library."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from anneal_ref.backends.memory import readable_bytes
from anneal_ref.studies.assess import Planned
from anneal_ref.studies.study import Study, time_unit
from anneal_ref.studies.text import aligned, counted


def plan_table(study: Study, planned: Sequence[Planned], folder: Path) -> str:
    """Return the cost of every case of a study, what is archived already, and the sum of what is left.

    Parameters
    ----------
    study : Study
    planned : sequence of Planned
    folder : Path
        Of the archive.
    """
    unit = time_unit(study.schedule)
    heads = (
        "instance",
        "lattice",
        "N",
        f"duration ({unit})" if unit else "duration",
        "files",
        "memory",
        "layers",
        "seconds",
        "",
    )
    rows = [heads]
    for one in planned:
        anneal = one.case.anneal
        rows.append(
            (
                one.case.name, anneal.instance.lattice.name, str(anneal.n_sites), f"{anneal.duration:g}",
                str(len(one.case.files) or "none yet"), readable_bytes(one.plan.bytes), str(one.plan.layers),
                f"{one.seconds:.2g}", "archived" if one.archived else "to do",
            )
        )  # fmt: skip
    left = [one for one in planned if not one.archived]
    lines = [f"{study.name}: {counted(len(planned), 'case')}", "", aligned(rows, left=(0, 1, 8)), ""]
    if left:
        seconds, most = sum(one.seconds for one in left), max(one.plan.bytes for one in left)
        lines.append(
            f"To do: {counted(len(left), 'reference')}, about {_duration(seconds)} on one thread, at most "
            f"{readable_bytes(most)} of memory at a time."
        )
    else:
        lines.append("Nothing to solve: every reference is in the archive.")
    bare = [one.case.label for one in planned if not one.case.files]
    if bare:
        more = f" and {len(bare) - 6} more" if len(bare) > 6 else ""
        which = "any case" if len(bare) == len(planned) else "; ".join(bare[:6]) + more
        lines.append(f"No samples yet for {which}: references can be computed, a verdict cannot.")
    lines.append(
        f"Archive: {folder}. Layers are those of the finest of three runs; seconds are those of all runs, roughly, "
        "without compilation."
    )
    return "\n".join(lines)


def _duration(seconds: float) -> str:
    for limit, factor, unit in ((120.0, 1.0, "s"), (7200.0, 60.0, "min"), (172800.0, 3600.0, "h")):
        if seconds < limit:
            return f"{seconds / factor:.2g} {unit}"
    return f"{seconds / 86400.0:.2g} days"
