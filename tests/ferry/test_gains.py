"""Gains: optimal in the sense of the return difference, and the table holds them."""

import csv
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from ssaudit.ferry.gains import (
    IMMERSION,
    MASSES,
    SPEEDS,
    WEIGHTS_A,
    WEIGHTS_C,
    Weights,
    design_gain,
    write_gains,
)
from ssaudit.ferry.models import INPUTS, STATES, build_models
from ssaudit.ferry.vessel import BOW_TANK, STERN_TANK, Ferry

RIGID = [STATES.index(s) for s in ("heave", "heave_rate", "pitch", "pitch_rate")]
FLAPS = [STATES.index(s) for s in ("flap_fore", "flap_aft")]
FREQUENCIES = np.logspace(-2, 3, 60)  # rad/s


def smallest_return_difference(ferry: Ferry, weights: Weights, factor: float = 1.0) -> float:
    """Smallest singular value of I + K (jw - A)^-1 B with ideal flaps and true height.

    Flap angles are counted in shares of the departures that the cost counts as equally bad.
    """
    point = np.array([21.0]), np.array([115.0]), np.array([IMMERSION])
    full = build_models(ferry, *point).A[0]
    A, B = full[np.ix_(RIGID, RIGID)], full[np.ix_(RIGID, FLAPS)]
    gain = factor * design_gain(ferry, 21.0, 115.0, weights)
    lever = full[8, 2] / full[8, 0]
    heave = gain[:, STATES.index("height_filtered")]
    K = gain[:, RIGID]
    K[:, 0] += heave
    K[:, 2] += lever * heave
    inverse = np.linalg.inv(1j * FREQUENCIES[:, None, None] * np.eye(4) - A)
    flaps = np.array([weights.flap_fore, weights.flap_aft])
    loop = (K @ inverse @ B) * flaps[None, :] / flaps[:, None]
    return float(np.linalg.svd(np.eye(2) + loop, compute_uv=False).min())


@pytest.mark.parametrize(("masses", "weights"), [(BOW_TANK, WEIGHTS_A), (STERN_TANK, WEIGHTS_C)])
def test_return_difference_is_never_below_one(masses: object, weights: Weights) -> None:
    # Kalman's inequality for an optimal regulator, inputs scaled so that the cost weights them
    # alike (from memory).
    assert smallest_return_difference(Ferry(masses), weights) > 1 - 1e-9
    # Control: the same gains turned down are not optimal and break it.
    assert smallest_return_difference(Ferry(masses), weights, factor=0.6) < 0.999


def test_the_flap_that_may_move_more_does_more() -> None:
    small, large = (
        np.abs(design_gain(Ferry(BOW_TANK), 20.0, 110.0, replace(WEIGHTS_A, flap_fore=angle)))
        for angle in (0.01, 0.02)
    )
    at = STATES.index("height_filtered")
    assert large[0, at] > 2 * small[0, at]
    assert small[0, at] < 0.2 * small[1, at]


def test_unmeasured_states_are_not_fed_back() -> None:
    K = design_gain(Ferry(BOW_TANK), 20.0, 110.0, WEIGHTS_A)
    fed = {s for s, column in zip(STATES, K.T, strict=True) if column.any()}
    assert fed == {"heave_rate", "pitch", "pitch_rate", "height_filtered"}


def test_table_covers_the_full_grid_to_six_digits(tmp_path: Path) -> None:
    path = tmp_path / "gains.csv"
    write_gains(path, Ferry(BOW_TANK), WEIGHTS_A)
    with path.open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert [(float(r["speed"]), float(r["mass"])) for r in rows] == [
        (s, m) for s in SPEEDS for m in MASSES
    ]
    assert list(rows[0]) == ["speed", "mass", *(f"K:{i}:{s}" for i in INPUTS for s in STATES)]
    for row in (rows[0], rows[-1]):
        K = design_gain(Ferry(BOW_TANK), float(row["speed"]), float(row["mass"]), WEIGHTS_A)
        written = np.array([[float(row[f"K:{i}:{s}"]) for s in STATES] for i in INPUTS])
        np.testing.assert_allclose(written, K, rtol=5e-6)
