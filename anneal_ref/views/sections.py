"""What the page of a verdict says: facts, sections with tables and pictures, identities."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from anneal_ref.judgement.fidelity import Refusal
from anneal_ref.observe.counting import count_moments
from anneal_ref.observe.moments import Moments
from anneal_ref.studies.assess import Judged, Verdict
from anneal_ref.studies.study import time_unit
from anneal_ref.studies.summary import (
    ENERGY_HEADINGS,
    PAIR_HEADINGS,
    energy_row,
    good_enough,
    has_fields,
    notes,
    pooled_table,
    pooled_tells_more,
    score_table,
    sentences,
    suspects,
    worst_pairs,
)
from anneal_ref.studies.text import counted
from anneal_ref.views import plots
from anneal_ref.views.content import Grid, Row, Section, picture

MOST_LATTICES = 8
MOST_ROWS = 40
_CONNECTED = (
    "For instances with fields the correlations are the connected ones, ⟨ZZ⟩ − ⟨Z⟩⟨Z⟩, which do not see ⟨Z⟩; the root "
    "mean square error of ⟨Z⟩ over the sites, pooled over these instances, has a limit of its own."
)


def sections(verdict: Verdict) -> list[Section]:
    """Return the sections of the page, in their order."""
    return [_errors(verdict), _agreement(verdict), _energies(verdict), _where(verdict), _method(verdict)]


def facts(verdict: Verdict) -> list[tuple[str, str]]:
    """Return term and value of what a reader asks first."""
    study, limits = verdict.study, verdict.study.acceptance
    unit = time_unit(study.schedule)
    names = list(dict.fromkeys(case.name for case in study.cases))
    sizes = [one.comparison.n_sites for one in verdict.judged]
    span = f"{min(sizes)}" if min(sizes) == max(sizes) else f"{min(sizes)} to {max(sizes)}"
    shots = sum(one.comparison.n_shots for one in verdict.judged)
    worst = max(one.reference.error for one in verdict.judged)
    found = [
        ("Instances", f"{len(names)} of {span} spins"),
        ("Durations", f"{', '.join(f'{at:g}' for at, _ in verdict.pooled)} {unit}".strip()),
        ("Shots", f"{shots} in {counted(len(verdict.judged), 'case')}"),
        ("Limit on the correlation error", f"{limits.correlation_error:.1%}"),
    ]
    for name, limit in limits.limits(has_fields(verdict)).items():
        if name != "correlation_error":
            found.append((f"Limit on the {name.replace('_', ' ')}", f"{limit:g}"))
    found += [("Confidence", f"{limits.level:.0%}"), ("Largest error of the truth", f"{worst:.1g}")]
    return found


def _errors(verdict: Verdict) -> Section:
    shown = sorted(verdict.judged, key=lambda one: -one.comparison.correlation_error.value)[:MOST_ROWS]
    shown = [one for one in verdict.judged if one in shown]
    unit = time_unit(verdict.study.schedule)
    # with one instance at each duration, the pooled figures are those of the cases
    pools = verdict.pooled if pooled_tells_more(verdict) else ()
    labels = [one.case.label for one in shown] + [f"all at {at:g} {unit}".strip() for at, _ in pools]
    scores = [one.comparison.correlation_error for one in shown] + [pooled.score for _, pooled in pools]
    decisions = [one.comparison.decision for one in shown]
    findings = [finding for decision in decisions if decision is not None for finding in decision.findings]
    findings += [finding for _, finding in verdict.findings] if pools else []
    outcomes = [finding.outcome for finding in findings if finding.name == "correlation_error"]
    axes = plots.correlation_errors(labels, scores, verdict.study.acceptance.correlation_error, outcomes=outcomes)
    heads, *rows = score_table(verdict)
    tables = [Grid(_spelled(heads), tuple(Row(cells) for cells in rows), title="Every case" if pools else "")]
    if pools:
        pooled_heads, *pooled = pooled_table(verdict)
        tables.insert(0, Grid(_spelled(pooled_heads), tuple(Row(cells, pooled=True) for cells in pooled)))
    less = "" if len(shown) == len(verdict.judged) else f" The {len(shown)} cases with the largest errors are drawn."
    return Section(
        "How far the processor departs from quantum dynamics",
        (
            "The correlation error is the distance between measured and true pair correlations, relative to the "
            "true ones, with the noise of the finite number of shots taken out. The verdict rests on "
            + ("the rows pooled over all instances." if pools else "one instance at each duration.")
            + (f" {_CONNECTED}" if has_fields(verdict) else ""),
            *sentences(verdict)[1:],
        ),
        tuple(tables),
        (
            picture(
                axes,
                f"Correlation errors with intervals of every case{' and pooled' if pools else ''}, against the limit",
                "Correlation error with its interval. The tick is what a perfect processor with the same shots "
                f"stays below in 95 of 100 runs: an error to the left of it cannot be told from none.{less}",
            ),
        ),
        (*_refusals(verdict), *notes(verdict)),
    )


def _spelled(heads: tuple[str, ...]) -> tuple[str, ...]:
    """Write out the headings that the text tables abbreviate."""
    words = {"perfect <": "perfect stays below", "log-lik.": "log-likelihood", "plain/perfect": "plain / perfect"}
    return tuple(words.get(head, head) for head in heads)


def _refusals(verdict: Verdict, most: int = 6) -> tuple[str, ...]:
    """Say why cases have no fidelity, the first few of many."""
    found = [(one.case.label, one.comparison.fidelity) for one in verdict.judged]
    all_of_them = [f"{label}: {refusal.reason}" for label, refusal in found if isinstance(refusal, Refusal)]
    more = (
        [f"and {counted(len(all_of_them) - most, 'more case')} without a fidelity"] if len(all_of_them) > most else []
    )
    return (*all_of_them[:most], *more)


def _agreement(verdict: Verdict) -> Section:
    unit = time_unit(verdict.study.schedule)
    pictures = []
    for at, _ in verdict.pooled:
        group = [one for one in verdict.judged if one.case.anneal.duration == at]
        axes = plots.correlations([one.reference.moments().zz for one in group], [_measured(one).zz for one in group])
        axes.set_title(f"{at:g} {unit}".strip(), fontsize="medium", loc="left")
        what = f"Measured against true pair correlations at {at:g} {unit}".strip()
        pictures.append(
            picture(
                axes,
                what,
                f"{what}{f', all {len(group)} instances' if len(group) > 1 else ''}. A line less steep than the "
                "diagonal means correlations that are too weak.",
            )
        )
    texts = ("Plain ⟨ZZ⟩, of instances with fields too.",) if has_fields(verdict) else ()
    return Section("Correlations, processor against truth", texts, pictures=tuple(pictures))


def _energies(verdict: Verdict) -> Section:
    unit = time_unit(verdict.study.schedule)
    pictures = []
    for name, label, caption in (
        ("residual_energy", "residual energy (J per spin)", "Mean energy above the classical ground state, per spin."),
        (
            "order_parameter",
            "order parameter q2",
            "Mean of the squared pair correlation over pairs i < j, free of shot bias.",
        ),
    ):
        kept = [one for one in verdict.judged if name in one.comparison.scores and name in one.comparison.truth]
        if not kept:
            continue
        axes = plots.against_duration(
            [one.case.anneal.duration for one in kept],
            [one.comparison.truth[name] for one in kept],
            [one.comparison.scores[name].estimate for one in kept],
            label, unit=unit, level=verdict.decision.level, instances=[one.case.name for one in kept],
        )  # fmt: skip
        pictures.append(
            picture(
                axes,
                f"{label} against duration",
                f"{caption} Lines: truth; points: processor, with {verdict.decision.level:.0%} intervals.",
            )
        )
    grid = Grid(ENERGY_HEADINGS, tuple(Row(energy_row(one)) for one in verdict.judged))
    text = "Residual energy per spin in units of J, and order parameter q2; sigma is the difference in standard errors."
    return Section("Energy and order", (text,), (grid,), tuple(pictures))


def _where(verdict: Verdict) -> Section:
    worst = sorted(
        verdict.judged, key=lambda one: (one.comparison.pairs.adjusted[0], -one.comparison.pairs.site_sigma().max())
    )
    chosen = [one for one in verdict.judged if one in worst[:MOST_LATTICES]]
    pictures = []
    largest = max(3.0, *(float(np.abs(bond_sigma(one)).max(initial=0.0)) for one in chosen))
    for one in chosen:
        axes = plots.deviations(
            one.reference.anneal.instance.lattice,
            bond_sigma(one),
            site_sigma(one),
            limit=largest,
            label="too weak  <  standard errors  <  too strong",
        )
        axes.set_title(one.case.label, fontsize="medium", loc="left")
        found = one.comparison.pairs.significant(verdict.decision.level)
        text = f"{one.case.label}: {found} of {len(one.comparison.pairs)} pairs depart significantly."
        pictures.append(picture(axes, f"Lattice of {text}", text))
    dropped = len(verdict.judged) - len(chosen)
    texts = (
        "Bonds are coloured by the deviation of their correlation, in standard errors: blue where it is weaker than "
        "the truth, orange where it is stronger. Sites are coloured by the deviation of their magnetisation, blue "
        "for down. One blue bond points to a weak coupler, all bonds of a site blue to its readout, a tint of all "
        "bonds to the energy scale."
        + (f" The {len(chosen)} cases with the clearest deviations are drawn, {dropped} are not." if dropped else ""),
    )
    grid = Grid(PAIR_HEADINGS, tuple(Row(cells) for cells in worst_pairs(verdict, 10)), title="Pairs that depart most")
    return Section("Where it departs", texts, (grid,), tuple(pictures), tuple(suspects(verdict)))


def _measured(one: Judged) -> Moments:
    """Count the moments of the samples; that their groups are few stands among the notes already."""
    return count_moments(one.samples.spins, one.samples.groups)


def bond_sigma(one: Judged) -> NDArray[np.float64]:
    """Return by how many standard errors each bond's correlation is too strong, in the order of the edges."""
    pairs, n = one.comparison.pairs, one.comparison.n_sites
    matrix = np.zeros((n, n))
    matrix[pairs.first, pairs.second] = matrix[pairs.second, pairs.first] = np.sign(pairs.truth) * pairs.sigma
    edges = one.reference.anneal.instance.lattice.edges
    return np.asarray(matrix[edges[:, 0], edges[:, 1]])


