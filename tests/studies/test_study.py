"""The study file: what it may say, and how it says no."""

from __future__ import annotations

import re
import textwrap
import tomllib
from pathlib import Path

import numpy as np
import pytest

from anneal_ref.backends.mps.mps import MPS
from anneal_ref.base.errors import AnnealRefWarning, InputError, StudyError
from anneal_ref.model.instances import Instance
from anneal_ref.model.lattice import Lattice
from anneal_ref.observe.samples import Samples
from anneal_ref.studies import study as study_module
from anneal_ref.studies.sample_files import read_samples
from anneal_ref.studies.study import Study

GOOD = """
format = 1
name = "small"
durations = [0.5, 2.0]
[schedule]
s = [0.0, 1.0]
transverse = [20.0, 0.0]
problem = [0.0, 10.0]
[acceptance]
correlation_error = 0.1
[[instance]]
name = "ring"
lattice = { kind = "chain", n = 4, periodic = true }
couplings = { law = "plus_minus" }
seed = 3
[samples]
files = "{instance}_{duration}ns*.csv"
"""
SPINS = "1,1,-1,1\n-1,-1,1,-1\n1,1,1,1\n-1,1,1,-1\n"
FILES = ("ring_0.5ns_a.csv", "ring_0.5ns_b.csv", "ring_2ns.csv")


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    for name in FILES:
        (tmp_path / name).write_text(f"{SPINS}# {name}\n")
    return tmp_path


def read(folder: Path, text: str) -> Study:
    (folder / "study.toml").write_text(text, encoding="utf-8")
    return Study.read(folder / "study.toml")


def test_a_product_of_instances_and_durations(folder: Path) -> None:
    study = read(folder, GOOD)
    assert [case.label for case in study.cases] == ["ring, 0.5 ns", "ring, 2 ns"]
    assert [len(case.files) for case in study.cases] == [2, 1]
    assert study.cases[0].samples().n_groups == 2
    assert study.cases[1].samples().spins[0].tolist() == [1, 1, -1, 1]
    assert study.acceptance.limits(False) == {"correlation_error": 0.1}
    assert study.table.truth.tolerance == 1e-3


def test_the_back_end_of_the_truth_and_its_budget(folder: Path) -> None:
    assert read(folder, GOOD).backend is None
    table = '[truth]\nbudget = 60\nbackend = { kind = "MPS", bond_dimension = 8, site_order = [3, 1, 0, 2] }\n'
    study = read(folder, GOOD.replace("[acceptance]", table + "[acceptance]"))
    assert study.backend == MPS(bond_dimension=8, site_order=(3, 1, 0, 2))
    assert study.table.truth.budget == 60.0


def test_cases_one_by_one_and_files_of_instances(folder: Path) -> None:
    lattice = Lattice(4, [(0, 1), (1, 2), (2, 3)])
    Instance(lattice, [1.0, -0.5, 0.25]).write(folder / "own.json")
    text = GOOD.replace("durations = [0.5, 2.0]", "").split("[[instance]]")[0]
    text += """
    [[instance]]
    name = "own"
    file = "own.json"
    [[instance]]
    name = "written"
    lattice = { kind = "chain", n = 4 }
    couplings = [1.0, -0.5, 0.25]
    fields = [0.0, 0.1, 0.0, 0.0]
    [[case]]
    instance = "own"
    duration = 3
    samples = "ring_2ns.csv"
    [[case]]
    instance = "written"
    duration = 1.5
    samples = ["ring_0.5ns_a.csv", "ring_0.5ns_b.csv"]
    """
    own, written = read(folder, text).cases
    assert own.anneal.instance.couplings.tolist() == written.anneal.instance.couplings.tolist() == [1.0, -0.5, 0.25]
    assert written.anneal.instance.fields.tolist() == [0.0, 0.1, 0.0, 0.0]
    assert (own.anneal.duration, written.anneal.duration) == (3.0, 1.5)
    assert len(written.files) == 2


