"""The ferry audited by the tests themselves: from the files, with numpy and scipy alone."""

import csv
import tomllib
from collections import Counter
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np
from scipy.interpolate import RegularGridInterpolator
from scipy.signal import tf2ss

from ssaudit.ferry.models import INPUTS, STATES

ROOT = Path(__file__).parents[2]
DATA, LOOPS = ROOT / "data", ROOT / "configs" / "loops"


@dataclass(frozen=True)
class Outcome:
    """Verdicts of one revision by this file's own reckoning, and how near a limit any point is."""

    ids: np.ndarray
    void: np.ndarray
    lost: np.ndarray
    short: np.ndarray
    max_real: np.ndarray
    nearest: float


def read_gains(path: Path, points: np.ndarray) -> np.ndarray:
    """Gains at speeds and masses, interpolated by scipy."""
    with path.open(newline="") as file:
        rows = list(csv.DictReader(file))
    grid = [sorted({float(row[name]) for row in rows}) for name in ("speed", "mass")]
    values = np.array([[[float(r[f"K:{i}:{s}"]) for s in STATES] for i in INPUTS] for r in rows])
    table = values.reshape(len(grid[0]), len(grid[1]), len(INPUTS), len(STATES))
    return np.asarray(RegularGridInterpolator(grid, table)(points))


def delay_of(loop: str) -> float:
    """Delay [s] on both commands that a loop file states, 0 when it states no part."""
    parts = tomllib.loads((LOOPS / f"ferry-{loop}.toml").read_text()).get("part", [])
    assert all((part["input"], part["pade"]) == ("*", 2) for part in parts)
    return float(sum(part["delay"] for part in parts))


def close(A: np.ndarray, B: np.ndarray, K: np.ndarray, delay: float) -> np.ndarray:
    """Closed loops u = -K x, each command through the Padé model of order 2 of a delay [s]."""
    if delay == 0:
        return A - B @ K
    square, linear = delay**2 / 12, delay / 2
    a, b, c, d = tf2ss([square, -linear, 1.0], [square, linear, 1.0])
    n, commands = A.shape[-1], B.shape[-1]
    late = np.kron(np.eye(commands), a)
    whole = np.zeros((len(A), n + len(late), n + len(late)))
    whole[:, :n, :n] = A - B @ K * d[0, 0]
    whole[:, :n, n:] = B @ np.kron(np.eye(commands), c)
    whole[:, n:, :n] = -np.kron(np.eye(commands), b) @ K
    whole[:, n:, n:] = late
    return whole


def judge(revision: str, loop: str) -> Outcome:
    """Audit one demo export from its files, without the product's own audit."""
    with h5py.File(DATA / f"ferry-{revision}.h5") as file:
        A, B, ids = file["A"][:], file["B"][:], file["ids"][:].astype(str)
        points = np.stack([file[f"points/{n}"][:] for n in ("speed", "mass", "immersion")], axis=1)
    K = read_gains(LOOPS / f"ferry-gains-{loop[0]}.csv", points[:, :2])
    void = ~(np.isfinite(A).all(axis=(1, 2)) & np.isfinite(B).all(axis=(1, 2)))
    places = [tuple(p) for p in points.round(9)]
    by_id, by_place = Counter(ids.tolist()), Counter(places)
    for row, place in enumerate(places):
        void[row] |= by_id[str(ids[row])] > 1 or by_place[place] > 1
    closed = close(A[~void], B[~void], K[~void], delay_of(loop))
    poles = np.full((len(A), closed.shape[-1]), -1.0 + 0j)
    poles[~void] = np.linalg.eigvals(closed)
    max_real = poles.real.max(axis=1)
    lost, gaps = ~void & (max_real >= 0), [np.abs(max_real).min()]
    short = np.zeros(len(ids), dtype=bool)
    requirements = tomllib.loads((ROOT / "configs/criteria/ferry.toml").read_text())["require"]
    for need in requirements:
        low, high = need.get("frequency", (0.0, np.inf))
        inside = (np.abs(poles) >= low) & (np.abs(poles) <= high)
        speed = need.get("where", {}).get("speed", (0.0, np.inf))
        applies = ~void & (points[:, 0] >= speed[0]) & (points[:, 0] <= speed[1])
        value = {"damping_ratio": -poles.real / np.abs(poles), "real": poles.real}[need["quantity"]]
        margin = value - need["at_least"] if "at_least" in need else need["at_most"] - value
        margin = np.where(inside, margin, np.inf).min(axis=1)
        short |= applies & (margin < 0)
        gaps.append(np.abs(margin[applies]).min())
        gaps += [np.abs(np.abs(poles[~void]) - edge).min() for edge in (low, high) if edge]
    return Outcome(ids, void, lost, short & ~lost, max_real, float(min(gaps)))
