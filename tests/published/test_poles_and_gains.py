"""Published poles, damping ratios and gain ranges; their sources stand in figures.json."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import ssaudit

Floats = NDArray[np.float64]
Figures = dict[str, dict[str, Any]]
Audited = Callable[..., Any]
# A shift of the gain, as a share, to either side of a published limit that is an exact number.
ASIDE = 1e-6


def as_complex(pairs: list[list[float]]) -> NDArray[np.complex128]:
    return np.sort_complex(np.array([complex(*pair) for pair in pairs]))


def controllable_form(num: list[float], den: list[float]) -> dict[str, Floats]:
    """One point of a transfer function, with the integers of its coefficients as entries."""
    n = len(den) - 1
    A = np.eye(n, k=-1)
    A[0] = -np.array(den[1:])
    C = np.zeros(n)
    C[n - len(num) :] = num
    return {"A": A[None], "B": np.eye(n)[None, :, :1], "C": C[None, None], "D": np.zeros((1, 1, 1))}


def verdict_at(audited: Audited, plant: dict[str, Floats], gain: float) -> str:
    (verdict,) = audited(plant, ids=["only"], gain=[[gain]]).verdicts
    return str(verdict)


# Etkin & Reid, Dynamics of Flight, 3rd ed. (1996).
@pytest.mark.parametrize("name", ["jet-transport-longitudinal", "jet-transport-lateral"])
def test_jet_transport_has_the_published_poles(
    name: str, figures: Figures, audited: Audited
) -> None:
    figure = figures[name]
    found = audited({"A": [figure["A"]]}, ids=[name])
    expected = as_complex(figure["poles"])
    np.testing.assert_allclose(found.poles(name), expected, rtol=figure["rtol"])
    assert found.verdicts == ["ok"]
    assert found.points["max_real"][0] == pytest.approx(expected.real.max(), rel=figure["rtol"])
    damping = (-expected.real / np.abs(expected)).min()
    assert found.points["min_damping"][0] == pytest.approx(damping, rel=2 * figure["rtol"])


def test_one_percent_in_one_entry_is_seen_by_the_check_of_the_poles(
    figures: Figures, audited: Audited
) -> None:
    """Negative control: the tolerance above would not let a wrong matrix through."""
    figure = figures["jet-transport-longitudinal"]
    A = np.array(figure["A"])
    A[1, 2] *= 1.01
    found = audited({"A": [A]}, ids=["wrong"])
    expected = as_complex(figure["poles"])
    assert not np.allclose(found.poles("wrong"), expected, rtol=figure["rtol"], atol=0)


# Kundur, Power System Stability and Control (1994), Example 12.2.
def test_swing_equation_with_three_damping_torques(figures: Figures, audited: Audited) -> None:
    expected = figures["swing-equation"]["expect"]
    A = [[[-case["KD"] / 7, -0.757 / 7], [377.0, 0.0]] for case in expected]
    found = audited({"A": A}, ids=[str(case["KD"]) for case in expected])
    for case, row in zip(expected, found.points.itertuples(), strict=True):
        (pole,) = found.poles(str(case["KD"]))
        # The figures have three digits.
        assert pole == pytest.approx(complex(*case["poles"][0]), abs=0.006)
        if "damping_ratio" in case:
            assert row.damping_ratio == pytest.approx(case["damping_ratio"], abs=5e-4)
    # Undamped it is on the axis, which is not stable.
    assert found.verdicts == ["lost", "ok", "lost"]


# Nise, Control Systems Engineering: stable for 0 < K < 1386.
@pytest.mark.parametrize(
    ("gain", "verdict"),
    [
        (1386 * (1 - ASIDE), "ok"),
        (1386 * (1 + ASIDE), "lost"),
        (1e-6, "ok"),
        (-1e-6, "lost"),
        (700.0, "ok"),
        (1500.0, "lost"),
    ],
)
def test_three_lags_are_stable_just_inside_the_published_gains_only(
    gain: float, verdict: str, figures: Figures, audited: Audited
) -> None:
    figure = figures["gain-range-three-lags"]
    assert figure["stable_gain"] == [0, 1386]
    assert verdict_at(audited, controllable_form(figure["num"], figure["den"]), gain) == verdict


@pytest.mark.parametrize("gain", [0.0, 1386.0])
def test_three_lags_are_never_ok_at_the_ends_themselves(
    gain: float, figures: Figures, audited: Audited
) -> None:
    figure = figures["gain-range-three-lags"]
    plant = controllable_form(figure["num"], figure["den"])
    assert verdict_at(audited, plant, gain) in ("lost", "doubt")


def test_three_lags_cross_the_axis_at_the_published_frequency(
    figures: Figures, audited: Audited
) -> None:
    figure = figures["gain-range-three-lags"]
    plant = controllable_form(figure["num"], figure["den"])
    for gain in (1386 * (1 - ASIDE), 1386.0, 1386 * (1 + ASIDE)):
        (point,) = audited(plant, ids=["only"], gain=[[gain]]).points.to_dict("records")
        assert point["imag"] == pytest.approx(figure["axis_crossing_rad_s"], abs=5e-4)
        # Exact: the even part s^2 + 77 of the characteristic polynomial vanishes there.
        assert point["imag"] == pytest.approx(np.sqrt(77), rel=1e-5)
        assert np.sign(round(point["real"], 9)) == np.sign(gain - 1386)


# Franklin, Powell & Emami-Naeini, Feedback Control of Dynamic Systems: stable for K > 7.5.
@pytest.mark.parametrize(
    ("gain", "verdict"),
    [(7.5 * (1 - ASIDE), "lost"), (7.5 * (1 + ASIDE), "ok"), (1e6, "ok"), (0.0, "lost")],
)
def test_unstable_plant_is_stable_above_the_published_gain_only(
    gain: float, verdict: str, figures: Figures, audited: Audited
) -> None:
    figure = figures["gain-range-unstable-plant"]
    assert figure["stable_gain"] == [7.5, None]
    assert verdict_at(audited, controllable_form(figure["num"], figure["den"]), gain) == verdict


def test_unstable_plant_is_never_ok_at_the_published_gain(
    figures: Figures, audited: Audited
) -> None:
    figure = figures["gain-range-unstable-plant"]
    plant = controllable_form(figure["num"], figure["den"])
    assert verdict_at(audited, plant, 7.5) in ("lost", "doubt")


def regulated(figure: dict[str, Any]) -> dict[str, Floats]:
    """Plant and compensator in one: states x and its estimate, output K estimate, u = -m output."""
    A, B, C = (np.array(figure[name], dtype=float) for name in "ABC")
    K, F = np.array(figure["regulator_gain"]), np.array(figure["observer_gain"])
    nothing = np.zeros((2, 2))
    return {
        "A": np.block([[A, nothing], [F @ C, A - B @ K - F @ C]])[None],
        "B": np.vstack([B, np.zeros((2, 1))])[None],
        "C": np.hstack([np.zeros((1, 2)), K])[None],
        "D": np.zeros((1, 1, 1)),
    }


# Doyle, Guaranteed Margins for LQG Regulators, IEEE Trans. Automatic Control AC-23(4), 1978.
@pytest.mark.parametrize(
    ("share", "verdict"), [(1 / 1.01, "ok"), (1 - ASIDE, "ok"), (1 + ASIDE, "lost")]
)
def test_regulator_without_margin_is_lost_above_the_published_gain(
    share: float, verdict: str, figures: Figures, audited: Audited
) -> None:
    figure = figures["no-guaranteed-margin"]
    gain = share * figure["stable_gain_upper"]
    assert verdict_at(audited, regulated(figure), gain) == verdict


def test_regulator_at_its_own_gain_has_the_poles_of_regulator_and_observer(
    figures: Figures, audited: Audited
) -> None:
    """Separation: det(sI - A + B K) = det(sI - A + F C) = s^2 + 8 s + 1, twice."""
    found = audited(regulated(figures["no-guaranteed-margin"]), ids=["only"], gain=[[1.0]])
    slow, fast = -4 + np.sqrt(15), -4 - np.sqrt(15)
    np.testing.assert_allclose(found.poles("only"), [fast, fast, slow, slow], rtol=1e-6)


def tridiagonal(n: int, below: float, centre: float, above: float) -> Floats:
    return below * np.eye(n, k=-1) + centre * np.eye(n) + above * np.eye(n, k=1)


def toeplitz_poles(n: int, below: float, centre: float, above: float) -> Floats:
    k = np.arange(n, 0, -1)
    return np.asarray(centre + 2 * np.sqrt(below * above) * np.cos(k * np.pi / (n + 1)))


# Closed form; a power of two as ratio of the off-diagonals keeps the square root exact.
@pytest.mark.parametrize("below", [1.0, 2.0**-2, 2.0**-10, 2.0**-30])
def test_toeplitz_poles_are_within_their_radius_of_the_closed_form(
    below: float, audited: Audited
) -> None:
    found = audited({"A": [tridiagonal(8, below, -3.0, 1.0)]}, ids=["only"])
    expected = toeplitz_poles(8, below, -3.0, 1.0)
    rows = found.modes.sort_values("real")
    if len(rows) == 8:
        assert np.all(np.abs(rows["real"].to_numpy() - expected) <= rows["radius"].to_numpy())
    else:
        # Far from normal, rounding makes pairs of real poles: each within its radius of one.
        gap = np.abs(found.poles("only")[:, None] - expected).min(axis=1)
        assert np.all(gap <= rows["radius"].to_numpy())
    if below >= 2.0**-10:
        np.testing.assert_allclose(found.poles("only"), expected, atol=1e-10)


@pytest.mark.parametrize("below", [1.0, 2.0**-4, 2.0**-20, 2.0**-40, 2.0**-50])
def test_toeplitz_verdicts_are_never_wrong(below: float, audited: Audited) -> None:
    """The rightmost pole a little to the left, and a little to the right, of the axis."""
    n = 10
    furthest = 2 * np.sqrt(below) * np.cos(np.pi / (n + 1))
    centres = [-furthest - 2.0**-20, -furthest + 2.0**-20]
    A = [tridiagonal(n, below, centre, 1.0) for centre in centres]
    stable, unstable = audited({"A": A}, ids=["stable", "unstable"]).verdicts
    assert stable in ("ok", "doubt")
    assert unstable in ("lost", "doubt")
    if below >= 2.0**-4:
        assert (stable, unstable) == ("ok", "lost")


# A well-known integer matrix; its fifth power is exactly zero.
def test_nilpotent_matrix_is_never_ok(figures: Figures, audited: Audited) -> None:
    figure = figures["nilpotent-five"]
    A = np.array(figure["A"])
    assert not np.linalg.matrix_power(A, 5).any()
    assert np.linalg.matrix_power(A, 4).any()
    (point,) = audited({"A": [A]}, ids=["only"]).points.to_dict("records")
    # The poles alone cannot tell; that the trace is exactly 0 can, for the axis is not stable.
    assert point["verdict"] in ("lost", "doubt")
    assert point["radius"] > abs(point["real"])


def test_shifted_nilpotent_matrix_is_exactly_stable_and_never_lost(
    figures: Figures, audited: Audited
) -> None:
    figure = figures["nilpotent-five"]
    A = np.array(figure["A"]) - figure["shift"] * np.eye(5)
    (point,) = audited({"A": [A]}, ids=["only"]).points.to_dict("records")
    # Plain poles say otherwise: this is what the radius is for.
    assert np.linalg.eigvals(A).real.max() > 0.01
    assert point["verdict"] in ("ok", "doubt")
    assert point["max_real"] - point["radius"] < -figure["shift"]


def test_shifted_nilpotent_matrix_is_proved_stable(figures: Figures) -> None:
    """Poles cannot tell, exact arithmetic can; by the library, where the extra is installed."""
    pytest.importorskip("flint")
    figure = figures["nilpotent-five"]
    A = np.array(figure["A"]) - figure["shift"] * np.eye(5)
    bank = ssaudit.build_bank([A], revision="published")
    loop, criteria = ssaudit.Loop("", None, "none"), ssaudit.Criteria()
    assert ssaudit.audit(bank, loop, criteria).points["verdict"][0] == "doubt"
    assert ssaudit.audit(bank, loop, criteria, prove="doubt").points["verdict"][0] == "ok"


# Butterworth (1930).
@pytest.mark.parametrize("order", [2, 3, 4])
def test_butterworth_poles_have_the_published_damping_ratios(
    order: int, figures: Figures, audited: Audited
) -> None:
    from scipy.signal import buttap

    _, poles, _ = buttap(order)
    companion = np.eye(order, k=-1)
    companion[0] = -np.poly(poles).real[1:]
    found = audited({"A": [companion]}, ids=["only"])
    ratios = np.sort(found.modes["damping_ratio"])
    np.testing.assert_allclose(
        ratios, figures["butterworth"]["damping_ratio"][str(order)], atol=5e-5
    )
    angles = np.deg2rad(90 + (2 * np.arange(1, order + 1) - 1) * 90 / order)
    expected = np.exp(1j * angles)
    np.testing.assert_allclose(
        found.poles("only"), np.sort_complex(expected[expected.imag > -1e-9]), atol=1e-12
    )
    np.testing.assert_allclose(found.modes["natural_frequency"], 1.0, rtol=1e-12)


# Common practice, no source: a second-order mode settles to 2 % in about 4/(zeta wn).
@pytest.mark.parametrize(("zeta", "frequency"), [(0.1, 3.0), (0.5, 0.2), (0.9, 40.0)])
def test_four_time_constants_are_the_settling_time(
    zeta: float, frequency: float, figures: Figures, audited: Audited
) -> None:
    figure = figures["settling"]
    A = [[[0.0, 1.0], [-(frequency**2), -2 * zeta * frequency]]]
    settling = 4 / (zeta * frequency)
    limits = {"name": "settles", "quantity": "time_constant"}
    just = settling / figure["time_constants"]
    slack = {**limits, "at_most": just * (1 + 1e-9)}
    tight = {**limits, "at_most": just * (1 - 1e-9)}
    found = audited({"A": A}, ids=["only"], require=[slack])
    assert found.verdicts == ["ok"]
    assert figure["time_constants"] * found.points["time_constant"][0] == pytest.approx(settling)
    assert audited({"A": A}, ids=["only"], require=[tight]).verdicts == ["short"]
    assert np.exp(-settling / found.points["time_constant"][0]) < figure["band"]