def test_schedules_in_every_form_and_a_waveform(folder: Path) -> None:
    (folder / "schedule.csv").write_text("# unit: GHz\ns,transverse,problem\n0,2,0\n1,0,1\n")
    table = "s = [0.0, 1.0]\ntransverse = [20.0, 0.0]\nproblem = [0.0, 10.0]"
    csv = read(folder, GOOD.replace(table, 'file = "schedule.csv"\ninterpolation = "linear"')).schedule
    assert csv.transverse(0.0) == pytest.approx(2 * np.pi * 2)
    halved = read(folder, GOOD.replace(table, 'file = "schedule.csv"\nprefactor = 0.5')).schedule
    assert halved.problem(1.0) == pytest.approx(np.pi)
    polynomial = "transverse_polynomial = [20.0, -20.0]\nproblem_polynomial = [0.0, 0.0, 10.0]"
    assert read(folder, GOOD.replace(table, polynomial)).schedule.problem(0.5) == pytest.approx(2.5)
    paused = read(folder, GOOD + "[waveform]\nu = [0.0, 0.4, 0.6, 1.0]\ns = [0.0, 0.5, 0.5, 1.0]\n").cases[1].anneal
    assert paused.problem(1.0) == pytest.approx(5.0)


def test_the_format_in_the_docstring_is_a_study(folder: Path) -> None:
    """The block that a user copies from the documentation must read as it stands."""
    doc = study_module.__doc__ or ""
    block = doc.split("relative to it.")[1].split("In place of")[0]
    text = textwrap.dedent(block)
    assert set(tomllib.loads(text)) >= {"format", "schedule", "truth", "acceptance", "instance", "samples"}
    (folder / "schedule.csv").write_text("s,transverse,problem\n0,20,0\n1,0,10\n")
    Instance(Lattice(2, [(0, 1)]), [1.0]).write(folder / "graph.json")
    (folder / "samples").mkdir()
    for name in ("ladder", "graph"):
        for duration in (2, 5):
            (folder / "samples" / f"{name}_{duration}ns_x.csv").write_text("0,1\n")
    study = read(folder, text)
    assert [case.name for case in study.cases] == ["ladder", "ladder", "graph", "graph"]
    assert study.cases[0].anneal.instance.n_sites == 11


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("format = 1", "format = 2", "`format` must be 1"),
        ("format = 1", "", "`format` must be 1"),
        ('name = "small"', "name", "not a TOML file"),
        ('name = "small"', "", "key `name` is missing"),
        ("correlation_error", "corelation_error", "did you mean `correlation_error`?"),
        ("= 0.1", "= nan", "`acceptance.correlation_error` must be a finite number; got nan"),
        ("= 0.1", "= -0.1", "must be greater than 0; got -0.1"),
        ("= 0.1", '= "a"', "`acceptance.correlation_error` must be a"),
        ("[0.5, 2.0]", "[0.5, inf]", "`durations[1]` must be a finite number"),
        ("[0.5, 2.0]", "[0.5, -2.0]", "`durations` must be positive"),
        ("[0.5, 2.0]", "[0.0, 2.0]", "`durations` must be positive"),
        ("[0.5, 2.0]", "[2.0, 2.0]", "different from each other"),
        ("[0.5, 2.0]", "[]", "`durations` must list at least one"),
        ("durations = [0.5, 2.0]", "", "`durations` must list at least one"),
        (
            '[samples]\nfiles = "{instance}_{duration}ns*.csv"',
            '[[case]]\ninstance = "ring"\nduration = 1.0',
            "either `durations`",
        ),
        ('"plus_minus"', '"plusminus"', "did you mean 'plus_minus'?"),
        ('law = "plus_minus"', 'law = "plus_minus", sigma = 1.0', "`instance[0].couplings.sigma`"),
        ('law = "plus_minus"', 'law = "uniform", low = 0.0', "`instance[0].couplings.high` is missing"),
        ('law = "plus_minus"', 'law = "gaussian", sigma = nan', "must be a finite number"),
        ('{ law = "plus_minus" }', "[1.0, nan, 1.0, 1.0]", "`instance[0].couplings[1]` must be a finite number"),
        ('{ law = "plus_minus" }', "[1.0, 1.0]", "`instance[0].couplings` must hold 4 numbers for this lattice; got 2"),
        ('{ law = "plus_minus" }', '"pm"', "a law such as"),
        ("seed = 3", "sede = 3", "did you mean `seed`?"),
        ("seed = 3", "seed = -3", "`instance[0].seed` must be"),
        ("seed = 3", "seed = 0.5", "`instance[0].seed` must be"),
        ("seed = 3", "", "need a `seed`"),
        ('kind = "chain"', 'kind = "chian"', "did you mean 'chain'?"),
        ("n = 4", "n = 2", "periodic"),
        ("n = 4", "m = 4", "unknown key `instance[0].lattice.m`; chain takes n, periodic"),
        ("n = 4,", "", "key `instance[0].lattice.n` is missing"),
        ("periodic = true", "dead = [9]", "`instance[0].lattice.dead`"),
        ('name = "ring"', 'name = "../ring"', "`instance[0].name`"),
        ("s = [0.0, 1.0]", "s = [1.0, 0.0]", "`schedule`: s must"),
        ("s = [0.0, 1.0]", "s = [0.0, nan]", "`schedule.s[1]` must be a finite number"),
        ("problem = [0.0, 10.0]", "", "one is missing"),
        ("s = [0.0, 1.0]", 's = [0.0, 1.0]\nfile = "x.csv"', "exactly one of"),
        ("transverse = [20.0, 0.0]", "transverse = [20.0, -1.0]", "`schedule`: transverse"),
        ("[acceptance]\n", "", "it belongs to `[acceptance]`"),
        ("[samples]\n", "[samples]\ntruth = 1\n", "`truth` belongs at the top of the file"),
        ("{instance}_{duration}ns*.csv", "{instance}_{time}ns.csv", "{instance} and {duration}"),
        ("[samples]", '[samples]\nvalues = "byts"', "did you mean 'bits'?"),
        ("[acceptance]", "[truth]\nbudget = 0\n[acceptance]", "`truth.budget` must be greater than 0"),
        ("[acceptance]", '[truth]\nbackend = { kind = "MSP" }\n[acceptance]', "did you mean 'MPS'?"),
        (
            "[acceptance]",
            '[truth]\nbackend = { kind = "MPS", bond = 8 }\n[acceptance]',
            "unknown key `truth.backend.bond`; MPS takes bond_dimension",
        ),
        (
            "[acceptance]",
            '[truth]\nbackend = { kind = "MPS", bond_dimension = 0 }\n[acceptance]',
            "`truth.backend`: bond_dimension must be",
        ),
    ],
)
def test_what_is_not_allowed_is_named(folder: Path, old: str, new: str, said: str) -> None:
    assert old in GOOD
    with pytest.raises(StudyError) as caught:
        read(folder, GOOD.replace(old, new))
    assert said in str(caught.value)
    assert str(folder / "study.toml") in str(caught.value)


