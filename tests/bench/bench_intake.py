"""Bulk intake against a plain chunked copy of the same data, both with peak memory.

    python tests/bench/bench_intake.py [--points 1000000] [--files 10000]

Each part runs in a process of its own, so that its peak memory is its own.
"""

import argparse
import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

STATES, INPUTS, OUTPUTS = 8, 2, 3


def models(start: int, stop: int, total: int) -> dict[str, np.ndarray]:
    """Smooth matrices of a range of points on a grid of 1000 speeds."""
    rng = np.random.default_rng(1)
    k = np.arange(start, stop)
    speed, mass = 10.0 + (k % 1000) * 0.01, 80.0 + (k // 1000) * 0.05
    shapes = {
        "A": (STATES, STATES),
        "B": (STATES, INPUTS),
        "C": (OUTPUTS, STATES),
        "D": (OUTPUTS, INPUTS),
    }
    found = {}
    for name, shape in shapes.items():
        base, slope, curve = rng.standard_normal((3, *shape))
        x, y = speed[:, None, None] / 20, mass[:, None, None] / 100
        found[name] = base + slope * x + curve * x * y
        # Some entries never change, as in models of machines.
        found[name][:, ::2, ::2] = base[::2, ::2]
    return found | {"points/speed": speed, "points/mass": mass}


def write_stack(path: Path, points: int) -> None:
    """Write one file of many points."""
    import h5py

    with h5py.File(path, "w") as file:
        for start in range(0, points, 100_000):
            stop = min(points, start + 100_000)
            for name, block in models(start, stop, points).items():
                if name not in file:
                    file.create_dataset(name, (points, *block.shape[1:]), "<f8")
                file[name][start:stop] = block


def write_files(folder: Path, count: int) -> None:
    """Write many files of one point."""
    import h5py

    content = models(0, count, count)
    for k in range(count):
        with h5py.File(folder / f"p{k:06d}.h5", "w") as file:
            for name, block in content.items():
                file[name] = block[k]


def copy(source: Path, target: Path) -> None:
    """Copy all datasets in chunks of 8 MB."""
    import h5py

    with h5py.File(source) as old, h5py.File(target, "w") as new:
        names: list[str] = []
        old.visititems(lambda name, item: names.append(name) if hasattr(item, "shape") else None)
        for name in names:
            data = old[name]
            rows = max(1, 8_000_000 // (data.nbytes // len(data)))
            made = new.create_dataset(name, data.shape, data.dtype)
            for start in range(0, len(data), rows):
                made[start : start + rows] = data[start : start + rows]


def take_in(source: Path, target: Path) -> None:
    """Ingest."""
    from ssaudit.intake.ingest import ingest

    intake = ingest([source], revision="R", bank=target)
    assert not intake.void, intake.void


def measured(what: str, source: Path, target: Path) -> tuple[float, float]:
    """Run a part in a process of its own; wall time [s] without start-up, and peak memory [MB]."""
    command = [sys.executable, __file__, "--part", what, str(source), str(target)]
    result = subprocess.run(command, check=True, capture_output=True, text=True)
    target.unlink()
    found = json.loads(result.stdout)
    return found["seconds"], found["megabytes"]


def run_part(what: str, source: Path, target: Path) -> None:
    """Do one part and print what it took."""
    start = time.perf_counter()
    (copy if what == "copy" else take_in)(source, target)
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(json.dumps({"seconds": seconds, "megabytes": peak}))


def main() -> None:
    """Measure and report."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--points", type=int, default=1_000_000)
    parser.add_argument("--files", type=int, default=10_000)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--part", nargs=3, metavar=("WHAT", "SOURCE", "TARGET"))
    options = parser.parse_args()
    if options.part:
        run_part(options.part[0], Path(options.part[1]), Path(options.part[2]))
        return
    with tempfile.TemporaryDirectory() as folder:
        stack, target = Path(folder) / "stack.h5", Path(folder) / "bank.h5"
        write_stack(stack, options.points)
        size = stack.stat().st_size / 1e6
        runs = [(measured("copy", stack, target), measured("ingest", stack, target))
                for _ in range(options.repeats)]  # fmt: skip
        print("  runs", [(round(c[0], 2), round(t[0], 2)) for c, t in runs])
        floor = min(copied[0] for copied, _ in runs)
        best = min(taken[0] for _, taken in runs)
        peak = max(taken[1] for _, taken in runs)
        print(f"{options.points} points of {STATES} states in one file ({size:.0f} MB)")
        print(f"  copy {floor:.2f} s, ingest {best:.2f} s: {best / floor:.2f} times; {peak:.0f} MB")
        files = Path(folder) / "files"
        files.mkdir()
        write_files(files, options.files)
        seconds, peak = measured("ingest", files, target)
        each = seconds / options.files * 1e3
        print(f"{options.files} files of one point: {seconds:.1f} s; {peak:.0f} MB")
        print(f"  {each:.2f} ms a file")


if __name__ == "__main__":
    main()
