"""Run settings: progress shows only where somebody can see it."""

import pytest

from anneal_ref.base.errors import InputError
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