def test_missing_files_are_named(folder: Path) -> None:
    with pytest.raises(StudyError, match=r"there is no study file .*none.toml"):
        Study.read(folder / "none.toml")
    table = "s = [0.0, 1.0]\ntransverse = [20.0, 0.0]\nproblem = [0.0, 10.0]"
    with pytest.raises(StudyError, match=r"`schedule.file`: there is no file .*lost.csv"):
        read(folder, GOOD.replace(table, 'file = "lost.csv"'))
    drawn = GOOD[GOOD.index("lattice =") : GOOD.index("[samples]")]
    with pytest.raises(StudyError, match=r"`instance\[0\].file`: there is no file .*lost.json"):
        read(folder, GOOD.replace(drawn, 'file = "lost.json"\n'))


def test_every_fault_is_told_at_once(folder: Path) -> None:
    with pytest.raises(StudyError) as caught:
        read(folder, GOOD.replace("= 0.1", "= -1.0").replace("seed = 3", "seed = -1"))
    assert len(str(caught.value).splitlines()) == 2


def test_cases_are_checked_too(folder: Path) -> None:
    cases = GOOD.replace("durations = [0.5, 2.0]", "").split("[samples]")[0]
    one = '[[case]]\ninstance = "ring"\nduration = 2.0\nsamples = "ring_2ns.csv"\n'
    assert len(read(folder, cases + one).cases) == 1
    with pytest.raises(StudyError, match="comes twice"):
        read(folder, cases + one + one)
    with pytest.raises(StudyError, match="did you mean 'ring'"):
        read(folder, cases + one.replace('"ring"', '"rign"'))
    with pytest.raises(StudyError, match="either `durations`"):
        read(folder, GOOD + one)
    (lost,) = read(folder, cases + one.replace("ring_2ns.csv", "lost.csv")).cases
    with pytest.raises(StudyError, match=r"'ring, 2 ns' lacks samples: .*`case\[0\]`: there is no samples file .*lost"):
        lost.samples()


