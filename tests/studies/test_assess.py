"""From a study to a verdict: the outcome, the archive, interrupts, executors, and the tables."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from anneal_ref.backends.exact.state_vector import StateVector
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.base.run import Run
from anneal_ref.judgement.compare import compare
from anneal_ref.judgement.fidelity import Fidelity, Refusal
from anneal_ref.model.anneal import Anneal
from anneal_ref.model.instances import Instance
from anneal_ref.model.lattice import Lattice
from anneal_ref.observe.samples import Samples
from anneal_ref.studies import assess as assess_module
from anneal_ref.studies.archive import Archive
from anneal_ref.studies.assess import Verdict, assess, plan, solve
from anneal_ref.studies.study import Study
from anneal_ref.studies.summary import SCORE_HEADINGS, disorder_text, headline, score_row, sentences, suspects

STUDY = """
format = 1
name = "two small lattices"
durations = [0.3, 0.8]
[schedule]
s = [0.0, 1.0]
transverse = [20.0, 0.0]
problem = [0.0, 10.0]
[acceptance]
correlation_error = {limit}
{more}
[[instance]]
name = "ring"
lattice = {{ kind = "chain", n = 5, periodic = true }}
couplings = {{ law = "uniform", low = -1.0, high = 1.0 }}
seed = 3
[[instance]]
name = "ladder"
lattice = {{ kind = "ladder", n = 3 }}
couplings = {{ law = "plus_minus" }}
seed = 5
[samples]
files = "{{instance}}_{{duration}}.npy"
"""
QUIET = Run(progress=False)


def write(folder: Path, limit: float = 0.1, more: str = "", shots: int = 4000, wrong: float = 1.0) -> Study:
    """Write a study whose processor has all couplings multiplied by `wrong`."""
    path = folder / "study.toml"
    path.write_text(STUDY.format(limit=limit, more=more))
    for name in ("ring", "ladder"):
        for duration in (0.3, 0.8):
            (folder / f"{name}_{duration}.npy").touch()
    study = Study.read(path)
    for k, case in enumerate(study.cases):
        instance = case.anneal.instance
        solved = Instance(instance.lattice, wrong * np.array(instance.couplings))
        state = StateVector().evolve(Anneal(solved, study.schedule, case.anneal.duration))
        np.save(case.files[0], state.sample(shots, seed=k).spins)
    return study


@pytest.fixture(scope="module")
def truth(tmp_path_factory: pytest.TempPathFactory) -> Archive:
    """An archive that all tests of this file may share: the study's anneals are always the same."""
    return Archive(tmp_path_factory.mktemp("truth"))


def test_a_perfect_processor_is_accepted(tmp_path: Path, truth: Archive) -> None:
    verdict = assess(write(tmp_path), truth, run=QUIET)
    assert verdict.outcome == "accept"
    assert [verdict.outcome_at(at) for at in (0.3, 0.8)] == ["accept", "accept"]
    assert [at for at, _ in verdict.pooled] == [0.3, 0.8]
    assert all(pooled.n_instances == 2 and pooled.n_shots == 8000 for _, pooled in verdict.pooled)
    assert headline(verdict).startswith(
        "The processor meets the limit at 0.3 ns and 0.8 ns: pair correlations are off by"
    )


@pytest.mark.parametrize("wrong", [-1.0, 0.7, 0.0])
def test_a_wrong_processor_is_rejected(tmp_path: Path, truth: Archive, wrong: float) -> None:
    """Wrong sign, a scale far off, no couplings at all: the suite must fail for each of them."""
    verdict = assess(write(tmp_path, wrong=wrong), truth, run=QUIET)
    assert verdict.outcome == "reject"
    assert headline(verdict).startswith("The processor misses the limit at ")


def test_few_shots_are_inconclusive_and_say_how_many_more(tmp_path: Path, truth: Archive) -> None:
    verdict = assess(write(tmp_path, shots=60, limit=0.12), truth, run=QUIET)
    assert verdict.outcome == "inconclusive"
    assert verdict.decision.more_shots is not None
    assert verdict.decision.more_shots > 60
    assert "more shots" in "\n".join(sentences(verdict)[1:])


