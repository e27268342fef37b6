"""Time a point of the margins, against a frequency sweep and the stacked eigenvalues.

Run with ``OPENBLAS_NUM_THREADS=1 python tests/bench/bench_margins.py [points]``.
"""

import sys
import time

import numpy as np

from ssaudit.margins.disk import find_disk_margin
from ssaudit.margins.gain_range import find_gain_range
from ssaudit.margins.loop_margins import find_loop_margins
from ssaudit.margins.real_radius import find_real_radius
from ssaudit.margins.sensitivity import find_sensitivity_peaks
from ssaudit.margins.stability_radius import find_stability_radius

STATES, CHANNELS, SWEPT = 12, 4, 1000


def microseconds(function, points, repeats=3):
    """Best time of some runs [µs a point]."""
    best = np.inf
    for _ in range(repeats):
        start = time.perf_counter()
        function()
        best = min(best, time.perf_counter() - start)
    return best / points * 1e6


def make_models(points):
    """Closed-loop stable models of four channels, and their four single loops, others closed."""
    rng = np.random.default_rng(0)
    models = []
    while sum(len(m[0]) for m in models) < points:
        A = rng.standard_normal((4 * points, STATES, STATES))
        A -= (np.linalg.eigvals(A).real.max(1) + 0.3)[:, None, None] * np.eye(STATES)
        B = rng.standard_normal((4 * points, STATES, CHANNELS))
        C = 0.1 * rng.standard_normal((4 * points, CHANNELS, STATES))
        stable = np.linalg.eigvals(A - B @ C).real.max(1) < 0
        models.append((A[stable], B[stable], C[stable]))
    A, B, C = (np.concatenate(part)[:points] for part in zip(*models, strict=True))
    loops = [
        (A - B @ C + B[:, :, [i]] @ C[:, [i]], B[:, :, [i]], C[:, [i]]) for i in range(CHANNELS)
    ]
    single = [np.concatenate(part) for part in zip(*loops, strict=True)]
    return (A, B, C, np.zeros((points, CHANNELS, CHANNELS))), (
        *single,
        np.zeros((CHANNELS * points, 1, 1)),
    )


def sweep(A, B, C, w):
    """Response of single loops on a grid by stacked solves, one model at a time."""
    identity = 1j * np.eye(A.shape[-1])
    for a, b, c in zip(A, B, C, strict=True):
        c @ np.linalg.solve(w[:, None, None] * identity - a, np.broadcast_to(b, (len(w), *b.shape)))


def main():
    """Print the figures."""
    points = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    whole, single = make_models(points)
    A, B, C, _ = single
    w = np.geomspace(1e-2, 1e3, SWEPT)
    few = max(1, len(A) // 20)
    swept = microseconds(lambda: sweep(A[:few], B[:few], C[:few], w), few, 1) * CHANNELS
    floor = microseconds(lambda: np.linalg.eigvals(whole[0]), points)
    closed = whole[0] - whole[1] @ whole[2]
    rows = {
        "single-loop margins, 4 loops": lambda: find_loop_margins(*single),
        "gain range, 4 loops": lambda: find_gain_range(*single),
        "peaks of S and T, 4 loops": lambda: find_sensitivity_peaks(*single),
        "disk margins, 4 loops": lambda: find_disk_margin(*single),
        "gain range, all channels": lambda: find_gain_range(*whole),
        "peaks of S and T, all channels": lambda: find_sensitivity_peaks(*whole),
        "disk margin, all channels": lambda: find_disk_margin(*whole),
        "stability radius, plain and scaled": lambda: [
            find_stability_radius(closed, scaled=scaled) for scaled in (False, True)
        ],
    }
    print(f"{points} points, {STATES} states, {CHANNELS} loops; microseconds a point")
    print(f"{f'sweep of {SWEPT} points, 4 loops':38s} {swept:9.0f}")
    print(f"{'stacked eigenvalues':38s} {floor:9.0f}")
    print(f"{'':38s} {'time':>9s} {'sweep/time':>11s} {'time/eigen':>11s}")
    for name, function in rows.items():
        spent = microseconds(function, points)
        print(f"{name:38s} {spent:9.0f} {swept / spent:11.1f} {spent / floor:11.1f}")
    some = max(1, points // 10)
    spent = microseconds(lambda: find_real_radius(closed[:some]), some, 1)
    print(f"{'real stability radius':38s} {spent:9.0f} {swept / spent:11.1f} {spent / floor:11.1f}")


if __name__ == "__main__":
    main()
