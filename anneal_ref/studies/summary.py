"""The tables of a verdict, as text: cases, durations, the worst pairs, and the verdict in sentences."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from anneal_ref.base.estimate import Score
from anneal_ref.judgement.compare import missed
from anneal_ref.judgement.comparison import EXCLUDED, Comparison
from anneal_ref.judgement.deviations import p_text
from anneal_ref.judgement.equivalence import Finding
from anneal_ref.judgement.fidelity import Refusal
from anneal_ref.studies.study import time_unit
from anneal_ref.studies.text import aligned, counted

if TYPE_CHECKING:
    from anneal_ref.studies.assess import Judged, Verdict

SCORE_HEADINGS = (
    "instance", "duration", "this case", "correlation error", "perfect <", "fidelity", "plain/perfect", "log-lik.",
    "perfect", "sigma",
)  # fmt: skip
FIELD_HEADINGS = ("<Z> error", "perfect <")
ENERGY_HEADINGS = (
    "instance", "duration", "residual energy", "truth", "sigma", "q2", "truth", "sigma", "N", "shots",
)  # fmt: skip
POOLED_HEADINGS = ("pooled", "verdict", "correlation error", "perfect <", "disorder", "instances", "shots")
PAIR_HEADINGS = ("case", "pair", "truth", "processor", "sigma", "adjusted p")
WORDS = {"accept": "ACCEPTED", "reject": "REJECTED", "inconclusive": "INCONCLUSIVE"}


def summary(verdict: Verdict) -> str:
    """Return all tables of a verdict."""
    study, level = verdict.study, verdict.decision.level
    lines = [
        f"{study.name}: {counted(len(verdict.judged), 'case')}, limit on the correlation error "
        f"{study.acceptance.correlation_error:g}",
        "",
    ]
    lines += [aligned(score_table(verdict), left=(0, 2)), ""]
    lines += [aligned([ENERGY_HEADINGS, *map(energy_row, verdict.judged)]), ""]
    if pooled_tells_more(verdict):
        lines += [aligned(pooled_table(verdict), left=(0, 1)), ""]
    lines.append("pairs of spins that depart most (adjusted p: all pairs of a case looked at together, Holm)")
    lines += [aligned([PAIR_HEADINGS, *worst_pairs(verdict)], left=(0, 1)), *suspects(verdict), ""]
    lines += [f"note: {note}" for note in notes(verdict)]
    lines.append(
        f"intervals at level {level:.0%}; perfect <: what a perfect processor with the same shots stays below in 95 "
        "of 100 runs;"
    )
    lines.append(
        "the verdict rests on one-sided bounds at this level, which lie inside the two-sided intervals of the table"
    )
    lines.append("sigma: (processor - truth) in standard errors; residual energy per spin in units of J")
    lines.append("plain/perfect: fidelity with the noise of shots left in, of the processor and of a perfect one")
    if has_fields(verdict):
        lines.append("with fields: correlation errors are those of <ZZ> - <Z><Z>, pairs are listed with plain <ZZ>;")
        lines.append("<Z> error: root mean square over sites of (processor - truth), shot noise taken out")
    if pooled_tells_more(verdict):
        lines.append("disorder: what the finite number of instances adds if they stand for their whole ensemble")
    lines += ["log-lik.: log-likelihood per shot under the truth, in nats, beside what a perfect processor scores", ""]
    lines += [f"{WORDS[verdict.outcome]}. {sentences(verdict)[0]}", *sentences(verdict)[1:]]
    return "\n".join(lines)


def has_fields(verdict: Verdict) -> bool:
    """Return whether any instance has fields, so that <Z> is judged."""
    return any(one.comparison.has_fields for one in verdict.judged)


def pooled_tells_more(verdict: Verdict) -> bool:
    """Return whether rows pooled over instances say anything that the rows of the cases do not."""
    several = any(pooled.n_instances > 1 for _, pooled in verdict.pooled)
    alone = [(verdict.outcome_at(one.comparison.duration), one.comparison.verdict) for one in verdict.judged]
    return several or any(at_duration != of_case for at_duration, of_case in alone)


def score_table(verdict: Verdict) -> list[tuple[str, ...]]:
    """Return headings and a row of scores for each case; with fields, two columns tell of <Z>."""
    rows = [score_row(one) for one in verdict.judged]
    if not has_fields(verdict):
        return [SCORE_HEADINGS, *rows]
    place = SCORE_HEADINGS.index("fidelity")
    fields = [_field_cells(one.comparison) for one in verdict.judged]
    return [
        (*row[:place], *more, *row[place:])
        for row, more in zip([SCORE_HEADINGS, *rows], [FIELD_HEADINGS, *fields], strict=True)
    ]


def _field_cells(result: Comparison) -> tuple[str, ...]:
    score = result.scores["magnetisation_error"]
    return (interval(score), floor_text(score)) if result.has_fields else ("-", "-")


def pooled_table(verdict: Verdict) -> list[tuple[str, ...]]:
    """Return headings and a row for each duration; with fields, a column tells of <Z>."""
    rows = pooled_rows(verdict)
    if not has_fields(verdict):
        return [POOLED_HEADINGS, *rows]
    place = POOLED_HEADINGS.index("disorder")
    cells = [FIELD_HEADINGS[0]]
    for _, pooled in verdict.pooled:
        low, high = pooled.magnetisation.interval(pooled.score.level)
        cells.append(f"{pooled.magnetisation.value:.3f} ({low:.3f} to {high:.3f})" if pooled.has_fields else "-")
    return [(*row[:place], cell, *row[place:]) for row, cell in zip([POOLED_HEADINGS, *rows], cells, strict=True)]


def score_row(one: Judged) -> tuple[str, ...]:
    """Return the scores of one case, cells in the order of `SCORE_HEADINGS`."""
    result = one.comparison
    error, likelihood = result.correlation_error, result.scores.get("log_likelihood")
    cells = [one.case.name, f"{result.duration:g}", result.verdict or "-", interval(error), floor_text(error)]
    if isinstance(result.fidelity, Refusal):
        cells += [result.fidelity.short, "-"]
    else:
        cells.append(interval(result.fidelity.score))
        cells.append(f"{result.fidelity.plain:.3f}/{float(result.fidelity.plain_floor):.3f}")
    if likelihood:
        cells += [f"{likelihood.value:.3f}", floor_text(likelihood), f"{result.sigma['log_likelihood']:+.1f}"]
    else:
        cells += ["-", "-", "-"]
    return tuple(cells)


def energy_row(one: Judged) -> tuple[str, ...]:
    """Return energy and order of one case, cells in the order of `ENERGY_HEADINGS`."""
    result = one.comparison
    cells = [one.case.name, f"{result.duration:g}"]
    for name in ("residual_energy", "order_parameter"):
        score = result.scores[name]
        cells.append(f"{score.value:.4f} ± {float(score.estimate.stat):.4f}")
        cells += [f"{float(result.truth[name]):.4f}", f"{result.sigma[name]:+.1f}"]
    return (*cells, str(result.n_sites), str(result.n_shots))


def pooled_rows(verdict: Verdict) -> list[tuple[str, ...]]:
    """Return a row for each duration, cells in the order of `POOLED_HEADINGS`."""
    rows = []
    for duration, pooled in verdict.pooled:
        cells = [f"all at {_at(verdict, duration)}", verdict.outcome_at(duration), interval(pooled.score)]
        cells += [floor_text(pooled.score), disorder_text(pooled.score), str(pooled.n_instances), str(pooled.n_shots)]
        rows.append(tuple(cells))
    return rows


def notes(verdict: Verdict) -> list[str]:
    """Return what the reader should know about the cases, each note once with its cases."""
    cases: dict[str, list[str]] = {}
    for one in verdict.judged:
        for note in (*one.notes, *one.comparison.notes):
            if note == missed(one.reference) and good_enough(verdict, one):
                continue
            cases.setdefault(note, []).append(one.case.label)
    lines = []
    for note, labels in cases.items():
        others = f" and {len(labels) - 6} more" if len(labels) > 6 else ""
        where = "every case" if len(labels) == len(verdict.judged) else "; ".join(labels[:6]) + others
        lines.append(f"{note} ({where})")
    return lines


def good_enough(verdict: Verdict, one: Judged) -> bool:
    """Return whether a truth has the error that the study asks for, whatever it was made for."""
    return one.reference.settled and one.reference.error <= verdict.study.table.truth.tolerance


def worst_pairs(verdict: Verdict, count: int = 6, each: int = 2) -> list[tuple[str, ...]]:
    """Return the largest deviations in the whole study, at most `each` of a case, in the order of `PAIR_HEADINGS`."""
    found = []
    for one in verdict.judged:
        pairs, labels = one.comparison.pairs, one.reference.anneal.instance.lattice.labels
        for k in range(min(each, len(pairs))):
            cells = (
                one.case.label, f"{labels[pairs.first[k]]}-{labels[pairs.second[k]]}", f"{pairs.truth[k]:+.4f}",
                f"{pairs.measured[k]:+.4f} ± {pairs.stat[k]:.4f}", f"{pairs.sigma[k]:+.1f}",
                p_text(float(pairs.adjusted[k])),
            )  # fmt: skip
            found.append((float(pairs.adjusted[k]), float(pairs.p[k]), cells))
    return [cells for _, _, cells in sorted(found)[:count]]


def suspects(verdict: Verdict, most: int = 8) -> list[str]:
    """Return a sentence for each case with significant pairs: how many, and the spin that most of them share."""
    found: list[tuple[float, str]] = []
    for one in verdict.judged:
        pairs, labels = one.comparison.pairs, one.reference.anneal.instance.lattice.labels
        count = pairs.significant(verdict.decision.level)
        if count:
            sigma, gain = pairs.site_sigma(), pairs.site_gain()
            text = f"{one.case.label}: {count} of {len(pairs)} pairs depart"
            shares = pairs.shares(verdict.decision.level)
            worst = int(np.lexsort((-sigma, -shares))[0])
            if shares[worst] > 1:
                many = "all" if shares[worst] == count else str(shares[worst])
                text += (
                    f"; {many} of them share spin {labels[worst]} "
                    f"(rms {sigma[worst]:.1f} sigma, its correlations {gain[worst]:.3f} times the true ones)"
                )
            found.append((float(sigma.max()), text))
    least = sorted((sigma for sigma, _ in found), reverse=True)[: most + 1]
    shown = [text for sigma, text in found if len(least) <= most or sigma > least[-1]]
    return shown + (
        [f"and {counted(len(found) - len(shown), 'more case')} with pairs that depart"]
        if len(shown) < len(found)
        else []
    )


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
    limits = "the limit" if len({finding.name for _, finding in verdict.findings}) == 1 else "the limits"
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
        shared = {at for at, _ in kinds["accept"]} & {at for at, _ in decisive}
        meets = " Within its limit" if shared else f" At {_places(verdict, kinds['accept'])} it meets {limits}"
        text += f"{meets}: {_details(verdict, kinds['accept'])}."
    return f"{text}{_reservation(verdict)}"


def _reservation(verdict: Verdict) -> str:
    """Say that an accepted processor's samples are excluded by the truth, where their likelihood tells so."""
    sigmas = {one.case.label: one.comparison.sigma.get("log_likelihood", 0.0) for one in verdict.judged}
    excluded = [label for label, sigma in sigmas.items() if sigma < EXCLUDED]
    if verdict.outcome != "accept" or not excluded:
        return ""
    worst = min(excluded, key=lambda label: sigmas[label])
    return (
        f" But within these limits it departs from the truth beyond doubt in {len(excluded)} of "
        f"{counted(len(sigmas), 'case')}: "
        f"its samples are less likely than a perfect processor's, at worst by {-sigmas[worst]:.0f} standard errors "
        f"({worst})."
    )


