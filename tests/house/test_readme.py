"""What the README shows runs as it stands."""

import os
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

README = (Path(__file__).parents[2] / "README.md").read_text(encoding="utf-8")


def blocks(language):
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)


def test_python_blocks_run_in_order(tmp_path):
    code = "\n".join(blocks("python"))
    environment = {**os.environ, "PYTHONWARNINGS": "error"}
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=tmp_path, env=environment, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    assert "converged" in done.stdout
    assert "all sound" in done.stdout


def test_study_block_is_a_study_but_for_its_files(tmp_path):
    from anneal_ref import Study, StudyError

    (text,) = blocks("toml")
    assert tomllib.loads(text)["format"] == 1
    path = tmp_path / "study.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(StudyError, match="schedule.csv"):
        Study.read(path)
