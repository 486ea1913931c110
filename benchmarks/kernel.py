"""The register: time of a layer, gains of symmetry, precision and threads, read-outs, compilation and memory.

    python benchmarks/kernel.py --quick     a minute
    python benchmarks/kernel.py --full      some minutes; 9 GiB of memory for N = 30

One-thread times are CPU times of the thread, two-thread times are wall times; each is the least of several repeats,
taken in turn (A B C, A B C, ...), so that ratios come from one run and a busy machine disturbs them little.
A layer is all X rotations and the phase; nanoseconds are per stored amplitude.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable

import numpy as np

from anneal_ref.backends.exact.register import Register


def cylinder(n: int) -> np.ndarray:
    """+-1 couplings between neighbours on a strip four sites around."""
    rng, couplings = np.random.default_rng(n), np.zeros((n, n))
    for i in range(n):
        for j in (i + 1 if i % 4 < 3 else i - 3, i + 4):
            if j < n:
                couplings[i, j] = couplings[j, i] = rng.choice([-1.0, 1.0])
    return couplings


def register(n: int, symmetric: bool = False, precision: str = "double", threads: int = 1) -> Register:
    return Register(cylinder(n), np.zeros(n), np.ones(n), symmetric, precision, threads)


def least(work: dict[str, Callable[[], object]], repeats: int, clock: Callable[[], float]) -> dict[str, float]:
    """Least time of each piece of work, taken in turn."""
    for run in work.values():
        run()
    best = dict.fromkeys(work, np.inf)
    for _ in range(repeats):
        for name, run in work.items():
            start = clock()
            run()
            best[name] = min(best[name], clock() - start)
    return best


def layers(subject: Register, count: int) -> Callable[[], object]:
    angles = np.full(count, 1e-3)
    return lambda: subject.layers(angles, angles)


def number(n: int) -> int:
    """Layers of a timing: about 10 ms of work, an even number."""
    return 2 * max(1, min(1000, (1 << 22) >> n))


def layer_table(sizes: range | list[int], repeats: int) -> None:
    print("\nA layer on one core; gain = time of the full space in double precision / time")
    print(" N   full, double           half (h = 0)          single")
    for n in sizes:
        subjects = {"full": register(n), "half": register(n, True), "single": register(n, precision="single")}
        count = number(n)
        work = {name: layers(subject, count) for name, subject in subjects.items()}
        t = {name: value / count for name, value in least(work, repeats, time.thread_time).items()}
        per = {name: value / 2.0 ** (n - (name == "half")) * 1e9 for name, value in t.items()}
        print(
            f"{n:2}   {t['full'] * 1e6:10.2f} us {per['full']:5.2f} ns   {per['half']:5.2f} ns  gain "
            f"{t['full'] / t['half']:4.2f}   {per['single']:5.2f} ns  gain {t['full'] / t['single']:4.2f}",
            flush=True,
        )


def thread_table(sizes: list[int], repeats: int) -> None:
    print("\nTwo threads against one, wall time")
    for n in sizes:
        for symmetric in (False, True):
            count = number(n)
            work = {str(k): layers(register(n, symmetric, threads=k), count) for k in (1, 2)}
            t = least(work, repeats, time.perf_counter)
            print(
                f"N = {n} {'half' if symmetric else 'full'}: {t['1'] / count * 1e3:8.3f} ms -> "
                f"{t['2'] / count * 1e3:8.3f} ms, gain {t['1'] / t['2']:4.2f}",
                flush=True,
            )


def readout_table(sizes: list[int], repeats: int) -> None:
    print("\nRead-outs on one core, ns per stored amplitude")
    for n in sizes:
        subject = register(n)
        subject.layers([0.1, 0.2], [0.3, 0.4])
        subject.norm()
        work = {
            "norm": subject.norm,
            "all <ZZ>, <Z>, <X>": subject.moments,
            "10000 samples": lambda subject=subject: subject.sample(10000, 1),
        }
        t = least(work, repeats, time.thread_time)
        print(f"N = {n}: " + ", ".join(f"{name} {value / 2**n * 1e9:.2f}" for name, value in t.items()), flush=True)


MEMORY = """
import sys, time
from pathlib import Path
import numpy as np
from anneal_ref.backends.exact.register import Register
n, symmetric = int(sys.argv[1]), sys.argv[2] == "half"
register = Register(np.roll(np.eye(n), 1, 0) + np.roll(np.eye(n), -1, 0), np.zeros(n), np.ones(n), symmetric)
start = time.perf_counter()
register.layers(np.full(4, 0.02), np.full(4, 0.01))
seconds = (time.perf_counter() - start) / 4
register.moments()
register.sample(1000, 0)
state = 16 << (n - symmetric)
status = Path("/proc/self/status").read_text().split()
peak = 1024 * int(status[status.index("VmHWM:") + 1])
print(f"N = {n} {sys.argv[2]}: state {state / 2**20:8.0f} MiB, peak of the process {peak / 2**20:8.0f} MiB, "
      f"allowed {1.25 * state / 2**20 + 250e6 / 2**20:8.0f} MiB, {seconds:.2f} s a layer, norm {register.norm():.12f}")
"""

COMPILE = """
import time
start = time.process_time()
import numpy as np
from anneal_ref.backends.exact.register import Register
imported = time.process_time()
register = Register(np.zeros((8, 8)), np.zeros(8), np.ones(8), precision="{}")
register.layers([0.1], [0.1])
register.moments(), register.sample(1, 0)
print(f"{}: import {{imported - start:.1f}} s, everything compiled {{time.process_time() - imported:.1f}} s (CPU)")
"""


def fresh(code: str, *arguments: str, cache: str | None = None) -> None:
    environment = dict(os.environ) if cache is None else os.environ | {"NUMBA_CACHE_DIR": cache}
    subprocess.run([sys.executable, "-c", code, *arguments], check=True, env=environment)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    chosen = parser.add_mutually_exclusive_group()
    chosen.add_argument("--quick", action="store_true", help="small sizes (default)")
    chosen.add_argument("--full", action="store_true", help="all sizes, N = 30 too")
    full = parser.parse_args().full
    layer_table([8, 10, *range(12, 21), 22, 24, 26] if full else [12, 14, 16, 18, 20], 15 if full else 7)
    thread_table([20, 22, 24] if full else [20], 15)
    readout_table([16, 20, 24] if full else [16, 20], 5)
    print("\nFirst use, nothing cached")
    for precision in ("double", "single"):
        with tempfile.TemporaryDirectory() as cache:
            fresh(COMPILE.format(precision, precision), cache=cache)
    print("\nMemory", flush=True)
    for n, kind in ((22, "full"), (24, "half"), *(((28, "half"), (30, "half")) if full else ())):
        fresh(MEMORY, str(n), kind)


if __name__ == "__main__":
    main()
