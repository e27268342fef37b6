"""Whole-command time and memory of an audit, over the floor of bare stacked eigenvalues.

    python tests/bench/bench_audit.py [--points 200000] [--states 12] [--depth poles]

The floor is two threads of stacked ``numpy.linalg.eigvals`` (``eig`` at depth modes) on the same
closed matrices, held in memory, in the same run. The command is the whole process: start-up,
reading the bank, closing, judging, and writing the ledger.
"""

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import h5py
import numpy as np

import ssaudit

LOOP = 'sign = "negative"\n[gain]\nmatrix = {matrix}\n'
CRITERIA = '[[require]]\nname = "damping"\nquantity = "damping_ratio"\nat_least = 0.1\n'
CHUNK = 10_000
# The command, and then its own peak memory; what the system reports of a child process counts the
# memory of the parent that it was forked from.
COMMAND = """
import sys
from ssaudit.cli import main
code = main(sys.argv[1:])
with open("/proc/self/status") as status:
    print(next(line for line in status if line.startswith("VmHWM")).split()[1], file=sys.stderr)
sys.exit(code)
"""


def write_export(path: Path, points: int, states: int, rng: np.random.Generator) -> None:
    """Damped oscillators in random coordinates: most stable, as a real export would be."""
    with h5py.File(path, "w") as file:
        A = file.create_dataset("A", (points, states, states), "f8")
        B = file.create_dataset("B", (points, states, 2), "f8")
        for start in range(0, points, CHUNK):
            count = min(CHUNK, points - start)
            A[start : start + count] = random_models(count, states, rng)
            B[start : start + count] = rng.standard_normal((count, states, 2))
        speed = file.create_dataset("points/speed", data=np.linspace(10, 25, points))
        speed.attrs["units"] = "m/s"


def random_models(count: int, states: int, rng: np.random.Generator) -> np.ndarray:
    blocks = np.zeros((count, states, states))
    for i in range(0, states - 1, 2):
        frequency = 10 ** rng.uniform(-1, 2, count)
        damping = rng.uniform(0.02, 1.0, count)
        blocks[:, i, i + 1] = frequency
        blocks[:, i + 1, i] = -frequency
        blocks[:, i + 1, i + 1] = -2 * damping * frequency
    if states % 2:
        blocks[:, -1, -1] = -1.0
    T = np.eye(states) + 0.3 * rng.standard_normal((count, states, states)) / np.sqrt(states)
    return T @ blocks @ np.linalg.inv(T)


def floor(bank: Path, K: np.ndarray, depth: str) -> float:
    """Seconds of bare eigenvalues on the closed matrices by two threads."""
    with h5py.File(bank) as file:
        A, B = file["sections/0/A"][:], file["sections/0/B"][:]
    closed = A - B @ K
    solve = np.linalg.eigvals if depth == "poles" else np.linalg.eig
    begin = time.perf_counter()
    with ThreadPoolExecutor(2) as pool:
        list(pool.map(solve, np.array_split(closed, 2 * max(1, len(closed) // CHUNK))))
    return time.perf_counter() - begin


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--points", type=int, default=200_000)
    parser.add_argument("--states", type=int, default=12)
    parser.add_argument("--depth", choices=("poles", "modes"), default="poles")
    parser.add_argument("--runs", type=int, default=3)
    options = parser.parse_args()
    rng = np.random.default_rng(0)
    K = 0.02 * rng.standard_normal((2, options.states))
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        write_export(place / "export.h5", options.points, options.states, rng)
        (place / "loop.toml").write_text(LOOP.format(matrix=K.tolist()))
        (place / "criteria.toml").write_text(CRITERIA)
        run = [sys.executable, "-c", COMMAND]
        ssaudit.ingest([place / "export.h5"], revision="A", bank=place / "bank.h5")
        # An installed package has its bytecode: one run that is not counted makes it here.
        environment = {**os.environ, "PYTHONPYCACHEPREFIX": str(place / "bytecode")}
        environment.pop("PYTHONDONTWRITEBYTECODE", None)
        ratios, times, floors = [], [], []
        for number in range(options.runs + 1):
            seconds = floor(place / "bank.h5", K, options.depth)
            audit = [*run, "audit", "bank.h5", "--loop", "loop.toml", "--criteria"]
            audit += ["criteria.toml", "--ledger", f"ledger-{number}", "--depth", options.depth]
            begin = time.perf_counter()
            done = subprocess.run(audit, cwd=place, capture_output=True, text=True, env=environment)
            taken = time.perf_counter() - begin
            if done.returncode not in (0, 1):
                sys.exit(done.stderr)
            if number:
                floors.append(seconds)
                times.append(taken)
                ratios.append(taken / seconds)
        peak = int(done.stderr.split()[-1]) / 1024
    print(done.stdout.splitlines()[1])
    print(f"{options.points} points of {options.states} states at depth {options.depth}")
    print(f"floor    {statistics.median(floors):.2f} s (median of {options.runs})")
    print(f"command  {statistics.median(times):.2f} s")
    print(f"ratio    {statistics.median(ratios):.2f}")
    print(f"peak memory {peak:.0f} MB")


if __name__ == "__main__":
    main()
