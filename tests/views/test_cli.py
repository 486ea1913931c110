"""The command line: help at once, plain errors, exit codes, nothing lost."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from anneal_ref.base.provenance import library_version
from anneal_ref.studies import assess as assess_module
from anneal_ref.views import cli
from anneal_ref.views.cli import main

STUDY = """
format = 1
name = "one ring"
durations = [0.5]
[schedule]
file = "schedule.csv"
[acceptance]
correlation_error = 0.5
[[instance]]
name = "ring"
file = "ring.json"
[samples]
files = "{instance}_{duration}ns.csv"
"""


@pytest.fixture
def study(tmp_path: Path) -> Path:
    from anneal_ref.model.instances import Instance
    from anneal_ref.model.lattices import chain

    (tmp_path / "study.toml").write_text(STUDY)
    (tmp_path / "schedule.csv").write_text("s,transverse,problem\n0,20,0\n0.5,6,3\n1,0,10\n")
    Instance(chain(4, periodic=True), [1.0, -0.5, 0.25, 1.0]).write(tmp_path / "ring.json")
    spins = np.random.default_rng(1).choice([-1, 1], (200, 4))
    np.savetxt(tmp_path / "ring_0.5ns.csv", spins, fmt="%d", delimiter=",")
    return tmp_path / "study.toml"


def refused(argv: list[str], capsys: pytest.CaptureFixture[str]) -> str:
    """Run a command that must be refused, and return what it says."""
    assert main(argv) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert captured.err.startswith(f"anneal-ref {argv[0]}: ")
    assert "Traceback" not in captured.err
    return captured.err


def test_help_and_version_load_nothing_heavy() -> None:
    code = (
        "import sys\nfrom anneal_ref.views.cli import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit as end:\n    assert end.code == 0\n"
        "heavy = {'numba', 'quimb', 'scipy', 'matplotlib', 'h5py', 'pydantic', 'jinja2', 'tqdm'} & set(sys.modules)\n"
        "sys.exit(f'loaded {heavy}' if heavy else 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    for word in ("demo", "plan", "reference", "assess", "compare", "audit", "exit codes"):
        assert word in done.stdout


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main(["-V"])
    assert end.value.code == 0
    assert capsys.readouterr().out == f"anneal-ref {library_version()}\n"


@pytest.mark.parametrize("argv", [[], ["asses"], ["assess"], ["compare", "x.h5"], ["audit", "d", "--recompute", "x"]])
def test_wrong_arguments_exit_with_2(argv: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main(argv)
    assert end.value.code == 2
    assert "usage:" in capsys.readouterr().err


@pytest.mark.parametrize("command", ["plan", "reference", "assess"])
def test_a_missing_study_is_named(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert "there is no study file none.toml" in refused([command, "none.toml"], capsys)


@pytest.mark.parametrize(
    ("name", "text", "said"),
    [
        ("study.toml", STUDY.replace("[0.5]", "[-0.5]"), "`durations` must be positive"),
        ("study.toml", STUDY.replace("[0.5]", "[0.0]"), "`durations` must be positive"),
        ("study.toml", STUDY.replace("[0.5]", "[nan]"), "must be a finite number; got nan"),
        ("study.toml", STUDY.replace("ring.json", "rong.json"), "there is no file"),
        ("study.toml", STUDY.replace("schedule.csv", "lost.csv"), "there is no file"),
        ("study.toml", STUDY.replace("{instance}_", "lost_"), "lost_0.5ns.csv"),
        ("schedule.csv", "s,transverse,problem\n0,20,0\n1,0,10\n0.5,6,3\n", "s must"),
        ("schedule.csv", "s,transverse,problem\n0,20,0\n0.5,nan,3\n1,0,10\n", "schedule.csv, line 3"),
        ("schedule.csv", "s,transverse,problem\n0,20,0\n0.5,6\n1,0,10\n", "schedule.csv, line 3"),
        ("schedule.csv", "", "holds no table"),
        ("ring.json", "{}", "ring.json"),
        ("ring_0.5ns.csv", "", "ring_0.5ns.csv"),
        ("ring_0.5ns.csv", "1,1,1,-1\n1,1,1\n", "ring_0.5ns.csv: line 2"),
        ("ring_0.5ns.csv", "1,1,1,-1\n1,2,1,1\n", "ring_0.5ns.csv: line 2, column 2"),
        ("ring_0.5ns.csv", "1,1,1,-1\n1,nan,1,1\n", "ring_0.5ns.csv: line 2, column 2"),
        ("ring_0.5ns.csv", "1,1,1\n-1,1,1\n", "ring_0.5ns.csv: samples of 3 spins"),
        ("ring_0.5ns.csv", "1,1,1,1\n1,1,1,1\n", "ring_0.5ns.csv"),
        ("ring_0.5ns.csv", f"# instance: {'a' * 64}\n1,1,1,-1\n", "samples of another instance"),
        ("ring_0.5ns.csv", "# duration: 5\n1,1,1,-1\n", "samples of another anneal"),
        ("ring_0.5ns.csv", "1,1,1,-1\n", "at least 2 shots"),
    ],
)
def test_bad_input_is_one_clear_paragraph_and_loses_nothing(
    study: Path, name: str, text: str, said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    (study.parent / name).write_text(text)
    before = {path.name for path in study.parent.iterdir()}
    assert said in refused(["assess", str(study)], capsys)
    after = {path.name for path in study.parent.iterdir()}
    assert after - before <= {"truth"}


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('"couplings": [\n', '"couplings": [\n 7.0,\n', "couplings"),
        ("-0.5", "NaN", "ring.json"),
        ("-0.5", "Infinity", "ring.json"),
    ],
)
def test_instances_with_bad_couplings(
    study: Path, old: str, new: str, said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    import json

    content = json.loads((study.parent / "ring.json").read_text())
    text = json.dumps(content, indent=1)
    assert old in text
    (study.parent / "ring.json").write_text(text.replace(old, new, 1))
    assert said in refused(["assess", str(study)], capsys)


@pytest.mark.parametrize(
    ("edge", "said"), [([1, 1], "two different sites"), ([1, 0], "coupled once"), ([0, 9], "join sites")]
)
def test_instances_with_bad_edges(study: Path, edge: list[int], said: str, capsys: pytest.CaptureFixture[str]) -> None:
    import json

    path = study.parent / "ring.json"
    content = json.loads(path.read_text())
    places = [content, *[value for value in content.values() if isinstance(value, dict)]]
    holder = next(place for place in places if "edges" in place)
    holder["edges"][1] = edge
    path.write_text(json.dumps(content))
    assert said in refused(["assess", str(study)], capsys)


def test_an_archive_that_cannot_be_made(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (study.parent / "taken").write_text("")
    assert "taken" in refused(["assess", str(study), "--archive", str(study.parent / "taken")], capsys)
    assert "taken" in refused(["audit", str(study.parent / "taken")], capsys)
    assert "there is no such folder" in refused(["audit", str(study.parent / "none")], capsys)


def test_a_page_that_cannot_be_written(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["assess", str(study), "--page", str(study.parent / "none" / "page.html")]) == 2
    captured = capsys.readouterr()
    assert "page.html cannot be written" in captured.err
    assert "REJECTED" in captured.out


def test_strict_exit_codes(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["assess", str(study), "--no-page"]) == 0
    assert main(["assess", str(study), "--no-page", "--strict"]) == 1
    assert capsys.readouterr().out.count("REJECTED") == 2
    study.write_text(STUDY.replace("= 0.5", "= 5.0"))
    assert main(["assess", str(study), "--no-page", "--strict"]) == 0
    assert not study.with_suffix(".html").exists()


@pytest.mark.parametrize("damage", ["cut", "flip"])
def test_a_damaged_archive_file_is_found_and_solved_again(
    study: Path, damage: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["reference", str(study)]) == 0
    (path,) = (study.parent / "truth").glob("*.h5")
    whole = path.read_bytes()
    middle = len(whole) // 2
    path.write_bytes(
        whole[:middle] if damage == "cut" else whole[:middle] + bytes([whole[middle] ^ 4]) + whole[middle + 1 :]
    )
    capsys.readouterr()
    assert main(["audit", str(study.parent / "truth")]) == 1
    assert "1 with problems" in capsys.readouterr().out
    assert path.name in refused(["compare", str(path), str(study.parent / "ring_0.5ns.csv")], capsys)
    assert main(["assess", str(study), "--no-page"]) == 0
    captured = capsys.readouterr()
    assert "note: passed over a reference" in captured.err
    assert "REJECTED" in captured.out
    assert main(["audit", str(study.parent / "truth"), "--recompute", "1"]) == 0


def test_an_interrupt_ends_with_130_and_a_plain_sentence(
    study: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def stop(*args: object, **kwargs: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(assess_module, "reference", stop)
    assert main(["assess", str(study)]) == 130
    err = capsys.readouterr().err
    assert "interrupted. References that were finished are in" in err
    assert "Traceback" not in err


def test_unexpected_errors_are_not_hidden(study: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*args: object, **kwargs: object) -> None:
        raise ZeroDivisionError

    monkeypatch.setattr(assess_module, "reference", broken)
    with pytest.raises(ZeroDivisionError):
        main(["assess", str(study)])


def test_a_study_is_planned_and_solved_before_it_is_measured(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    samples = study.parent / "ring_0.5ns.csv"
    text = samples.read_bytes()
    samples.unlink()
    assert main(["plan", str(study)]) == 0
    out = capsys.readouterr().out
    assert "one ring: 1 case\n" in out
    assert "none yet" in out
    assert "No samples yet for any case" in out
    assert main(["reference", str(study)]) == 0
    capsys.readouterr()
    assert "case 'ring, 0.5 ns' lacks samples" in refused(["assess", str(study)], capsys)
    samples.write_bytes(text)
    assert main(["plan", str(study)]) == 0
    out = capsys.readouterr().out
    assert "No samples yet" not in out
    assert "archived" in out
    assert main(["assess", str(study), "--no-page"]) == 0


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("# duration: 5\n1,1,1,-1\n", "samples of another anneal"),
        (f"# instance: {'a' * 64}\n1,1,1,-1\n", "samples of another instance"),
        ("1,1,1,-1\n1,1,1\n", "line 2"),
    ],
)
def test_a_plan_reads_the_samples_that_are_there(
    study: Path, text: str, said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    (study.parent / "ring_0.5ns.csv").write_text(text)
    assert main(["plan", str(study)]) == 2
    captured = capsys.readouterr()
    assert "To do: 1 reference, " in captured.out
    assert said in captured.err
    assert "ring_0.5ns.csv" in captured.err


def test_the_same_file_twice_is_refused(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reference", str(study)]) == 0
    (path,) = (study.parent / "truth").glob("*.h5")
    samples, copy = study.parent / "ring_0.5ns.csv", study.parent / "copy.csv"
    copy.write_bytes(samples.read_bytes())
    capsys.readouterr()
    assert "are one file" in refused(["compare", str(path), str(samples), str(samples)], capsys)
    assert "the same byte for byte" in refused(["compare", str(path), str(samples), str(copy)], capsys)
    copy.write_text("# values: bits\n0,1,1,1\n")
    assert "the option --values says spins" in refused(["compare", str(path), str(copy), "--values", "spins"], capsys)


def test_a_case_that_does_not_fit_is_named(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from anneal_ref.model.instances import Instance
    from anneal_ref.model.lattices import chain

    Instance(chain(50), np.ones(49)).write(study.parent / "ring.json")
    spins = np.random.default_rng(1).choice([-1, 1], (20, 50))
    np.savetxt(study.parent / "ring_0.5ns.csv", spins, fmt="%d", delimiter=",")
    text = study.read_text()
    study.write_text(text.replace("[acceptance]", '[truth]\nbackend = { kind = "StateVector" }\n[acceptance]'))
    for command in ("plan", "assess"):
        assert "case 'ring, 0.5 ns': the state vector of 50 spins" in refused([command, str(study)], capsys)


def test_an_audit_of_nothing_does_not_pass(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["audit", str(study.parent)]) == 2
    captured = capsys.readouterr()
    assert "there are no references in" in captured.err
    assert "sound" not in captured.out


def test_a_full_output_loses_no_page(study: Path) -> None:
    for command in ("plan", "assess"):
        with open("/dev/full", "w") as full:
            done = subprocess.run(
                [sys.executable, "-m", "anneal_ref.views.cli", command, str(study)],
                stdout=full, stderr=subprocess.PIPE, text=True, check=False,
            )  # fmt: skip
        assert done.returncode == 2
        last = done.stderr.strip().splitlines()[-1]
        assert last == f"anneal-ref {command}: the output cannot be written: the disk is full"
        assert "Traceback" not in done.stderr
        assert "Exception ignored" not in done.stderr
    assert "</html>" in study.with_suffix(".html").read_text()


def test_a_folder_for_a_file_is_told_in_words(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for argv in (["plan", str(study.parent)], ["compare", str(study.parent), "x.csv"]):
        said = refused(argv, capsys)
        assert "it is a folder, not a file" in said
        assert "Errno" not in said


def test_a_note_is_told_once(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rows = np.random.default_rng(2).choice([-1, 1], (2, 200, 4))
    (study.parent / "ring_0.5ns.csv").unlink()
    for k, spins in enumerate(rows):
        np.savetxt(study.parent / f"ring_0.5ns_{k}.csv", spins, fmt="%d", delimiter=",", header=f"batch: {k}" * k)
    study.write_text(STUDY.replace("ns.csv", "ns*.csv"))
    assert main(["assess", str(study)]) == 0
    captured = capsys.readouterr()
    told = [line for line in (captured.out + captured.err).splitlines() if line.startswith("note: ")]
    assert len(told) == len(set(told))
    assert sum("1 of 2 runs give a batch and 1 do not (ring_0.5ns_0.csv)" in line for line in told) == 1
    assert sum("only 2 g" in line for line in told) == 1
    assert "1 of 2 runs give a batch and 1 do not (ring_0.5ns_0.csv)" in study.with_suffix(".html").read_text()


def test_one_instance_is_not_pooled_with_itself(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["assess", str(study)]) == 0
    out, page = capsys.readouterr().out, study.with_suffix(".html").read_text()
    assert out.startswith("one ring: 1 case, limit")
    for text in (out, page):
        assert "all at 0.5 ns" not in text
        assert "all 1 instances" not in text
        assert "1 cases" not in text
    assert "rests on one instance at each duration" in page
    assert "one-sided bounds at this level, which lie inside the two-sided intervals" in out
    assert "disorder: " not in out


def test_exit_codes_are_those_of_the_documentation() -> None:
    told = {int(line.split()[0]) for line in (cli.__doc__ or "").splitlines() if line[:1].isdigit()}
    assert told == {cli.OK, cli.REJECTED, cli.BAD_INPUT, cli.INCONCLUSIVE, cli.INTERRUPTED}