def test_names_are_unique(folder: Path) -> None:
    entry = GOOD[GOOD.index("[[instance]]") : GOOD.index("[samples]")]
    with pytest.raises(StudyError, match="'ring' comes twice"):
        read(folder, GOOD.replace(entry, entry + entry))


def test_samples_of_something_else_are_refused_by_file(folder: Path) -> None:
    study = read(folder, GOOD)
    other = folder / "ring_2ns.csv"
    other.write_text(f"# instance: {'0' * 64}\n{SPINS}")
    with pytest.raises(InputError, match=r"ring_2ns.csv: samples of another instance"):
        study.cases[1].samples()
    other.write_text(f"# duration: 0.5\n{SPINS}")
    with pytest.raises(InputError, match=r"ring_2ns.csv: samples of another anneal"):
        study.cases[1].samples()
    other.write_text("1,1,1\n-1,-1,-1\n")
    with pytest.raises(InputError, match=r"ring_2ns.csv: samples of 3 spins"):
        study.cases[1].samples()


def test_manifests_beside_samples_are_no_samples(folder: Path) -> None:
    (folder / "ring_2ns.csv.manifest.json").write_text('{"duration": 2.0}')
    study = read(folder, GOOD.replace("ns*.csv", "ns*"))
    assert [file.name for file in study.cases[1].files] == ["ring_2ns.csv"]
    assert study.cases[1].samples().manifest.duration == 2.0


def test_a_name_that_cannot_be_part_of_a_file_name_is_refused_in_words(folder: Path) -> None:
    with pytest.raises(StudyError, match=r"`instance\[0\].name` must be made of letters, digits.*got 'my ring'"):
        read(folder, GOOD.replace('name = "ring"', 'name = "my ring"'))


@pytest.mark.parametrize(
    "text",
    [
        GOOD.split("[samples]")[0],
        GOOD.replace("{instance}_{duration}ns*.csv", "none_*.csv"),
        GOOD.replace("{instance}_{duration}ns*.csv", "none.csv"),
        GOOD.replace("durations = [0.5, 2.0]", "").split("[samples]")[0]
        + '[[case]]\ninstance = "ring"\nduration = 0.5\n[[case]]\ninstance = "ring"\nduration = 2.0\n',
    ],
    ids=["no table", "no match", "no file", "no key"],
)
def test_a_study_may_come_before_its_samples(folder: Path, text: str) -> None:
    study = read(folder, text)
    assert [case.files for case in study.cases] == [(), ()]
    assert study.problems() == ()
    with pytest.raises(StudyError, match="case 'ring, 0.5 ns' lacks samples"):
        study.cases[0].samples()


def test_a_case_with_some_of_its_files_is_not_read(folder: Path) -> None:
    study = read(folder, GOOD.replace('"{instance}_{duration}ns*.csv"', '["ring_{duration}ns*.csv", "x*.npy"]'))
    with pytest.raises(StudyError, match=r"no samples file matches .*x\*.npy"):
        study.cases[0].samples()
    assert len(study.problems()) == 2


