"""Mutate small exports at random and take them in; run as a program, by test_mutants.py.

    python mutants.py NAME COUNT SEED

Prints what came of it as JSON. Each mutant must end as a bank that can be read back and holds what
a plain reader finds in the mutant, or as a one-line error, with nothing left behind.
"""

import json
import random
import resource
import shutil
import sys
import tempfile
import time
import traceback
import warnings
import zipfile
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

import h5py
import intake_writers as writers
import numpy as np
import pandas as pd
from test_same_bank import EXACT

from ssaudit.bank_file import read_bank
from ssaudit.errors import SsauditError
from ssaudit.intake.ingest import ingest
from ssaudit.intake.look import look

POINTS = 6
# Exports whose A a plain reader finds without knowing the layout.
COMPARED = ("hdf5 first axis", "npz first axis", "csv row", "parquet row")


def mutate(rng: random.Random, data: bytes) -> bytes:
    """Flip, overwrite, insert, remove, copy or cut a few bytes."""
    content = bytearray(data)
    for _ in range(rng.choice([1, 1, 1, 2, 4, 16])):
        if not content:
            break
        start = rng.randrange(len(content))
        stop = min(len(content), start + rng.choice([1, 2, 4, 8, 64]))
        kind = rng.randrange(8)
        if kind == 0:
            content[start] = rng.randrange(256)
        elif kind == 1:
            content[start] ^= 1 << rng.randrange(8)
        elif kind == 2:
            del content[start:stop]
        elif kind == 3:
            content[start:start] = rng.randbytes(stop - start)
        elif kind == 4:
            content[start:stop] = rng.choice([b"\xff", b"\0", b"\x7f", b"9", b","]) * (stop - start)
        elif kind == 5:
            del content[start:]
        elif kind == 6:
            other = rng.randrange(len(content))
            content[start:stop] = content[other : other + stop - start]
        else:
            words = [b"NaN", b"1e999", b'"', b"{", b"[[[[", b"\n", b"-0", b"1_0", b"\xc3(", b"null"]
            content[start:start] = rng.choice(words)
    return bytes(content)


def plain_reading(path: Path):
    """A of all points as a plain reader finds it, or None where there is none to compare with."""
    if path.suffix == ".h5":
        with h5py.File(path) as file:
            return file["A"][:] if "A" in file and file["A"].ndim == 3 else None
    if path.suffix == ".npz" and path.name == "a.npz":
        with zipfile.ZipFile(path) as archive, archive.open("A.npy") as stream:
            return np.lib.format.read_array(stream, allow_pickle=False)
    if path.suffix == ".csv":
        frame = pd.read_csv(path, float_precision="round_trip", encoding="utf-8-sig")
    elif path.suffix == ".parquet":
        frame = pd.read_parquet(path)
    else:
        return None
    names = [f"A[{i},{j}]" for i in range(1, 5) for j in range(1, 5)]
    if not set(names) <= set(frame):
        return None
    numbers = frame[names].apply(pd.to_numeric, errors="coerce")
    return numbers.to_numpy(float).reshape(-1, 4, 4)


def compare(bank, path: Path, problems: list[str]) -> bool:
    """Compare usable models with a plain reading; whether there was one."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            expected = plain_reading(path)
    except Exception:
        return False
    if expected is None:
        return False
    rows = {row.tobytes() for row in expected + 0.0}
    first = 0
    for section in bank.sections:
        A = section.read(0, len(section))["A"]
        void = bank.points.void[first : first + len(section)]
        first += len(section)
        for model in A[void == ""] + 0.0:
            if model.tobytes() not in rows:
                problems.append(f"{path.name}: the bank holds a model that the file does not")
    return True


def look_again(folder: Path, number: int, problems: list[str]) -> None:
    """Look at a mutant too."""
    try:
        look(folder)
    except SsauditError as error:
        if "\n" in str(error):
            problems.append(f"{number}: {str(error)[:300]!r}")
    except Exception:
        problems.append(f"{number}: {traceback.format_exc(limit=-3)}")


def run(name: str, count: int, seed: int) -> dict:
    """Take mutants of one kind of export in."""
    base = Path(tempfile.mkdtemp())
    folder, target, layout = base / "x", base / "bank.h5", base / "layout.toml"
    folder.mkdir()
    layout.write_text(EXACT[name](folder, writers.Models(POINTS)))
    files = sorted(file for file in folder.rglob("*") if file.is_file())
    rng = random.Random(seed)
    found = {"banks": 0, "errors": 0, "compared": 0, "slowest": 0.0, "problems": []}
    for number in range(count):
        file = rng.choice(files)
        original = file.read_bytes()
        file.write_bytes(mutate(rng, original))
        start = time.perf_counter()
        try:
            intake = ingest([folder], revision="R", bank=target, layout=layout)
            with read_bank(target) as bank:
                assert len(bank) == intake.points
                assert bank.compute_digest() == intake.digest
                found["banks"] += 1
                if name in COMPARED:
                    found["compared"] += compare(bank, file, found["problems"])
        except SsauditError as error:
            found["errors"] += 1
            if "\n" in str(error) or len(str(error)) > 1000:
                found["problems"].append(f"{number}: {str(error)[:300]!r}")
        except Exception:
            found["problems"].append(f"{number}: {traceback.format_exc(limit=-3)}")
        if number % 10 == 0:
            look_again(folder, number, found["problems"])
        found["slowest"] = max(found["slowest"], time.perf_counter() - start)
        file.write_bytes(original)
        target.unlink(missing_ok=True)
        left = sorted(p.name for p in base.iterdir())
        if left != ["layout.toml", "x"]:
            found["problems"].append(f"{number}: left behind {left}")
    shutil.rmtree(base)
    found["megabytes"] = peak_megabytes()
    return found


def peak_megabytes() -> float:
    """Peak memory of this process, without that of the one which it was forked from."""
    status = Path("/proc/self/status")
    if not status.exists():
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    peak = next(line for line in status.read_text().splitlines() if line.startswith("VmHWM"))
    return int(peak.split()[1]) / 1024


if __name__ == "__main__":
    warnings.simplefilter("error")
    print(json.dumps(run(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]))))
