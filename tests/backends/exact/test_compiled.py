"""The disk cache of compiled kernels never outlives a change of any kernel file."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import anneal_ref

ZZ = """
from anneal_ref.backends.exact.register import Register
register = Register([[0.0, 1.0], [1.0, 0.0]], [0.0, 0.0], [1.0, 1.0])
register.layers([0.3, 0.2], [0.4, 0.7])
print(register.moments()[1][0, 1])
"""


@pytest.mark.slow
def test_a_change_in_an_inner_kernel_file_is_compiled(tmp_path):
    package = tmp_path / "anneal_ref"
    shutil.copytree(Path(anneal_ref.__file__).parent, package, ignore=shutil.ignore_patterns("__pycache__"))
    environment = {**os.environ, "PYTHONPATH": str(tmp_path), "NUMBA_CACHE_DIR": str(tmp_path / "cache")}

    def measured():
        command = [sys.executable, "-P", "-c", ZZ]
        return float(subprocess.run(command, env=environment, capture_output=True, text=True, check=True).stdout)

    right = measured()
    assert measured() == right
    phases = package / "backends/exact/phases.py"
    stat = phases.stat()
    wrong = phases.read_text().replace("        e[o + z] = v + u[z]", "        e[o + z] = v - u[z]")
    wrong = wrong.replace("            e[o + size + z] = v - u[z]", "            e[o + size + z] = v + u[z]")
    assert wrong != phases.read_text()
    phases.write_text(wrong)
    os.utime(phases, (stat.st_atime, stat.st_mtime))
    assert abs(measured() - right) > 1e-3
    assert np.isfinite(right)
