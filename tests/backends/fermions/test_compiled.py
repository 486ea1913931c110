"""The stamp of the disk cache knows every file that a kernel comes from."""

from pathlib import Path

from anneal_ref.backends.fermions import compiled


def test_all_sources_of_kernels_are_stamped():
    folder = Path(compiled.__file__).parent
    stamped = {(folder / f"{name}.py").resolve() for name in compiled.KERNELS}
    own = {path for path in folder.glob("*.py") if "@njit" in path.read_text() and path.stem != "compiled"}
    used = {
        folder.parent / "exact" / f"{line.split('.')[3].split()[0]}.py"
        for path in own
        for line in path.read_text().splitlines()
        if line.startswith("from anneal_ref.backends.exact.")
    }
    assert {path.resolve() for path in own | used} == stamped