def site_sigma(one: Judged) -> NDArray[np.float64]:
    """Return the deviation of every magnetisation beyond the truth's own error, in standard errors."""
    truth, measured = one.reference.moments().z, _measured(one).z
    difference = measured.value - truth.value
    beyond = np.maximum(np.abs(difference) - truth.num, 0.0)
    return np.asarray(np.sign(difference) * beyond / measured.stat)


def _method(verdict: Verdict) -> Section:
    study, level = verdict.study, verdict.decision.level
    tolerance = study.table.truth.tolerance
    missed = [one.case.label for one in verdict.judged if not good_enough(verdict, one)]
    fields = has_fields(verdict)
    points = [
        "Truth: the Schrödinger equation with the given schedule, solved on the full state vector. Every case was "
        "solved at least three times with the step halved, and once with the sites in another order; the error bar "
        f"is what these runs differ by (tolerance {tolerance:g}, largest measured error "
        f"{max(one.reference.error for one in verdict.judged):.1g}).",
        "Correlation error: root of the sum over pairs of (measured − true)² over the sum of true², the noise of "
        "shots subtracted; a negative value means less than noise alone gives on average. Gauges and batches count "
        "as the independent units.",
        f"Verdict: accept if the upper bound at level {level:.0%} of every pooled figure lies within its limit, "
        "reject if the lower bound of any lies beyond it (the error probability divided by the number of figures), "
        "else inconclusive. These bounds are one-sided and lie inside the two-sided intervals of the tables. Residual "
        "energy and order parameter are held against their limits as means over the instances, where departures of "
        "opposite sign cancel. The error probability is that of one look: whoever adds shots until the verdict "
        "changes exceeds it.",
        "Fidelity, (Σ √(p q))², is given only where there are about ten shots for each configuration that matters. The "
        "bias of the finite number of shots is taken out; the plain value, which it lowers, stands beside the plain "
        "value of a perfect processor.",
        "The statement holds for these instances, this schedule and these durations, for the time at which the "
        "samples were taken. "
        '"Disorder" is the error that the finite number of instances adds if they are meant to stand for their whole '
        "ensemble; it is not known where the instances scatter no more than shots make them.",
        "Agreement of pair correlations does not exclude departures in higher moments; the log-likelihood and the "
        "fidelity look there.",
        "What the processor was told is taken on trust: schedule, gauge and site map come from the laboratory's own "
        "files.",
    ]
    if fields:
        points.append(f"{_CONNECTED} Pictures and tables of single pairs show the plain ⟨ZZ⟩.")
    if missed:
        points.append(
            f"Not converged to the tolerance, and judged with the error that was measured: {', '.join(missed)}."
        )
    return Section("Method, and the limits of this statement", points=tuple(points))


def identities(verdict: Verdict) -> Iterator[tuple[str, str]]:
    """Give name and SHA-256 of everything that the verdict rests on; a case has one for all of its sample files."""
    yield "study file", verdict.study.sha256
    yield "schedule", verdict.study.schedule.identity
    for name, one in {one.case.name: one for one in verdict.judged}.items():
        yield f"instance {name}", one.reference.anneal.instance.identity
    for one in verdict.judged:
        yield f"samples {one.case.label}", one.sha256
    for one in verdict.judged:
        yield f"reference {one.case.label}", one.reference.identity