def test_the_same_shots_do_not_count_twice(folder: Path) -> None:
    a, b, c = (folder / name for name in FILES)
    twice = GOOD.replace('"{instance}_{duration}ns*.csv"', '["ring_{duration}ns*.csv", "ring_{duration}*"]')
    with pytest.raises(StudyError, match=r"ring_0.5ns_a.csv is named twice, by 'ring_.*' and by 'ring_\{duration\}\*'"):
        read(folder, twice)
    b.write_bytes(a.read_bytes())
    study = read(folder, GOOD)
    with pytest.raises(InputError, match=rf"{a} and {b} are the same byte for byte"):
        study.cases[0].samples()
    b.unlink()
    b.symlink_to(a)
    with pytest.raises(InputError, match=rf"{a} and {b} are one file"):
        study.cases[0].samples()
    with pytest.raises(InputError, match=rf"{c} and {c} are one file"):
        read_samples([c, c], study.cases[1].anneal)
    # a copy in another case of the study is found too
    b.unlink()
    c.write_bytes(a.read_bytes())
    assert [case.samples().n_shots for case in study.cases[1:]] == [4]
    assert any(f"{a} and {c} are the same byte for byte" in problem for problem in read(folder, GOOD).problems())


def test_a_missing_gauge_is_named(folder: Path) -> None:
    (folder / FILES[0]).write_text(f"# gauge: 1 -1 1 1\n{SPINS}")
    case = read(folder, GOOD).cases[0]
    said = r"1 of 2 runs give a gauge and 1 do not \(ring_0.5ns_b.csv\)"
    with pytest.warns(AnnealRefWarning, match=said):
        plain = case.samples()
    samples, note = case.samples_with_note()
    assert note is not None
    assert re.match(said, note)
    np.testing.assert_array_equal(samples.spins, plain.spins)


def test_values_are_for_files_that_do_not_say(folder: Path) -> None:
    text = GOOD.replace("ns*.csv", "ns*") + 'values = "bits"\n'
    for name in FILES:
        (folder / name).unlink()
    spins = [[1, -1, 1, 1], [1, 1, 1, 1]]
    Samples(spins).write(folder / "ring_0.5ns.h5")
    np.savetxt(folder / "ring_0.5ns.csv", (1 - np.array(spins)) // 2, fmt="%d", delimiter=",")
    Samples(spins).write(folder / "ring_2ns.csv")
    study = read(folder, text)
    assert study.cases[0].samples().spins.tolist() == spins + spins
    with pytest.raises(
        InputError, match=r"ring_2ns.csv: .*the key `values` in \[samples\] of the study says bits.*remove"
    ):
        study.cases[1].samples()


def test_a_gauge_of_another_length_names_its_file(folder: Path) -> None:
    (folder / FILES[1]).write_text(f"# gauge: 1 -1 1\n{SPINS}")
    (folder / FILES[2]).write_text(f"# gauge: 1 -1 1\ns0,s1,s2,s3\n{SPINS}")
    for case, name in zip(read(folder, GOOD).cases, FILES[1:], strict=True):
        with pytest.raises(InputError, match=name):
            case.samples()


def test_equal_files_with_batches_of_their_own_are_no_copies(folder: Path) -> None:
    (folder / "ring_0.5ns_b.csv").write_bytes((folder / "ring_0.5ns_a.csv").read_bytes())
    with pytest.raises(InputError, match="give each its batch in its manifest"):
        read(folder, GOOD).cases[0].samples()
    for name, batch in (("a", 1), ("b", 2)):
        (folder / f"ring_0.5ns_{name}.csv.manifest.json").write_text(
            f'{{"format": "anneal_ref samples 1", "batch": {batch}}}'
        )
    assert read(folder, GOOD).cases[0].samples().n_groups == 2
