"""The tables of a verdict, as text: cases, durations, the worst pairs, and the verdict in sentences."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from anneal_ref.base.estimate import Score
from anneal_ref.judgement.equivalence import Finding
from anneal_ref.studies.study import time_unit
from anneal_ref.studies.text import aligned

if TYPE_CHECKING:
    from anneal_ref.studies.assess import Judged, Verdict

HEADINGS = (
    "instance", "N", "duration", "shots", "correlation error", "perfect <", "energy", "truth", "sigma",
    "q2", "truth", "sigma", "fidelity", "perfect", "this case",
)  # fmt: skip
PAIR_HEADINGS = ("case", "pair", "truth", "processor", "sigma", "adjusted p")
WORDS = {"accept": "ACCEPTED", "reject": "REJECTED", "inconclusive": "INCONCLUSIVE"}


def summary(verdict: Verdict) -> str:
    """Return all tables of a verdict."""
    study, level = verdict.study, verdict.decision.level
    unit = time_unit(study.schedule)
    lines = [
        f"{study.name}: {len(verdict.judged)} cases, limit on the correlation error "
        f"{study.acceptance.correlation_error:g}",
        "",
    ]
    lines.append(aligned([HEADINGS, *(case_row(one) for one in verdict.judged)], left=(0, len(HEADINGS) - 1)))
    lines.append("")
    rows = [("pooled at", "instances", "shots", "correlation error", "perfect <", "disorder ±", "verdict")]
    for duration, pooled in verdict.pooled:
        disorder = "-" if pooled.score.disorder is None else f"{pooled.score.disorder:.2g}"
        rows.append(
            (
                f"{duration:g} {unit}".strip(), str(pooled.n_instances), str(pooled.n_shots), interval(pooled.score),
                floor_text(pooled.score), disorder, verdict.outcome_at(duration),
            )
        )  # fmt: skip
    lines += [aligned(rows, left=(0, 6)), ""]
    lines.append("pairs of spins that depart most (adjusted p: all pairs of a case looked at together, Holm)")
    lines += [aligned([PAIR_HEADINGS, *worst_pairs(verdict)], left=(0, 1)), *suspects(verdict), ""]
    for one in verdict.judged:
        lines += [f"note: {one.case.label}: {note}" for note in one.comparison.notes if note != refused(one)]
    lines.append(
        f"intervals at level {level:.0%}; perfect <: what a perfect processor with the same shots stays below in 95 "
        "of 100 runs;"
    )
    lines += ["energy: residual energy per spin in units of J; sigma: (processor - truth) in standard errors", ""]
    lines += [f"{WORDS[verdict.outcome]}. {sentences(verdict)[0]}", *sentences(verdict)[1:]]
    return "\n".join(lines)


def case_row(one: Judged) -> tuple[str, ...]:
    """Return the cells of one case, in the order of `HEADINGS`."""
    result = one.comparison
    energy, order, fidelity = (result.scores.get(name) for name in ("residual_energy", "order_parameter", "fidelity"))
    cells = [one.case.name, str(result.n_sites), f"{result.duration:g}", str(result.n_shots)]
    cells += [interval(result.correlation_error), floor_text(result.correlation_error)]
    for name, score in (("residual_energy", energy), ("order_parameter", order)):
        cells += (
            [measured(score), f"{float(result.truth[name]):.4f}", f"{result.sigma[name]:+.1f}"]
            if score
            else ["-", "-", "-"]
        )
    cells += (
        [f"{fidelity.value:.3f}", floor_text(fidelity)]
        if fidelity
        else ["too few shots" if "shots" in refused(one) else "-", "-"]
    )
    return (*cells, result.verdict or "-")


def refused(one: Judged) -> str:
    """Return why there is no fidelity, or nothing."""
    return next((note for note in one.comparison.notes if "fidelity" in note), "")


def worst_pairs(verdict: Verdict, count: int = 6, each: int = 2) -> list[tuple[str, ...]]:
    """Return the largest deviations in the whole study, at most `each` of a case, in the order of `PAIR_HEADINGS`."""
    found = []
    for one in verdict.judged:
        pairs, labels = one.comparison.pairs, one.reference.anneal.instance.lattice.labels
        for k in range(min(each, len(pairs))):
            cells = (
                one.case.label, f"{labels[pairs.first[k]]}-{labels[pairs.second[k]]}", f"{pairs.truth[k]:+.4f}",
                f"{pairs.measured[k]:+.4f} ± {pairs.stat[k]:.4f}", f"{pairs.sigma[k]:+.1f}", f"{pairs.adjusted[k]:.2g}",
            )  # fmt: skip
            found.append((float(pairs.adjusted[k]), float(pairs.p[k]), cells))
    return [cells for _, _, cells in sorted(found)[:count]]


def suspects(verdict: Verdict) -> list[str]:
    """Return a sentence for each case with significant pairs: how many, and which spin they have in common."""
    lines = []
    for one in verdict.judged:
        pairs, labels = one.comparison.pairs, one.reference.anneal.instance.lattice.labels
        found = pairs.significant(verdict.decision.level)
        if found:
            sigma, gain = pairs.site_sigma(), pairs.site_gain()
            worst = int(np.argmax(sigma))
            lines.append(
                f"{one.case.label}: {found} of {len(pairs)} pairs depart; most involved is spin {labels[worst]} (rms "
                f"{sigma[worst]:.1f} sigma, its correlations {gain[worst]:.3f} times the true ones)"
            )
    return lines


def sentences(verdict: Verdict) -> list[str]:
    """Return the verdict in plain sentences: first what was found, then what would settle what is open."""
    lines = [headline(verdict)]
    for duration, finding in verdict.findings:
        if finding.outcome == "inconclusive" and finding.advice:
            advice = finding.advice.replace(
                "gauges or batches, spread as these would", "gauges or batches, spread as these, would"
            )
            lines.append(f"At {_at(verdict, duration)}, {finding.name.replace('_', ' ')}: {advice}.")
    return lines


def headline(verdict: Verdict) -> str:
    """Return in a sentence or two whether the processor meets its limits, where not, and by how much."""
    kinds = {kind: [one for one in verdict.findings if one[1].outcome == kind] for kind in WORDS}
    limits = "the limit" if len(verdict.study.acceptance.limits) == 1 else "the limits"
    decisive = kinds[verdict.outcome]
    places = _places(verdict, decisive)
    if verdict.outcome == "accept":
        text = f"The processor meets {limits} at {places}"
    elif verdict.outcome == "reject":
        text = f"The processor misses {limits} at {places}"
    else:
        text = f"The samples do not settle whether the processor meets {limits} at {places}"
    text += f": {_details(verdict, decisive)}."
    if kinds["inconclusive"] and verdict.outcome == "reject":
        text += f" At {_places(verdict, kinds['inconclusive'])} the samples do not settle it."
    if kinds["accept"] and verdict.outcome != "accept":
        meets = f" At {_places(verdict, kinds['accept'])} it meets {limits}"
        text += f"{meets}: {_details(verdict, kinds['accept'])}."
    return text


def _details(verdict: Verdict, findings: list[tuple[float, Finding]], most: int = 4) -> str:
    """Say what each finding found, with its duration where there are several."""
    several = len({at for at, _ in findings}) > 1
    parts = [
        f"at {_at(verdict, at)} {_said(finding)}" if several else _said(finding) for at, finding in findings[:most]
    ]
    return "; ".join(parts) + (f"; and {len(findings) - most} more" if len(findings) > most else "")


def _places(verdict: Verdict, findings: list[tuple[float, Finding]]) -> str:
    places = [_at(verdict, at) for at in dict.fromkeys(at for at, _ in findings)]
    return places[0] if len(places) == 1 else f"{', '.join(places[:-1])} and {places[-1]}"


def _at(verdict: Verdict, duration: float) -> str:
    return f"{duration:g} {time_unit(verdict.study.schedule)}".strip()


def _said(finding: Finding) -> str:
    relative = finding.name == "correlation_error"
    low, high, limit = (
        f"{100 * x:.3g} %" if relative else f"{x:.3g}" for x in (finding.low, finding.high, finding.limit)
    )
    what = "pair correlations are off" if relative else f"the {finding.name.replace('_', ' ')} is off"
    if finding.outcome == "accept":
        return f"{what} by at most {high} (limit {limit})"
    if finding.outcome == "reject":
        return f"{what} by at least {low} (limit {limit})"
    return f"{what} by an amount between {low} and {high} (limit {limit})"


def interval(score: Score) -> str:
    """Return value and interval."""
    return f"{score.value:.3f} ({score.low:.3f} to {score.high:.3f})"


def measured(score: Score) -> str:
    """Return value and standard error, in four decimals."""
    return f"{score.value:.4f} ± {float(score.estimate.stat):.4f}"


def floor_text(score: Score) -> str:
    """Return what a perfect processor attains."""
    return "-" if score.floor is None else f"{float(score.floor):.3f}"
