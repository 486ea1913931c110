"""The notebooks are kept as they ran, and still run."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

NOTEBOOKS = sorted((Path(__file__).parents[2] / "notebooks").glob("*.ipynb"))

RUN = """
import sys
import nbformat
from nbclient import NotebookClient

book = nbformat.read(sys.argv[1], as_version=4)
NotebookClient(book, timeout=600, kernel_name="python3", resources={"metadata": {"path": sys.argv[2]}}).execute()
outputs = [output for cell in book.cells if cell.cell_type == "code" for output in cell.outputs]
said = "".join(output.text for output in outputs if output.output_type == "stream" and output.name == "stderr")
sys.exit(said or 0)
"""


def test_there_are_two():
    assert [path.stem for path in NOTEBOOKS] == ["convergence", "one_instance"]


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_kept_as_it_ran(path):
    """Every cell was run once, in order, without an error or a complaint, and the file is small."""
    book = json.loads(path.read_text(encoding="utf-8"))
    cells = [cell for cell in book["cells"] if cell["cell_type"] == "code"]
    assert [cell["execution_count"] for cell in cells] == list(range(1, len(cells) + 1))
    outputs = [output for cell in cells for output in cell["outputs"]]
    assert all(output["output_type"] != "error" and output.get("name") != "stderr" for output in outputs)
    assert any("image/png" in output.get("data", {}) for output in outputs)
    assert path.stat().st_size < 300_000


@pytest.mark.slow
@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_runs(path, tmp_path):
    pytest.importorskip("nbclient")
    pytest.importorskip("ipykernel")
    done = subprocess.run(
        [sys.executable, "-c", RUN, str(path), str(tmp_path)], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