def _details(verdict: Verdict, findings: list[tuple[float, Finding]], most: int = 4) -> str:
    """Say what each finding found, with its duration where there are several; of those that accept, the worst."""
    if all(finding.outcome == "accept" for _, finding in findings):
        worst: dict[str, Finding] = {}
        for _, finding in findings:
            if finding.name not in worst or finding.high > worst[finding.name].high:
                worst[finding.name] = finding
        return "; ".join(_said(finding) for finding in worst.values())
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
    mean = "<Z> is off (root mean square over sites)" if finding.name == "magnetisation_error" else ""
    mean = mean or f"the mean {finding.name.replace('_', ' ')} is off"
    what = "pair correlations are off" if relative else mean
    if finding.outcome == "accept":
        return f"{what} by at most {high} (limit {limit})"
    if finding.outcome == "reject":
        return f"{what} by at least {low} (limit {limit})"
    return f"{what} by an amount between {low} and {high} (limit {limit})"


def interval(score: Score) -> str:
    """Return value and interval."""
    return f"{score.value:.3f} ({score.low:.3f} to {score.high:.3f})"


def disorder_text(score: Score) -> str:
    """Return the disorder error, or that the scatter between instances is no more than shots make."""
    if score.disorder is None:
        return "-"
    return f"± {score.disorder:.2g}" if score.disorder > 0 else "below shot noise"


def floor_text(score: Score) -> str:
    """Return what a perfect processor attains."""
    return "-" if score.floor is None else f"{float(score.floor):.3f}"
