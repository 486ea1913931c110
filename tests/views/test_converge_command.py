"""`anneal-ref converge`: tables, predictions, pictures and the match, from a study file."""

from __future__ import annotations

from pathlib import Path

import pytest

import anneal_ref as ar
from anneal_ref.model.instances import Instance
from anneal_ref.model.lattices import square
from anneal_ref.views.cli import main

STUDY = """
format = 1
name = "two squares"
durations = [1.0]
[schedule]
transverse_polynomial = [5.0, -10.0, 5.0]
problem_polynomial = [0.0, 5.0]
[acceptance]
correlation_error = 0.5
[[instance]]
name = "first"
file = "first.json"
[[instance]]
name = "second"
file = "second.json"
[samples]
files = "{instance}.csv"
values = "spins"
"""
LADDER = ["--bond-dimensions", "2", "4", "8", "16"]


@pytest.fixture
def study(tmp_path: Path) -> Path:
    (tmp_path / "study.toml").write_text(STUDY)
    for seed, name in enumerate(("first", "second")):
        instance = ar.draw_instance(square(3, 3), ar.disorder.plus_minus(), seed=seed)
        Instance(instance.lattice, instance.couplings).write(tmp_path / f"{name}.json")
    return tmp_path / "study.toml"


def test_tables_and_predictions_without_samples(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["converge", str(study), *LADDER, "--error", "0.1"]) == 0
    out = capsys.readouterr().out
    assert out.count("convergence for 9 spins") == 2
    assert out.count("correlation error 0.1: bond dimension") == 2
    assert "against the last run" in out
    assert "matching" not in out
    assert {path.name for path in study.parent.iterdir()} == {"study.toml", "first.json", "second.json"}


def test_match_pictures_and_archived_truth(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    read = ar.Study.read(study)
    archive = ar.Archive(study.parent / "truth")
    for case in read.cases:
        archive.add(ar.reference(case.anneal, samples=100))
        samples = ar.MPS(bond_dimension=4).evolve(case.anneal).sample(2000, seed=1)
        rows = [",".join(map(str, row)) for row in samples.spins.tolist()]
        (study.parent / f"{case.name}.csv").write_text("\n".join(rows) + "\n")
    plots = study.parent / "new" / "plots"
    assert main(["converge", str(study), *LADDER, "--steps", "0", "--plots", str(plots)]) == 0
    out = capsys.readouterr().out
    assert out.count("against the reference") == 2
    assert "duration 1: matching bond dimension (instances: 2, spins: 9)" in out
    assert {path.name for path in plots.iterdir()} == {"first_1.png", "second_1.png"}
    assert all(path.read_bytes().startswith(b"\x89PNG") for path in plots.iterdir())


def test_one_instance_alone(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["converge", str(study), *LADDER[:3], "--steps", "0", "--instance", "second"]) == 0
    out = capsys.readouterr().out
    assert out.startswith("second, 1 ns\n")
    assert "first" not in out


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--instance", "third"], "--instance must be one of first, second; got third"),
        (["--bond-dimensions", "0", "4"], "bond_dimensions[0] must be a whole number of at least 1"),
        (["--steps", "-1"], "steps[0] must be a whole number of at least 0"),
        (["--error", "-1", "--bond-dimensions", "2"], "error must be"),
    ],
)
def test_bad_options(study: Path, arguments: list[str], said: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["converge", str(study), *arguments]) == 2
    assert said in capsys.readouterr().err
