"""The margins that data/README.md tells, against a sweep of the whole envelope done by hand."""

from functools import cache
from itertools import product

import h5py
import numpy as np
import pytest
from ferry_reckoning import DATA, LOOPS, delay_of, read_gains

from ssaudit.auditing import audit
from ssaudit.bank_arrays import build_bank
from ssaudit.criteria import Criteria
from ssaudit.ferry.export import IMMERSIONS, MASSES, REVISIONS, SPEEDS
from ssaudit.ferry.models import INPUTS, STATES, build_models
from ssaudit.loop.files import read_loop

TOLD = {  # least gain margin [dB] and phase margin [deg] of all single loops, and where
    "a": {"gain": (5.47, "v24-m125-h1.8"), "phase": (31.5, "v24-m100-h1.2")},
    "c": {"gain": (5.19, "v24-m125-h1.0"), "phase": (35.8, "v24-m125-h1.0")},
}
FREQUENCIES = np.geomspace(0.3, 40.0, 400)  # rad/s
COARSE = 0.05  # dB and deg: what interpolation between these frequencies may be off


@cache
def swept(revision: str) -> dict[str, float]:
    """Least margins of every loop with the others closed, over the undamaged envelope."""
    points = np.array(list(product(SPEEDS, MASSES, IMMERSIONS)))
    models = build_models(REVISIONS[revision].ferry, *points.T)
    K = read_gains(LOOPS / f"ferry-gains-{revision}.csv", points[:, :2])
    ratios = [
        ratio
        for A, B, gain in zip(models.A, models.B, K, strict=True)
        for ratio in return_ratios(A, B, gain, delay_of(revision))
    ]
    return {"gain": min(map(gain_margin, ratios)), "phase": min(map(phase_margin, ratios))}


def return_ratios(A: np.ndarray, B: np.ndarray, K: np.ndarray, delay: float) -> np.ndarray:
    """What returns to each input and each fed-back state, the delay as it is."""
    s = 1j * FREQUENCIES[:, None, None]
    states = np.linalg.solve(s * np.eye(len(A)) - A, np.exp(-s * delay) * B)
    at_inputs = np.linalg.inv(np.eye(len(K)) + K @ states)
    at_signals = np.linalg.inv(np.eye(len(A)) + states @ K)
    fed = np.abs(K).max(axis=0) > 0
    diagonals = [np.einsum("wii->iw", S) for S in (at_inputs, at_signals)]
    return np.concatenate([1 / diagonals[0] - 1, 1 / diagonals[1][fed] - 1])


def crossings(values: np.ndarray, ratio: np.ndarray) -> np.ndarray:
    """The ratio where real values change their sign, interpolated in logarithm.

    Size and angle each, so that a ratio that passes through infinity keeps its size.
    """
    low, high = values[:-1], values[1:]
    where = np.flatnonzero(low * high < 0)
    share = low[where] / (low[where] - high[where])
    turn = np.log(ratio[where + 1] / ratio[where])
    return ratio[where] * np.exp(share * turn)


def gain_margin(ratio: np.ndarray) -> float:
    crossing = crossings(ratio.imag, ratio)
    at_180 = np.abs(np.angle(-crossing)) < np.pi / 4
    return float(np.abs(20 * np.log10(np.abs(crossing[at_180]))).min(initial=np.inf))


def phase_margin(ratio: np.ndarray) -> float:
    crossing = crossings(np.log(np.abs(ratio)), ratio)
    return float(np.degrees(np.abs(np.angle(-crossing))).min(initial=np.inf))


@pytest.mark.parametrize("revision", TOLD)
def test_sweep_finds_the_margins_told(revision: str) -> None:
    for kind, (value, _) in TOLD[revision].items():
        assert swept(revision)[kind] == pytest.approx(value, abs=COARSE)


@pytest.mark.parametrize("revision", TOLD)
def test_audit_finds_the_margins_told(revision: str) -> None:
    with h5py.File(DATA / f"ferry-{revision}.h5") as file:
        ids = file["ids"][:].astype(str)
        rows = np.flatnonzero(np.isin(ids, [point for _, point in TOLD[revision].values()]))
        A, B = file["A"][:][rows], file["B"][:][rows]
        place = {"speed": (file["points/speed"][:][rows], "m/s")}
        place["mass"] = (file["points/mass"][:][rows], "t")
    about = {"states": STATES, "inputs": INPUTS, "coordinates": place, "ids": ids[rows].tolist()}
    bank = build_bank(A, B, revision=revision, **about)
    loop = read_loop(LOOPS / f"ferry-{revision}.toml")
    points = audit(bank, loop, Criteria(), depth="margins", workers=1).points.set_index("point")
    for kind, column in (("gain", "gain_margin_db"), ("phase", "phase_margin_deg")):
        value, point = TOLD[revision][kind]
        assert points[column].idxmin() == point
        assert points[column].min() == pytest.approx(value, abs=0.05)
        # Healthy for a demo.
        assert points[column].min() > {"gain": 4.0, "phase": 25.0}[kind]


def test_sweep_can_tell_a_worse_loop() -> None:
    # Control: at a third more gain all margins of this point shrink visibly.
    point = np.array([24.0]), np.array([125.0]), np.array([1.8])
    models = build_models(REVISIONS["a"].ferry, *point)
    K = read_gains(LOOPS / "ferry-gains-a.csv", np.array([[24.0, 125.0]]))[0]
    plain, more = (
        min(map(phase_margin, return_ratios(models.A[0], models.B[0], f * K, 0.01)))
        for f in (1.0, 4 / 3)
    )
    assert more < plain - 5.0
