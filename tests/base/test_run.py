"""Run settings: progress shows only where somebody can see it; every computation gets a checkpoint of its own."""

import pickle
from pathlib import Path

import pytest

from anneal_ref.base.errors import ArchiveError, InputError
from anneal_ref.base.run import Run


def test_no_bar_away_from_a_terminal(capsys):
    with Run().track(3, "work") as bar:
        bar.update(3, note="done")
    assert capsys.readouterr().err == ""


def test_bar_on_request(capsys):
    with Run(progress=True).track(2, "work") as bar:
        bar.update(2, note="s = 1")
    assert "work" in capsys.readouterr().err


@pytest.mark.parametrize("threads", [0, -1, 1.5, True])
def test_threads(threads):
    with pytest.raises(InputError, match="threads must be a whole number of at least 1"):
        Run(threads=threads)


@pytest.mark.parametrize("every", [-1, float("nan"), float("inf"), "60", None])
def test_every(every):
    with pytest.raises(InputError, match=r"every must be a finite number of at least 0.0 s; got"):
        Run(every=every)


@pytest.mark.parametrize("path", ["", ".", "..", "folder/", "folder/..", "a\0b", b"run.h5", 3, True, ["run.h5"]])
def test_a_checkpoint_is_the_path_of_a_file(path):
    with pytest.raises(InputError, match=r"checkpoint must be the path of a file, such as 'run.h5'; got"):
        Run(checkpoint=path)


def test_the_same_path_is_the_same_run():
    one, other = Run(checkpoint=Path("a") / "run.h5"), Run(checkpoint="a/run.h5")
    assert one == other
    assert hash(one) == hash(other)
    assert pickle.loads(pickle.dumps(one)) == one
    assert one.every == 600.0
    assert one.checkpoint == str(Path("a/run.h5"))
    with pytest.raises(AttributeError):
        one.checkpoint = "b"


@pytest.mark.parametrize(
    ("path", "part"),
    [("run.h5", "run-x_2.h5"), ("a.b/run", "a.b/run-x_2"), ("run.tar.h5", "run.tar-x_2.h5"), (".run", ".run-x_2")],
)
def test_a_part_has_a_file_of_its_own(path, part):
    run = Run(threads=2, progress=False, checkpoint=path, every=5)
    assert run.part("x_2") == Run(threads=2, progress=False, checkpoint=part, every=5)
    assert len({run.part(name).checkpoint for name in ("a", "b", "a-b", "A")}) == 4


def test_a_part_without_a_checkpoint_is_the_run_itself():
    assert Run(threads=3).part("x") == Run(threads=3)


@pytest.mark.parametrize("name", ["", "a/b", "..\\a", "a b", "ä", 3, None])
def test_names_of_parts(name):
    with pytest.raises(InputError, match="name must be made of letters, digits"):
        Run(checkpoint="run.h5").part(name)


def test_forget(tmp_path):
    run = Run(checkpoint=tmp_path / "run.h5")
    run.forget()
    Path(run.checkpoint).write_bytes(b"state")
    run.part("other").forget()
    assert Path(run.checkpoint).exists()
    run.forget()
    assert not Path(run.checkpoint).exists()
    Run().forget()
    Path(run.checkpoint).mkdir()
    with pytest.raises(ArchiveError, match="cannot remove the checkpoint .*; remove it by hand"):
        run.forget()
