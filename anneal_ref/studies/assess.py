"""`assess`: from a study and its archive to a verdict, with every comparison it rests on.

The rule. At each duration the correlation error is pooled over the instances and held against the limit of the study,
as an equivalence test; optional limits hold for the residual energy and the order parameter, averaged over the
instances. Where instances have fields, the correlation error is that of connected correlations, which do not see <Z>;
the magnetisation error, pooled over these instances, then has a limit of its own, by default that of the correlation
error. The processor is accepted if every one of these findings accepts: each may use the full error probability
1 - level, because all of them have to be wrong together in the same direction. It is rejected if any finding rejects:
there the error probability is divided by their number, because one wrong finding is enough. Everything else is
inconclusive, and the findings say how many more shots would settle it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from concurrent.futures import Executor, Future, as_completed
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial

import numpy as np
from scipy import special

from anneal_ref.backends.contract import Backend, Plan
from anneal_ref.base.errors import AnnealRefError
from anneal_ref.base.estimate import Estimate
from anneal_ref.base.provenance import provenance
from anneal_ref.base.run import Run
from anneal_ref.judgement.compare import compare
from anneal_ref.judgement.comparison import Comparison
from anneal_ref.judgement.equivalence import Decision, Finding, SquareRoot, decide, judge_distance, judge_error
from anneal_ref.judgement.pooling import Pooled, pool
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.samples import Samples
from anneal_ref.studies.archive import Archive
from anneal_ref.studies.sample_files import refuse_copies
from anneal_ref.studies.schema import TruthTable
from anneal_ref.studies.study import Case, Study
from anneal_ref.truth.choosing import choose_backend
from anneal_ref.truth.reference import Reference, reference
from anneal_ref.truth.refining import Budget, plan_reference


@dataclass(frozen=True, slots=True, eq=False)
class Judged:
    """One case with its truth, its samples, and what they say.

    Parameters
    ----------
    case : Case
    reference : Reference
    samples : Samples
        Gauge undone, in the order of the instance.
    comparison : Comparison
        Its decision holds for this case alone; the verdict rests on the pooled findings.
    reused : bool
        Whether the reference was in the archive before.
    sha256 : str
        Hash of the bytes of the sample files; see `Case`.
    notes : tuple of str
        What the reader should know about the files, beside the notes of the comparison.
    """

    case: Case
    reference: Reference
    samples: Samples
    comparison: Comparison
    reused: bool
    sha256: str
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class Verdict:
    """What a study says about a processor; `print(verdict)` gives the tables.

    Parameters
    ----------
    study : Study
    judged : tuple of Judged
        In the order of the study.
    pooled : tuple of (float, Pooled)
        For each duration, ascending: the correlation error pooled over the instances.
    decision : Decision
        The findings behind the verdict, duration by duration.
    findings : tuple of (float, Finding)
        The same findings with their durations.
    provenance : dict of str to str
        Versions, machine and time of the assessment.
    """

    study: Study
    judged: tuple[Judged, ...]
    pooled: tuple[tuple[float, Pooled], ...]
    decision: Decision
    findings: tuple[tuple[float, Finding], ...]
    provenance: dict[str, str]

    @property
    def outcome(self) -> str:
        """Accept, reject or inconclusive."""
        return self.decision.outcome

    def outcome_at(self, duration: float) -> str:
        """Accept, reject or inconclusive at one duration."""
        return decide([finding for at, finding in self.findings if at == duration], self.decision.level).outcome

    def __str__(self) -> str:
        """Return the tables: a row for each case, a row for each duration, the worst pairs, the verdict."""
        from anneal_ref.studies.summary import summary

        return summary(self)


@dataclass(frozen=True, slots=True)
class Planned:
    """What a case will cost.

    Parameters
    ----------
    case : Case
    plan : Plan
        Of the largest of the runs that are made in any case.
    seconds : float
        Of all of these; more follow where the tolerance is not met.
    archived : bool
        Whether nothing needs to be done, because the archive has the reference.
    """

    case: Case
    plan: Plan
    seconds: float
    archived: bool


def plan(study: Study, archive: Archive) -> tuple[Planned, ...]:
    """Return what every case of a study will cost, before any work; samples are not read, see `Study.problems`.

    Raises
    ------
    NotSupported, TooLarge
        A case that no back-end can treat on this machine; it is named.
    """
    tolerance, budget = study.table.truth.tolerance, Budget(study.table.truth.budget)
    planned = []
    for case in study.cases:
        archived = archive.find(case.anneal, tolerance) is not None
        with _naming(case):
            backend = study.backend or choose_backend(case.anneal, tolerance, budget)
            largest, seconds = plan_reference(case.anneal, backend)
        planned.append(Planned(case, largest, seconds, archived))
    return tuple(planned)


def solve(
    study: Study,
    archive: Archive,
    executor: Executor | None = None,
    run: Run = Run(),  # noqa: B008
) -> tuple[tuple[Reference, bool], ...]:
    """Return the reference of every case, and whether it was archived already; missing ones are solved and archived.

    Each is archived as soon as it is there, so that an interrupt loses only the one at work.

    Parameters
    ----------
    study : Study
    archive : Archive
    executor : Executor, optional
        Any executor of `concurrent.futures`; by default one reference is solved after the other.
    run : Run
        Threads and progress.
    """
    truth = study.table.truth
    found: dict[int, Reference] = {}
    for k, case in enumerate(study.cases):
        archived = archive.find(case.anneal, truth.tolerance)
        if archived is not None:
            found[k] = archived
    reused = frozenset(found)
    missing = [k for k in range(len(study.cases)) if k not in reused]
    with run.track(len(missing), "references") as bar:
        for k, solved in _solved(study, missing, executor, run):
            archive.add(solved)
            found[k] = solved
            bar.update(note=study.cases[k].label)
    return tuple((found[k], k in reused) for k in range(len(study.cases)))


def assess(
    study: Study,
    archive: Archive,
    executor: Executor | None = None,
    run: Run = Run(),  # noqa: B008
) -> Verdict:
    """Judge a processor: solve what is missing, compare every case, pool per duration, decide.

    Parameters
    ----------
    study : Study
    archive : Archive
        References that are there are used; new ones are added.
    executor : Executor, optional
        Solves missing references in parallel; by default they are solved one after the other.
    run : Run
        Threads and progress.

    Returns
    -------
    Verdict

    Raises
    ------
    StudyError
        A case without samples.
    InputError
        Samples that are malformed or belong to another anneal; the same file twice, or a copy of it, within the study.
        All files are read before any reference is solved.
    TooLarge, NotSupported
        A case that cannot be solved here; also before any is solved.
    ArchiveError
        The archive cannot be written.
    """
    samples = [(*case.samples_with_note(), case.sha256) for case in study.cases]
    refuse_copies(file for case in study.cases for file in case.files)
    plan(study, archive)
    references = solve(study, archive, executor, run)
    acceptance = study.acceptance
    judged = []
    with run.track(len(samples), "comparisons") as bar:
        for case, (spins, note, sha256), (truth, reused) in zip(study.cases, samples, references, strict=True):
            with _naming(case):
                result = compare(truth, spins, acceptance, acceptance.level, study.table.truth.seed)
            judged.append(Judged(case, truth, spins, result, reused, sha256, (note,) if note else ()))
            bar.update(note=case.label)
    durations = sorted({case.anneal.duration for case in study.cases})
    groups = {at: [one for one in judged if one.case.anneal.duration == at] for at in durations}
    pooled = tuple(
        (at, pool([one.comparison for one in group], acceptance, acceptance.level)) for at, group in groups.items()
    )
    tests = sum(len(acceptance.limits(one.has_fields)) for _, one in pooled)
    findings = tuple((at, finding) for at, group in pooled for finding in _findings(study, groups[at], group, tests))
    decision = decide([finding for _, finding in findings], acceptance.level)
    return Verdict(study, tuple(judged), pooled, decision, findings, provenance())


def _findings(study: Study, group: Sequence[Judged], pooled: Pooled, tests: int) -> list[Finding]:
    """Hold the pooled figures of one duration against every limit."""
    acceptance = study.acceptance
    grouped = any(one.comparison.n_clusters < one.comparison.n_shots for one in group)
    unit = "shots in new gauges or batches, spread as these" if grouped else "shots, spread as these"
    findings = []
    errors: dict[str, SquareRoot] = {
        "correlation_error": pooled.correlation,
        "magnetisation_error": pooled.magnetisation,
    }
    for name, limit in acceptance.limits(pooled.has_fields).items():
        if name in errors:
            findings.append(judge_error(name, errors[name], limit, pooled.n_shots, acceptance.level, tests, unit))
            continue
        scores = [one.comparison.scores[name].estimate for one in group]
        truths = [one.comparison.truth[name] for one in group]
        measured, target = _mean(scores), _mean(truths)
        quantile = partial(_student, _freedom(scores, [one.comparison.n_clusters for one in group]))
        findings.append(
            judge_distance(
                name, float(measured) - float(target), float(measured.stat), float(target.num), limit, pooled.n_shots,
                acceptance.level, tests, quantile, unit,
            )
        )  # fmt: skip
    return findings


def _solved(
    study: Study, missing: Sequence[int], executor: Executor | None, run: Run
) -> Iterator[tuple[int, Reference]]:
    """Give the references of some cases as they get ready."""
    truth = study.table.truth
    if executor is None:
        for k in missing:
            with _naming(study.cases[k]):
                solved = _solve_one(study.cases[k].anneal, truth, study.backend, run.threads)
            yield k, solved
        return
    jobs: dict[Future[Reference], int] = {
        executor.submit(_solve_one, study.cases[k].anneal, truth, study.backend, 1): k for k in missing
    }
    try:
        for job in as_completed(jobs):
            with _naming(study.cases[jobs[job]]):
                solved = job.result()
            yield jobs[job], solved
    finally:
        for job in jobs:
            job.cancel()


@contextmanager
def _naming(case: Case) -> Iterator[None]:
    """Let every error say which case it came from."""
    try:
        yield
    except AnnealRefError as error:
        error.args = (f"case '{case.label}': {error}", *error.args[1:])
        raise


def _solve_one(anneal: Anneal, truth: TruthTable, backend: Backend | None, threads: int) -> Reference:
    """Solve one case, here or in a worker; the bar over all of them is enough."""
    return reference(
        anneal, truth.tolerance, backend, truth.samples, truth.seed, budget=truth.budget,
        run=Run(threads, progress=False),
    )  # fmt: skip


def _student(freedom: float, p: float) -> float:
    """Return a quantile of Student's t."""
    return float(special.stdtrit(freedom, p))


def _mean(estimates: Sequence[Estimate]) -> Estimate:
    """Average over instances: independent shots, numerical errors in one direction."""
    count = len(estimates)
    stat = float(np.sqrt(sum(float(one.stat) ** 2 for one in estimates))) / count
    return Estimate(
        sum(float(one) for one in estimates) / count, stat, sum(float(one.num) for one in estimates) / count
    )


def _freedom(scores: Sequence[Estimate], clusters: Sequence[int]) -> float:
    """Degrees of freedom behind the error of a mean (Welch 1947, Satterthwaite 1946)."""
    squares = [float(score.stat) ** 2 for score in scores]
    parts = sum(square**2 / max(count - 1, 1) for square, count in zip(squares, clusters, strict=True))
    return sum(squares) ** 2 / parts if parts > 0 else float(sum(clusters))
