"""Cost of radii, cross-checks, hidden modes, descriptor models and proofs, over bare eigenvalues.

    python tests/bench/bench_trust.py [--points 20000] [--states 12]

The floor is stacked ``numpy.linalg.eig`` on the same matrices in the same run, one thread each.
Times are the best of several repetitions.
"""

import argparse
import os
import time
from collections.abc import Callable
from functools import partial

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from ssaudit.modes.clusters import balance_scaling, cluster_radii
from ssaudit.modes.descriptor import descriptor_modes
from ssaudit.modes.entry_errors import closed_loop_entry_error
from ssaudit.modes.evidence import cross_check
from ssaudit.modes.hidden import hidden_modes
from ssaudit.modes.poles import find_modes
from ssaudit.modes.proof import prove_stability
from ssaudit.modes.radii import pole_radii
from ssaudit.modes.stacked import find_usable_modes

REPETITIONS = 3
CHUNK = 2_000
PROOFS = 40


def best(work: Callable[[], object]) -> float:
    """Shortest time of a few repetitions [s]."""
    times = []
    for _ in range(REPETITIONS):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def random_loops(points: int, states: int, rng: np.random.Generator) -> dict[str, np.ndarray]:
    A = rng.standard_normal((points, states, states)) - 2 * np.sqrt(states) * np.eye(states)
    return {
        "A": A,
        "B": rng.standard_normal((points, states, 3)),
        "C": rng.standard_normal((points, 4, states)),
        "D": 0.05 * rng.standard_normal((points, 4, 3)),
        "K": 0.1 * rng.standard_normal((points, 3, 4)),
    }


def all_in_chunks(A: np.ndarray, error: np.ndarray | None) -> None:
    """Vectors, left vectors, radii, participation and cross-checks, as an audit does them."""
    for start in range(0, len(A), CHUNK):
        part = A[start : start + CHUNK]
        entry_error = None
        if error is not None:
            entry_error = partial(np.take, error[start : start + CHUNK], axis=0)
        modes, _ = find_usable_modes(part, np.ones(len(part), dtype=bool), entry_error)
        low, high = modes.real_range()
        cross_check(part, modes.s, (high < 0).all(axis=1), (low > 0).any(axis=1))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--points", type=int, default=20_000)
    parser.add_argument("--states", type=int, default=12)
    arguments = parser.parse_args()
    points, states = arguments.points, arguments.states
    rng = np.random.default_rng(0)
    parts = random_loops(points, states, rng)
    A, error = parts["A"], 1e-6 * np.abs(parts["A"])
    poles, right, left, _ = find_modes(A)
    stable = (poles.real < 0).all(axis=1)
    E = np.eye(states) + 0.1 * rng.standard_normal((points, states, states))
    algebraic = E.copy()
    algebraic[:, -2:], algebraic[:, :, -2:] = 0.0, 0.0
    floor = best(lambda: np.linalg.eig(A))
    print(f"floor: stacked eig, {floor / points * 1e6:.1f} us a point of {states} states")
    works: dict[str, Callable[[], object]] = {
        "inverse of the vectors": lambda: np.linalg.inv(right),
        "radii, exact entries": lambda: pole_radii(A, poles, right, left),
        "radii, uncertain entries": lambda: pole_radii(A, poles, right, left, entry_error=error),
        "cross-checks": lambda: cross_check(A, poles, stable, ~stable),
        "error of closed entries": lambda: closed_loop_entry_error(**parts, sign=-1, digits=6),
        "all but closing, exact entries": lambda: all_in_chunks(A, None),
        "all but closing, uncertain entries": lambda: all_in_chunks(A, error),
        "hidden modes, all poles": lambda: hidden_modes(
            A, parts["B"], parts["C"], poles, right, left
        ),
        "descriptor, regular": lambda: descriptor_modes(A, E),
        "descriptor, two algebraic": lambda: descriptor_modes(A, algebraic),
    }
    for name, work in works.items():
        print(f"{name}: {best(work) / floor:.2f} of the floor")
    for name, work in dear_works(parts).items():
        times = sorted(best(lambda i=i, work=work: work(i)) * 1e3 for i in range(PROOFS))
        print(f"{name}: median {times[PROOFS // 2]:.2f} ms, longest {times[-1]:.2f} ms a point")


def dear_works(parts: dict[str, np.ndarray]) -> dict[str, Callable[[int], object]]:
    """What is done for chosen points only; the proved loops have a pole near the axis."""
    states = parts["A"].shape[1]

    def prove(i: int, digits: int | None, dt: float) -> object:
        A, B, C, D, K = (parts[name][i] for name in "ABCDK")
        closing = B @ np.linalg.solve(np.eye(len(K)) + K @ D, K) @ C
        A = A - (np.linalg.eigvals(A - closing).real.max() + 1e-3) * np.eye(states)
        if dt:
            A, B = np.eye(states) + 0.05 * A, 0.05 * B
        return prove_stability(A, B, C, D, K, digits=digits, dt=dt)

    def cluster(i: int) -> object:
        A = parts["A"][i]
        return cluster_radii(A, np.linalg.eigvals(A), None, balance_scaling(A[None])[0])

    return {
        "cluster bound": cluster,
        "proof, exact": lambda i: prove(i, None, 0.0),
        "proof, exact, sampled": lambda i: prove(i, None, 0.05),
        "proof, 6 digits": lambda i: prove(i, 6, 0.0),
        "proof, 4 digits": lambda i: prove(i, 4, 0.0),
        "proof, 4 digits, sampled": lambda i: prove(i, 4, 0.05),
    }


if __name__ == "__main__":
    main()