def test_rejecting_is_shared_among_the_findings_and_accepting_is_not(tmp_path: Path, truth: Archive) -> None:
    """Bonferroni on the side where one wrong finding is enough, and only there."""
    study = write(tmp_path, shots=300, wrong=0.7, more="residual_energy = 0.1\norder_parameter = 0.1")
    verdict = assess(study, truth, run=QUIET)
    assert len(verdict.findings) == 6
    for at, finding in verdict.findings:
        if finding.name == "correlation_error":
            error = dict(verdict.pooled)[at].correlation
            assert finding.low == error.lower(1 - 0.05 / 6)
            assert finding.high == error.upper(0.95)


def test_optional_limits_decide_too(tmp_path: Path, truth: Archive) -> None:
    loose = "residual_energy = 0.2\norder_parameter = 0.2"
    tight = "residual_energy = 0.01\norder_parameter = 0.2"
    assert assess(write(tmp_path, 0.5, loose, wrong=0.9), truth, run=QUIET).outcome == "accept"
    verdict = assess(write(tmp_path, 0.5, tight, wrong=0.9), truth, run=QUIET)
    assert verdict.outcome == "reject"
    assert {finding.name for _, finding in verdict.findings if finding.outcome == "reject"} == {"residual_energy"}
    # a processor with couplings too weak ends above the true energy, by the mean over both instances
    mine = [one for one in verdict.judged if one.case.anneal.duration == 0.8]
    excess = np.mean(
        [
            one.comparison.scores["residual_energy"].value - float(one.comparison.truth["residual_energy"])
            for one in mine
        ]
    )
    finding = next(f for at, f in verdict.findings if at == 0.8 and f.name == "residual_energy")
    assert finding.low < abs(excess) < finding.high


def test_references_are_used_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    study, archive = write(tmp_path, shots=500), Archive(tmp_path / "truth")
    assert [one.archived for one in plan(study, archive)] == [False] * 4
    first = assess(study, archive, run=QUIET)
    assert [one.reused for one in first.judged] == [False] * 4
    assert [one.archived for one in plan(study, archive)] == [True] * 4

    def no_more(*args: object, **kwargs: object) -> None:
        raise AssertionError("a reference was solved again")

    monkeypatch.setattr(assess_module, "reference", no_more)
    second = assess(study, archive, run=QUIET)
    assert [one.reused for one in second.judged] == [True] * 4
    assert str(second) == str(first)


