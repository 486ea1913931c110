"""The tables of a verdict, as text: cases, durations, the worst pairs, and the verdict in sentences."""

from __future__ import annotations

from typing import TYPE_CHECKING

from anneal_ref.base.estimate import Score
from anneal_ref.judgement.equivalence import Finding
from anneal_ref.studies.study import time_unit
from anneal_ref.studies.text import aligned

if TYPE_CHECKING:
    from anneal_ref.studies.assess import Judged, Verdict

HEADINGS = (
    "instance", "N", "duration", "shots", "correlation error", "perfect <", "residual energy", "(truth)", "sigma",
    "q2", "(truth)", "sigma", "fidelity", "(perfect)", "case",
)  # fmt: skip
WORDS = {"accept": "ACCEPTED", "reject": "REJECTED", "inconclusive": "INCONCLUSIVE"}


def summary(verdict: Verdict) -> str:
    """Return all tables of a verdict."""
    study, level = verdict.study, verdict.decision.level
    unit = time_unit(study.schedule)
    lines = [f"{study.name}: {len(verdict.judged)} cases, limit on the correlation error {study.acceptance.correlation_error:g}", ""]
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
    lines.append(f"Pairs of spins that depart most from the truth (adjusted p: all pairs of a case looked at together, Holm)")
    lines += [aligned([PAIR_HEADINGS, *worst_pairs(verdict)], left=(0, 1)), ""]
    for one in verdict.judged:
        lines += [f"note: {one.case.label}: {note}" for note in one.comparison.notes if not note.startswith("no fidelity")]
    lines += [f"{sentence}" for sentence in sentences(verdict)]
    lines.append(
        f"Intervals are at level {level:.0%}. \"perfect <\": what a perfect processor with the same shots stays below in 95 of 100 runs."
    )
    return "\n".join(lines)


def case_row(one: Judged) -> tuple[str, ...]:
    """Return the cells of one case, in the order of `HEADINGS`."""
    result = one.comparison
    energy, order, fidelity = (result.scores.get(name) for name in ("residual_energy", "order_parameter", "fidelity"))
    cells = [one.case.name, str(result.n_sites), f"{result.duration:g}", str(result.n_shots)]
    cells += [interval(result.correlation_error), floor_text(result.correlation_error)]
    for name, score in (("residual_energy", energy), ("order_parameter", order)):
        cells += [measured(score), f"{float(result.truth[name]):.4f}", f"{result.sigma[name]:+.1f}"] if score else ["-", "-", "-"]
    cells += [f"{fidelity.value:.3f}", floor_text(fidelity)] if fidelity else ["too few shots" if refused(one) else "-", "-"]
    return (*cells, result.verdict or "-")


def refused(one: Judged) -> str:
    """Return why there is no fidelity, or nothing."""
    return next((note for note in one.comparison.notes if note.startswith("no fidelity")), "")


PAIR_HEADINGS = ("case", "pair", "truth", "processor", "sigma", "adjusted p")


def worst_pairs(verdict: Verdict, count: int = 6) -> list[tuple[str, ...]]:
    """Return the pairs with the largest deviations in the whole study, cells in the order of `PAIR_HEADINGS`."""
    found = []
    for one in verdict.judged:
        pairs, labels = one.comparison.pairs, one.reference.anneal.instance.lattice.labels
        for k in range(min(count, len(pairs))):
            cells = (
                one.case.label, f"{labels[pairs.first[k]]}-{labels[pairs.second[k]]}", f"{pairs.truth[k]:+.4f}",
                f"{pairs.measured[k]:+.4f} ± {pairs.stat[k]:.4f}", f"{pairs.sigma[k]:+.1f}", f"{pairs.adjusted[k]:.2g}",
            )  # fmt: skip
            found.append((float(pairs.adjusted[k]), float(pairs.p[k]), cells))
    return [cells for _, _, cells in sorted(found)[:count]]


def sentences(verdict: Verdict) -> list[str]:
    """Return the verdict in plain sentences, the first of which says it all."""
    unit = time_unit(verdict.study.schedule)
    lines = [f"{WORDS[verdict.outcome]}. {headline(verdict)}"]
    for duration, finding in verdict.findings:
        if finding.outcome == "inconclusive" and finding.advice:
            lines.append(f"At {duration:g} {unit}: {finding.name.replace('_', ' ')}: {finding.advice}.".replace(" :", ":"))
    return lines


def headline(verdict: Verdict) -> str:
    """Return one sentence that says what was found at each duration, against which limit."""
    unit = time_unit(verdict.study.schedule)
    parts = [f"{_said(finding)} at {f'{duration:g} {unit}'.strip()}" for duration, finding in verdict.findings]
    text = "; ".join(parts)
    return f"{text[0].upper()}{text[1:]}."


def _said(finding: Finding) -> str:
    quantity = finding.name.replace("_", " ")
    if finding.name == "correlation_error":
        between, limit = f"{finding.low:.1%} to {finding.high:.1%}", f"{finding.limit:.3g}" if finding.limit > 1 else f"{finding.limit:.1%}"
        subject = f"the {quantity} lies between {between}".replace(" to ", " and ")
    else:
        limit = f"{finding.limit:g}"
        subject = f"the {quantity} departs from the truth by {finding.low:.3g} to {finding.high:.3g}"
    relation = {"accept": "within", "reject": "beyond", "inconclusive": "on both sides of"}[finding.outcome]
    return f"{subject}, {relation} the limit of {limit},"


def interval(score: Score) -> str:
    """Return value and interval."""
    return f"{score.value:.4f} ({score.low:.4f} to {score.high:.4f})"


def measured(score: Score) -> str:
    """Return value and standard error."""
    return f"{score.value:.4f} ± {float(score.estimate.stat):.4f}"


def floor_text(score: Score) -> str:
    """Return what a perfect processor attains."""
    return "-" if score.floor is None else f"{float(score.floor):.4f}"