def test_an_interrupt_loses_only_the_reference_at_work(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    study, archive, solved = write(tmp_path, shots=500), Archive(tmp_path / "truth"), []
    real = assess_module.reference

    def until_the_third(anneal: Anneal, *args: object, **kwargs: object) -> object:
        if len(solved) == 2:
            raise KeyboardInterrupt
        solved.append(anneal.identity)
        return real(anneal, *args, **kwargs)  # type: ignore[arg-type]

    monkeypatch.setattr(assess_module, "reference", until_the_third)
    with pytest.raises(KeyboardInterrupt):
        assess(study, archive, run=QUIET)
    assert archive.audit().sound
    assert sorted(one.anneal.identity for one in archive) == sorted(solved)
    monkeypatch.setattr(assess_module, "reference", real)
    assert [reused for _, reused in solve(study, archive, run=QUIET)] == [True, True, False, False]


def test_the_study_says_which_back_end_makes_the_truth(tmp_path: Path) -> None:
    truth = '[truth]\ntolerance = 1e-2\nsamples = 500\nbackend = { kind = "MPS", bond_dimension = 4 }\n'
    study = write(tmp_path, more=truth)
    archive = Archive(tmp_path / "truth")
    assert {one.plan.backend for one in plan(study, archive)} == {"MPS"}
    verdict = assess(study, archive, run=QUIET)
    assert {type(one.reference.backend).__name__ for one in verdict.judged} == {"MPS"}
    assert all(one.reference.outcome == "converged" for one in verdict.judged)
    assert archive.audit(recompute=1.0).sound
    # the same verdict as with the truth of the state vector
    assert verdict.decision.outcome == assess(write(tmp_path), Archive(tmp_path / "other"), run=QUIET).decision.outcome


def test_any_executor_gives_the_same_references(tmp_path: Path) -> None:
    study = write(tmp_path, shots=500)
    serial = solve(study, Archive(tmp_path / "serial"), run=QUIET)
    with ThreadPoolExecutor(2) as executor:
        parallel = solve(study, Archive(tmp_path / "parallel"), executor, QUIET)
    for (one, _), (other, _) in zip(serial, parallel, strict=True):
        assert one.identity == other.identity
        assert np.array_equal(one.moments().zz.value, other.moments().zz.value)


def test_bad_samples_are_found_before_any_reference_is_solved(tmp_path: Path) -> None:
    study, archive = write(tmp_path, shots=500), Archive(tmp_path / "truth")
    np.save(study.cases[-1].files[0], np.ones((10, 7), dtype=np.int8) * -1)
    with pytest.raises(InputError, match=r"ladder_0.8.npy: samples of 7 spins"):
        assess(study, archive, run=QUIET)
    assert len(archive) == 0


def test_the_tables_hold_a_row_for_each_case_and_each_duration(tmp_path: Path, truth: Archive) -> None:
    verdict = assess(write(tmp_path, wrong=0.7), truth, run=QUIET)
    lines = str(verdict).splitlines()
    for name in ("ring", "ladder"):
        assert sum(line.startswith(f"{name} ") and "4000" in line for line in lines) == 2
    assert sum(line.startswith(("all at 0.3 ns", "all at 0.8 ns")) for line in lines) == 2
    assert any(line.startswith("REJECTED. The processor misses") for line in lines)
    assert "pairs of spins that depart most" in str(verdict)
    row = next(line for line in lines if line.startswith("ring ") and " 0.8 " in line)
    score = verdict.judged[1].comparison.correlation_error
    assert f"{score.value:.3f} ({score.low:.3f} to {score.high:.3f})" in row


def test_a_fidelity_lies_in_its_interval_and_stands_beside_the_plain_ones(tmp_path: Path, truth: Archive) -> None:
    verdict = assess(write(tmp_path), truth, run=QUIET)
    for one in verdict.judged:
        found = one.comparison.fidelity
        assert isinstance(found, Fidelity)
        assert found.score.low <= found.score.value <= found.score.high
        cells = dict(zip(SCORE_HEADINGS, score_row(one), strict=True))
        assert cells["fidelity"] == f"{found.score.value:.3f} ({found.score.low:.3f} to {found.score.high:.3f})"
        assert cells["plain/perfect"] == f"{found.plain:.3f}/{float(found.plain_floor):.3f}"
    few = assess(write(tmp_path, shots=60), truth, run=QUIET)
    refused = [one for one in few.judged if isinstance(one.comparison.fidelity, Refusal)]
    assert refused
    assert all("too few shots" in score_row(one) for one in refused)


def test_a_disorder_error_that_shots_hide_is_said_in_words() -> None:
    score = Score("correlation_error", Estimate(0.1, 0.01, 0.0), 0.08, 0.12, disorder=0.0)
    assert disorder_text(score) == "below shot noise"
    assert "below the shot noise" in str(score)
    assert disorder_text(replace(score, disorder=0.02)) == "± 0.02"
    assert disorder_text(replace(score, disorder=None)) == "-"


def test_the_spin_that_is_named_belongs_to_pairs_that_depart(tmp_path: Path, truth: Archive) -> None:
    study = write(tmp_path)
    for case in study.cases:
        spins = np.load(case.files[0])
        spins[np.random.default_rng(1).random(len(spins)) < 0.2, 2] *= -1
        np.save(case.files[0], spins)
    named = suspects(assess(study, truth, run=QUIET))
    assert len(named) == len(study.cases)
    assert all("of them share spin 2 " in line for line in named)


def test_gauges_are_undone_before_anything_is_compared(tmp_path: Path, truth: Archive) -> None:
    plain = write(tmp_path, shots=2000)
    expected = assess(plain, truth, run=QUIET)
    for case in plain.cases:
        spins = np.load(case.files[0])
        signs = np.where(np.arange(spins.shape[1]) % 2, -1, 1)
        np.save(case.files[0], spins * signs)
        manifest = Samples(spins).manifest.replace(gauge=signs, instance=case.anneal.instance.identity)
        Path(f"{case.files[0]}.manifest.json").write_text(manifest.to_json())
    gauged: Verdict = assess(plain, truth, run=QUIET)
    assert [one.comparison.correlation_error.value for one in gauged.judged] == [
        one.comparison.correlation_error.value for one in expected.judged
    ]


ISLANDS = """
format = 1
name = "two islands"
durations = [1.0]
[schedule]
s = [0.0, 1.0]
transverse = [12.0, 0.0]
problem = [0.0, 6.0]
[acceptance]
correlation_error = 0.1
{more}
[[instance]]
name = "islands"
file = "islands.json"
[[instance]]
name = "ring"
lattice = {{ kind = "chain", n = 5, periodic = true }}
couplings = {{ law = "plus_minus" }}
seed = 5
[samples]
files = "{{instance}}.npy"
"""


def islands(folder: Path, more: str = "", sign: int = 1) -> Study:
    """Write a study with an instance of two islands, one with fields, whose spins may be turned over."""
    edges = [[0, 1], [1, 2], [2, 3], [3, 4], [0, 4], [5, 6], [6, 7]]
    lattice = Lattice(8, np.array(edges))
    couplings = np.array([1.0, -0.7, 0.5, -1.0, 0.8, -0.4, -0.4])
    Instance(lattice, couplings, fields=np.array([0.0] * 5 + [0.8, 0.6, 0.9])).write(folder / "islands.json")
    path = folder / "study.toml"
    path.write_text(ISLANDS.format(more=more))
    for name in ("islands", "ring"):
        (folder / f"{name}.npy").touch()
    study = Study.read(path)
    for k, case in enumerate(study.cases):
        spins = StateVector().evolve(case.anneal).sample(4000, seed=k).spins.copy()
        spins[:, 5:] *= sign
        np.save(case.files[0], spins)
    return study


def test_fields_bring_a_limit_on_the_magnetisations(tmp_path: Path, truth: Archive) -> None:
    good = assess(islands(tmp_path), truth, run=QUIET)
    assert good.outcome == "accept"
    assert [finding.name for _, finding in good.findings] == ["correlation_error", "magnetisation_error"]
    assert "<Z> is off (root mean square over sites) by at most" in headline(good)
    assert "But within" not in headline(good)
    # pooled over the instance with fields alone, not watered down by the other one
    assert good.pooled[0][1].magnetisation.n_sites == 8
    bad = assess(islands(tmp_path, sign=-1), truth, run=QUIET)
    assert bad.outcome == "reject"
    assert " Within its limit: pair correlations are off by at most" in headline(bad)
    assert [finding.name for _, finding in bad.findings if finding.outcome == "reject"] == ["magnetisation_error"]
    lines = str(bad).splitlines()
    assert sum("<Z> error" in line for line in lines if line.startswith(("instance", "pooled"))) == 2
    row = next(line for line in lines if line.startswith("ring "))
    assert row.split("accept")[1].count(" - ") >= 1


def test_an_acceptance_that_the_likelihood_contradicts_says_so_at_once(tmp_path: Path, truth: Archive) -> None:
    verdict = assess(islands(tmp_path, more="magnetisation_error = 1.9", sign=-1), truth, run=QUIET)
    assert verdict.outcome == "accept"
    assert "But within these limits it departs from the truth beyond doubt in 1 of 2 cases" in headline(verdict)
    assert "<Z> error" not in str(assess(write(tmp_path), truth, run=QUIET))


def test_a_truth_asked_for_more_than_the_study_needs_draws_no_note(tmp_path: Path, truth: Archive) -> None:
    verdict = assess(write(tmp_path), truth, run=QUIET)
    case, plain = verdict.judged[0].case, verdict.judged[0].reference
    strict = replace(plain, tolerance=plain.error / 10)
    one = replace(verdict.judged[0], reference=strict, comparison=compare(strict, case.samples()))
    assert any("was asked to be within" in note for note in one.comparison.notes)
    assert "was asked to be within" not in str(replace(verdict, judged=(one, *verdict.judged[1:])))
    table = verdict.study.table
    harsh = replace(
        verdict.study,
        table=table.model_copy(update={"truth": table.truth.model_copy(update={"tolerance": plain.error / 5})}),
    )
    assert "was asked to be within" in str(replace(verdict, study=harsh, judged=(one, *verdict.judged[1:])))
