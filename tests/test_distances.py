"""Margins through the whole audit: delays, sampling, orders, what is not defined, requirements."""

import json

import mpmath
import numpy as np
import pandas as pd
import pytest
from scipy.linalg import expm
from scipy.optimize import brentq

import ssaudit
from ssaudit.criteria import POINT_QUANTITIES
from ssaudit.errors import CriteriaError
from ssaudit.loop import parts
from ssaudit.loop.assembly import Sampling

mpmath.mp.dps = 30


def canonical(num, den):
    """Controllable canonical form of a strictly proper fraction with leading 1, as a stack."""
    n = len(den) - 1
    A, B, C = np.zeros((1, n, n)), np.zeros((1, n, 1)), np.zeros((1, 1, n))
    A[0, 0] = -np.array(den[1:], dtype=float)
    A[0, 1:, :-1] = np.eye(n - 1)
    B[0, 0, 0] = 1.0
    C[0, 0, n - len(num) :] = num
    return A, B, C, np.zeros((1, 1, 1))


def margins(matrices, gain=1.0, *, criteria=None, options=None, **loop):
    """Audit at depth margins by u = -gain y."""
    bank = ssaudit.build_bank(*matrices, revision="A")
    K = ssaudit.ConstantGain(np.atleast_2d(gain))
    closing = ssaudit.Loop("negative", K, "outputs", **loop)
    asked = criteria or ssaudit.Criteria()
    return ssaudit.audit(bank, closing, asked, depth="margins", **(options or {}))


def loop_of(found, name):
    (row,) = found.loops[found.loops["loop"] == name].to_dict("records")
    return row


def exact_margins(gain, poles, delay):
    """Phase [deg], delay [s], gain [dB] margins and |L| = 1 [rad/s] of gain e^(-sτ)/Π(s - p).

    In 30 digits, for real poles that are not positive: both functions fall all the way.
    """
    gain, delay, poles = mpmath.mpf(gain), mpmath.mpf(delay), [mpmath.mpf(p) for p in poles]

    def size(w):
        return gain / mpmath.fprod(mpmath.sqrt(w * w + p * p) for p in poles)

    def left(w):
        """Phase that is left of -π."""
        return mpmath.pi - w * delay - mpmath.fsum(mpmath.atan2(w, -p) for p in poles)

    bracket = {"x0": (mpmath.mpf("0.01"), mpmath.mpf(100)), "solver": "illinois"}
    w = mpmath.findroot(lambda x: mpmath.log(size(x)), **bracket)
    p = mpmath.findroot(left, **bracket)
    decibels = -20 * mpmath.log10(size(p))
    return tuple(map(float, (mpmath.degrees(left(w)), left(w) / w, decibels, w)))


@pytest.mark.parametrize("place", ["input", "signal"])
@pytest.mark.parametrize("pade", [1, 4])
@pytest.mark.parametrize("late", [0.05, 0.3])
def test_delayed_integrator_in_closed_form(place, pade, late):
    """K e^(-sτ)/s: phase π/2 - Kτ, delay π/(2K) - τ, gain π/(2Kτ)."""
    K = 2.0
    part = parts.delay(late, pade).at("wire", **{place: "*"})
    found = margins(canonical([1], [1, 0]), K, parts=(part,))
    own = loop_of(found, f"{place} {'u1' if place == 'input' else 'y1'}")
    assert own["phase_margin_deg"] == pytest.approx(np.degrees(np.pi / 2 - K * late), rel=1e-11)
    assert own["delay_margin_s"] == pytest.approx(np.pi / (2 * K) - late, rel=1e-11)
    decibels = 20 * np.log10(np.pi / (2 * K * late))
    assert own["gain_margin_high_db"] == pytest.approx(decibels, rel=1e-11)
    assert own["gain_margin_low_db"] == -np.inf
    # The other end of the loop sees the Padé model, which is near but not the same.
    end = "signal y1" if place == "input" else "input u1"
    other = loop_of(found, end)
    apart = abs(other["gain_margin_high_db"] - decibels)
    assert 1e-9 < apart < (3.0 if pade == 1 else 1e-4)
    # And so do the factors on all gains, as the report says of poles.
    assert found.points["gain_factor_high"][0] == pytest.approx(
        10 ** (other["gain_margin_high_db"] / 20), rel=1e-9
    )


@pytest.mark.parametrize(("zeta", "late"), [(0.5, 0.1), (0.7, 0.4), (0.3, 0.2)])
def test_delayed_second_order_loop(zeta, late):
    part = parts.delay(late, 1).at("wire", input="u1")
    found = margins(canonical([1], [1, 2 * zeta, 0]), parts=(part,))
    phase, delay, decibels, w = exact_margins(1, [0, -2 * zeta], late)
    own, other = loop_of(found, "input u1"), loop_of(found, "signal y1")
    assert own["phase_margin_deg"] == pytest.approx(phase, rel=1e-9)
    assert own["delay_margin_s"] == pytest.approx(delay, rel=1e-9)
    assert own["gain_margin_high_db"] == pytest.approx(decibels, rel=1e-9)
    assert own["phase_margin_frequency"] == pytest.approx(w, rel=1e-9)
    # The model of first order, which the loop at the signal has, says something else.
    assert abs(other["gain_margin_high_db"] - decibels) > 1e-4


def test_delays_of_one_channel_add_up_behind_other_parts():
    path = (
        parts.delay(0.1, 2).at("wire", input="u1"),
        parts.first_order(0.2).at("servo", input="u1"),
        parts.delay(0.05, 3).at("computer", input="*"),
    )
    found = margins(canonical([1], [1, 1.2, 0]), parts=path)
    phase, delay, decibels, _ = exact_margins(5, [0, -1.2, -5], 0.15)
    own = loop_of(found, "input u1")
    assert own["phase_margin_deg"] == pytest.approx(phase, rel=1e-9)
    assert own["delay_margin_s"] == pytest.approx(delay, rel=1e-9)
    assert own["gain_margin_high_db"] == pytest.approx(decibels, rel=1e-9)


def test_a_delay_beyond_its_margin_is_lost():
    """The negative control: π/(2K) parts lost from ok, for a good Padé model's poles too."""
    matrices = canonical([1], [1, 0])

    def verdict(late):
        part = parts.delay(late, 6).at("wire", input="u1")
        found = margins(matrices, 2.0, parts=(part,))
        return found.points["verdict"][0], found.points["phase_margin_deg"][0]

    limit = np.pi / 4
    assert verdict(0.999 * limit)[0] == "ok"
    lost, phase = verdict(1.001 * limit)
    assert lost == "lost"
    assert np.isnan(phase)


def pade(s, late, order):
    """Padé fraction of the delay, by the published coefficients."""
    from math import factorial

    total = [0.0, 0.0]
    for k in range(order + 1):
        c = factorial(2 * order - k) / (factorial(k) * factorial(order - k))
        total[0] += c * (-s * late) ** k
        total[1] += c * (s * late) ** k
    return total[0] / total[1]


def test_one_delay_part_over_two_inputs():
    """Each input's own delay is exact in its loop, the other's a Padé model."""
    A = np.array([[[0, 1, 0, 0], [-2, -3, 0.5, 0], [0, 0, 0, 1], [-0.4, 0, -1.5, -2.5]]])
    B = np.array([[[0.0, 0.0], [4.0, 0.0], [0.0, 0.0], [0.0, 3.0]]])
    C = np.eye(4)[None, [0, 2]]
    K, late, order = np.array([[1.5, 0.2], [-0.3, 1.4]]), 0.08, 1
    found = margins(
        (A, B, C, np.zeros((1, 2, 2))), K, parts=(parts.delay(late, order).at("wire", input="*"),)
    )
    for own, other in ((0, 1), (1, 0)):
        row = loop_of(found, f"input u{own + 1}")

        def broken(w, exact=True, own=own, other=other):
            s = 1j * w
            H = K @ C[0] @ np.linalg.solve(s * np.eye(4) - A[0], B[0])
            delays = np.diag([pade(s, late, order)] * 2)
            if exact:
                delays[own, own] = np.exp(-s * late)
            G = H @ delays
            return G[own, own] - G[own, other] * G[other, own] / (1 + G[other, other])

        w = row["phase_margin_frequency"]
        assert abs(broken(w)) == pytest.approx(1.0, rel=1e-9)
        phase = abs(np.degrees(np.angle(-broken(w))))
        assert row["phase_margin_deg"] == pytest.approx(phase, rel=1e-9)
        modelled = abs(np.degrees(np.angle(-broken(w, exact=False))))
        assert abs(modelled - phase) > 1e-4
        # No frequency does worse.
        response = np.array([broken(x) for x in np.geomspace(1e-3, 1e3, 5000)])
        near = np.abs(np.abs(response) - 1) < 1e-2
        assert near.any()
        assert (np.abs(np.degrees(np.angle(-response[near]))) > phase - 2).all()


def sampled_response(A, B, C, K, dt, late):
    n, m = B.shape
    joined = expm(np.block([[A, B], [np.zeros((m, n + m))]]) * dt)[:n]

    def L(w):
        z = np.exp(1j * w * dt)
        inner = np.linalg.solve(z * np.eye(n) - joined[:, :n], joined[:, n:])
        return (K @ C @ inner)[0, 0] * z**-late

    return L


@pytest.mark.parametrize("late", [0, 1, 3])
def test_sampled_margins_by_direct_evaluation_on_the_circle(late):
    A, B, C, _ = (M[0] for M in canonical([1.5], [1, 1.2, 0.3]))
    dt = 0.2
    L = sampled_response(A, B, C, np.eye(1), dt, late)
    w = np.linspace(1e-4, np.pi / dt * (1 - 1e-9), 100_000)[::50]
    response = np.array([L(x) for x in w])
    found = margins(canonical([1.5], [1, 1.2, 0.3]), sampling=Sampling(dt, late))
    row = loop_of(found, "input u1")
    crossings = np.flatnonzero(np.diff(np.sign(np.abs(response) - 1)))
    phases = []
    for k in crossings:
        x = brentq(lambda v: abs(L(v)) - 1, w[k], w[k + 1], xtol=1e-14)
        phases.append(abs(np.degrees(np.angle(-L(x)))))
    assert row["phase_margin_deg"] == pytest.approx(min(phases), rel=1e-9)
    gains = []
    for k in np.flatnonzero(np.diff(np.sign(response.imag))):
        x = brentq(lambda v: L(v).imag, w[k], w[k + 1], xtol=1e-14)
        gains.append(-1 / L(x).real)
    gains.append(-1 / L(np.pi / dt).real)  # half the sampling rate, where z is -1
    highest = min(k for k in gains if k > 1)
    assert row["gain_margin_high_db"] == pytest.approx(20 * np.log10(highest), rel=1e-8)
    assert row["peak_sensitivity"] >= (1 / np.abs(1 + response)).max() * (1 - 1e-7)
    assert row["peak_sensitivity"] == pytest.approx((1 / np.abs(1 + response)).max(), rel=1e-3)
    # One sample later is another loop.
    wrong = sampled_response(A, B, C, np.eye(1), dt, late + 1)
    assert abs(abs(np.degrees(np.angle(-wrong(row["phase_margin_frequency"])))) - min(phases)) > 1


@pytest.mark.parametrize("late", [0, 2])
def test_quick_sampling_costs_half_a_sample_and_what_it_is_late(late):
    """Held commands are late by dt/2 on average, to first order in dt."""
    matrices = canonical([1.5], [1, 1.2, 0.3])
    continuous = loop_of(margins(matrices), "input u1")
    gaps = []
    for dt in (1e-2, 1e-3):
        row = loop_of(margins(matrices, sampling=Sampling(dt, late)), "input u1")
        expected = continuous["delay_margin_s"] - (late + 0.5) * dt
        gaps.append(abs(row["delay_margin_s"] - expected))
        lag = np.degrees((late + 0.5) * dt * continuous["phase_margin_frequency"])
        assert row["phase_margin_deg"] == pytest.approx(
            continuous["phase_margin_deg"] - lag, abs=1.2 * lag * dt
        )
        # Without the half sample it would not do.
        assert abs(row["delay_margin_s"] - expected - 0.5 * dt) > 0.4 * dt
    assert gaps[1] < 0.02 * gaps[0]


def test_sampled_compensator_by_direct_evaluation():
    """u = -(c xc + d y), xc next a xc + b y: L is c b/(z - a) + d in series with the held plant."""
    a, b, c, d, dt, late = 0.7, 0.2, 0.8, 0.9, 0.2, 1
    A, B, C, _ = (M[0] for M in canonical([1.5], [1, 1.2, 0.3]))
    plant = sampled_response(A, B, C, np.eye(1), dt, late)

    def L(w):
        return (d + c * b / (np.exp(1j * w * dt) - a)) * plant(w)

    bank = ssaudit.build_bank(*canonical([1.5], [1, 1.2, 0.3]), revision="A")
    gain = ssaudit.ConstantGain([[d, c], [b, a]], ("u1", "filter"), ("y1", "filter"))
    loop = ssaudit.Loop(
        "negative", gain, "outputs", compensator=("filter",), sampling=Sampling(dt, late)
    )
    found = ssaudit.audit(bank, loop, ssaudit.Criteria(), depth="margins")
    assert found.points["verdict"][0] == "ok"
    for name in ("input u1", "signal y1"):
        row = loop_of(found, name)
        w = row["phase_margin_frequency"]
        assert abs(L(w)) == pytest.approx(1.0, rel=1e-10)
        phase = abs(np.degrees(np.angle(-L(w))))
        assert row["phase_margin_deg"] == pytest.approx(phase, rel=1e-9)
        high = row["gain_factor_high_frequency"]
        assert 1 / abs(L(high)) == pytest.approx(row["gain_factor_high"], rel=1e-9)
        assert abs(np.angle(-L(high))) < 1e-8
        assert abs(plant(w)) != pytest.approx(1.0, rel=1e-3)  # the control: not without the filter
    assert set(found.loops["loop"]) == {"input u1", "signal y1"}


POINTS = 15
NAMES = ("a", "b", "c", "d")


def envelope():
    """Points of every kind: ok, lost, void, without feedback, and one with a hidden mode."""
    rng = np.random.default_rng(12)
    A = rng.standard_normal((POINTS, 4, 4)) - np.linspace(0.5, 3.5, POINTS)[:, None, None] * np.eye(
        4
    )
    B, C = rng.standard_normal((POINTS, 4, 2)), rng.standard_normal((POINTS, 3, 4))
    D = 0.1 * rng.standard_normal((POINTS, 3, 2))
    A[4, 1, 2] = np.nan
    A[6] -= 3 * np.eye(4)
    B[6], D[6] = 0.0, 0.0  # no input reaches anything
    return {"A": A, "B": B, "C": C, "D": D}


def audited(order=None, states=None, **options):
    """Audit the envelope with its points and states in some order."""
    order = np.arange(POINTS) if order is None else np.asarray(order)
    states = np.arange(4) if states is None else np.asarray(states)
    given = {name: M[order] for name, M in envelope().items()}
    given["A"] = given["A"][:, states][:, :, states]
    given["B"], given["C"] = given["B"][:, states], given["C"][:, :, states]
    bank = ssaudit.build_bank(
        *(given[n] for n in "ABCD"), revision="A", ids=[f"p{k}" for k in order],
        states=[NAMES[k] for k in states],
        coordinates={"speed": (order.astype(float), "m/s")},
    )  # fmt: skip
    gains = 0.3 * np.random.default_rng(13).standard_normal((3, 2, 3))
    gains[2] = 0.0  # at the top of the table nothing is fed back
    gain = ssaudit.GainSchedule(
        ("speed",), (np.array([0.0, 7.0, 13.0]),), gains, ("u1", "u2"), ("y1", "y2", "y3"), "hold"
    )
    loop = ssaudit.Loop("negative", gain, "outputs")
    return ssaudit.audit(bank, loop, ssaudit.Criteria(), depth="margins", **options)


@pytest.fixture(scope="module")
def whole():
    return audited()


def test_the_envelope_holds_what_it_should(whole):
    counts = whole.points["verdict"].value_counts()
    assert counts["ok"] >= 5
    assert counts["lost"] >= 2
    assert counts["void"] == 1


@pytest.mark.parametrize("chunk", [1, 7])
def test_chunks_do_not_matter(whole, chunk):
    found = audited(chunk=chunk, workers=1)
    for name in ("points", "loops"):
        one, other = getattr(whole, name), getattr(found, name)
        assert list(one.columns) == list(other.columns)
        pd.testing.assert_frame_equal(one, other, rtol=1e-9, atol=1e-300, check_exact=False)


def nearly(one, other, skipped=()):
    """The same margins to the accuracy of peaks and radii, at the same loops."""
    first, second = (frame.set_index("point").sort_index() for frame in (one.points, other.points))
    np.testing.assert_array_equal(first["verdict"], second["verdict"])
    for name in POINT_QUANTITIES:
        if name not in skipped:
            np.testing.assert_allclose(
                first[name].to_numpy(), second[name].to_numpy(), rtol=1e-6, atol=1e-9, err_msg=name
            )


def test_the_order_of_points_does_not_matter(whole):
    order = np.random.default_rng(0).permutation(POINTS)
    assert (order != np.arange(POINTS)).any()
    nearly(whole, audited(order))


def test_the_order_of_states_does_not_matter(whole):
    nearly(whole, audited(states=[2, 0, 3, 1]))


def test_comparing_two_audits_can_fail(whole):
    """Negative control of the comparisons above."""
    changed = audited()
    changed.points["gain_margin_db"] *= 1 + 1e-5
    with pytest.raises(AssertionError, match="gain_margin_db"):
        nearly(whole, changed)


def test_void_and_lost_points_have_no_margins(whole):
    judged = whole.points["verdict"].isin(["ok", "short", "doubt"])
    for name in POINT_QUANTITIES:
        column = whole.points[name]
        assert column[~judged].isna().all()
        if not name.startswith("real_"):
            assert column[judged].notna().all(), name
    frequencies = [n for n in whole.points if n.endswith("_frequency") and n != "natural_frequency"]
    assert whole.points.loc[~judged, frequencies].isna().all(axis=None)
    assert (whole.points.loc[~judged, [n for n in whole.points if n.endswith("_loop")]] == "").all(
        axis=None
    )
    lost = whole.loops["point"].isin(whole.points["point"][whole.points["verdict"] == "lost"])
    assert lost.any()
    assert whole.loops.loc[lost].drop(columns=["point", "revision", "loop"]).isna().all(axis=None)


def test_points_without_feedback_have_no_limits(whole):
    rows = whole.points.set_index("point")
    # Speed 13 is where the table's gains are 0, and p6 has no B.
    for point in ("p6", "p13", "p14"):
        row = rows.loc[point]
        assert row["verdict"] == "ok"
        assert row["gain_margin_db"] == np.inf
        assert row["phase_margin_deg"] == np.inf
        assert row["gain_factor_low"] == -np.inf
        assert row["peak_sensitivity"] == pytest.approx(1.0, rel=1e-6)
        assert row["peak_complementary"] == 0.0


def test_real_radius_only_where_it_is_asked_for(whole):
    assert whole.points["real_stability_radius"].isna().all()
    found = audited(real_radius=True)
    rows = found.points[found.points["verdict"] == "ok"]
    for end in ("", "_scaled"):
        real, any_change = rows[f"real_stability_radius{end}"], rows[f"stability_radius{end}"]
        assert (real >= any_change * (1 - 1e-6)).all()
        assert real.notna().all()
    nearly(whole, found, skipped=("real_stability_radius", "real_stability_radius_scaled"))


HEADING = np.zeros((1, 3, 3))
HEADING[0, :2, :2] = [[0.0, 1.0], [-1.0, -0.5]]
HEADING[0, 2, 0] = 1.0


@pytest.mark.parametrize("feed", ["states", "outputs"])
@pytest.mark.parametrize("path", [{}, {"parts": (parts.delay(0.1, 2).at("wire", input="*"),)},
                                  {"sampling": Sampling(0.05, 1)}])  # fmt: skip
def test_exempt_neutral_states_leave_the_margins_alone(feed, path):
    """A heading that nothing depends on has a pole at 0, and margins are those without it."""

    def found(matrices, gain, states, neutral):
        bank = ssaudit.build_bank(*matrices, revision="A", states=states)
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain(gain), feed, **path)
        return ssaudit.audit(
            bank, loop, ssaudit.Criteria((), neutral), depth="margins", real_radius=True
        )

    B, C = np.array([[[0.0], [1.0], [0.0]]]), np.array([[[1.0, 0.5, 0.0]]])
    gain = [[0.5, 0.5, 0.0]] if feed == "states" else [[0.5]]
    D = np.zeros((1, 1, 1))
    with_it = found((HEADING, B, C, D), gain, ["a", "b", "heading"], ("heading",))
    small = (HEADING[:, :2, :2], B[:, :2], C[:, :, :2], D)
    without = found(small, [gain[0][:2]], ["a", "b"], ())
    assert list(with_it.points["verdict"]) == ["ok"]
    nearly(with_it, without, skipped=())
    numbers = without.loops.select_dtypes(float).columns
    rows = with_it.loops["loop"].isin(without.loops["loop"])
    np.testing.assert_allclose(
        with_it.loops.loc[rows, numbers], without.loops[numbers], rtol=1e-6, atol=1e-9
    )
    # Not exempt, it is lost, and there is no margin.
    judged = found((HEADING, B, C, D), gain, ["a", "b", "heading"], ())
    # When sampled by the program the pole at 1 is known to rounding only.
    assert list(judged.points["verdict"]) == ["doubt" if "sampling" in path else "lost"]
    assert "sampling" in path or judged.points["gain_factor_high"].isna().all()


def test_points_that_differ_in_neutral_states_keep_their_order():
    A = np.tile(HEADING, (4, 1, 1))
    A[1, 2, 2] = A[3, 2, 2] = -0.7  # here the heading leaks, and counts
    A[2, 1, 1] = -0.9
    B = np.tile([[0.0], [1.0], [0.0]], (4, 1, 1))
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.5, 0.5, 0.0]]))
    criteria = ssaudit.Criteria((), ("heading",))
    names = {"states": ["a", "b", "heading"], "revision": "A"}
    together = ssaudit.audit(ssaudit.build_bank(A, B, **names), loop, criteria, depth="margins")
    for p in range(4):
        alone = ssaudit.audit(
            ssaudit.build_bank(A[[p]], B[[p]], **names), loop, criteria, depth="margins"
        )
        for name in POINT_QUANTITIES:
            assert together.points[name][p] == pytest.approx(
                alone.points[name][0], rel=1e-9, nan_ok=True
            )
        mine = together.loops[together.loops["point"] == str(p + 1)].drop(columns="point")
        pd.testing.assert_frame_equal(
            mine.reset_index(drop=True), alone.loops.drop(columns="point"), rtol=1e-9
        )


def test_a_state_that_is_neutral_by_cancellation_counts():
    """The gains cancel exactly what depends on it: at another factor it would not be neutral."""
    A, B = np.array([[[-1.0, 2.0], [0.0, 0.0]]]), np.array([[[1.0], [0.0]]])
    bank = ssaudit.build_bank(A, B, revision="A", states=["a", "heading"])
    asked = ssaudit.Requirement("range", "gain_factor_high", at_least=1.1)
    criteria = ssaudit.Criteria((asked,), ("heading",))
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.5, 2.0]]))
    found = ssaudit.audit(bank, loop, criteria, depth="margins").points.iloc[0]
    assert np.isnan(found["gain_factor_high"])
    assert (found["verdict"], found["doubt"]) == ("doubt", "range")


DISK = canonical([25], [1, 10, 10, 10])
# Seiler, Packard and Gahinet (2020): 11.126 dB, 29.1 deg, α 0.458 (from memory).
S = 1j * np.geomspace(0.1, 100, 100_000)
PEAK = np.abs((P := S**3 + 10 * S**2 + 10 * S + 10) / (P + 25)).max()
LIMITS = {
    "gain_margin_db": (20 * np.log10(3.6), "dB", 1),
    "phase_margin_deg": (29.14, "deg", 1),
    "disk_margin_input": (0.4581, "", 1),
    "gain_factor_high": (3.6, "", 1),
    "peak_sensitivity": (PEAK, "", -1),
}


def asked(name, **limits):
    return ssaudit.Criteria((ssaudit.Requirement("asked", name, **limits),))


@pytest.mark.parametrize("name", LIMITS)
def test_a_requirement_on_points_is_met_missed_or_in_doubt(name):
    value = margins(DISK).points[name][0]
    figure, unit, sense = LIMITS[name]
    assert value == pytest.approx(figure, rel=2e-3)
    side = "at_least" if sense > 0 else "at_most"

    def row(limit):
        return margins(DISK, criteria=asked(name, **{side: limit})).points.iloc[0]

    met, missed = row(value * (1 - 1e-4 * sense)), row(value * (1 + 0.25 * sense))
    assert met["verdict"] == "ok"
    assert missed["verdict"] == "short"
    word = "below" if sense > 0 else "above"
    gap = abs(0.25 * value)
    text = f"asked: {name} {value:.3g} {unit}".rstrip()
    limit = value * (1 + 0.25 * sense)
    assert missed["reason"] == f"{text}, {gap:.2g} {word} {limit:g}"
    assert missed["missed"] == "asked"
    assert missed["shortfall"] == pytest.approx(gap / limit, rel=1e-6)
    on_it = row(value)
    assert (on_it["verdict"], on_it["doubt"]) == ("doubt", "asked")
    assert " ± " in on_it["reason"]


def test_no_limit_meets_any_requirement():
    found = margins(canonical([1], [1, 1.0, 0]), criteria=asked("gain_margin_db", at_least=1e9))
    assert found.points["verdict"][0] == "ok"


def test_requirements_apply_where_they_say():
    bank = ssaudit.build_bank(
        *(np.tile(M, (2, 1, 1)) for M in DISK), revision="A",
        coordinates={"speed": ([10.0, 20.0], "m/s")},
    )  # fmt: skip
    requirement = ssaudit.Requirement(
        "asked", "gain_margin_db", at_least=12.0, where={"speed": (15.0, 30.0)}
    )
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]]), "outputs")
    found = ssaudit.audit(bank, loop, ssaudit.Criteria((requirement,)), depth="margins")
    assert list(found.points["verdict"]) == ["ok", "short"]
    (missed,) = found.summary.missed[1:]
    assert (missed.points, missed.worst_point) == (1, "2")
    assert missed.worst_value == pytest.approx(20 * np.log10(3.6))


@pytest.mark.parametrize("name", ["gain_margin_db", "disk_margin", "gain_factor_high"])
def test_what_is_not_known_is_no_pass(name):
    """Models that come closed have no margins: a requirement on one is not met unseen."""
    bank = ssaudit.build_bank([[[-1.0]], [[1.0]]], revision="A")
    loop = ssaudit.Loop("", None, "none")
    found = ssaudit.audit(bank, loop, asked(name, at_least=0.0), depth="margins").points
    assert list(found["verdict"]) == ["doubt", "lost"]
    assert found["reason"][0] == f"asked: {name} is not decided by the numbers"
    radius = asked("stability_radius", at_least=0.5)
    assert ssaudit.audit(bank, loop, radius, depth="margins").points["verdict"][0] == "ok"


def test_margin_that_is_not_confirmed_is_doubt(monkeypatch):
    import dataclasses

    from ssaudit import distances

    genuine = distances.find_loop_margins

    def unconfirmed(*loop, **about):
        found = genuine(*loop, **about)
        return dataclasses.replace(found, confirmed=np.zeros_like(found.confirmed))

    criteria = asked("gain_margin_db", at_least=6.0)
    assert margins(DISK, criteria=criteria).points["verdict"][0] == "ok"
    monkeypatch.setattr(distances, "find_loop_margins", unconfirmed)
    row = margins(DISK, criteria=criteria).points.iloc[0]
    assert (row["verdict"], row["doubt"]) == ("doubt", "asked")
    assert "asked: gain_margin_db" in row["reason"]


def test_requirement_on_a_point_needs_depth_margins(project):
    (project.folder / "criteria.toml").write_text(
        '[[require]]\nname = "gain"\nquantity = "gain_margin_db"\nat_least = 6.0\n'
    )
    bank = project.bank("A", [0.5])
    for depth in ("poles", "modes"):
        ran = project.audit(bank, "--depth", depth, "--ledger", project.ledger)
        assert ran.code == 2
        assert ran.out == ""
        assert ran.err.count("\n") == 1
        assert f"gain_margin_db is not found at depth {depth}" in ran.err
        assert "--depth margins" in ran.err
        assert not project.ledger.exists()
    assert project.audit(bank, "--depth", "margins").code == 0


def test_frequency_is_for_modes_alone():
    with pytest.raises(CriteriaError, match="frequency is for modes"):
        ssaudit.Requirement("x", "gain_margin_db", at_least=6.0, frequency=(1.0, 2.0))


def test_real_radius_by_the_command_line(project):
    bank = project.bank("A", [0.5, -0.5, np.nan], ids=["good", "lost", "void"])
    (project.folder / "criteria.toml").write_text("")
    rows = {}
    for more in ((), ("--real-radius",)):
        ledger = project.folder / f"ledger{len(more)}"
        ran = project.audit(bank, "--depth", "margins", "--ledger", ledger, "--json", "-", *more)
        assert ran.code == 1, ran.err
        (run,) = ledger.glob("run=*")
        frame = pd.read_parquet(run / "points.parquet").set_index("point")
        rows[bool(more)] = frame
        worst = {point["point"]: point for point in json.loads(ran.out)["worst"]}
        assert worst["lost"]["gain_margin_db"] is None
        assert worst["lost"]["gain_factor_high"] is None
        assert worst["void"]["stability_radius"] is None
    assert rows[False]["real_stability_radius"].isna().all()
    assert rows[True]["real_stability_radius"].notna().tolist() == [True, False, False]


@pytest.mark.parametrize("size", [1e100, 1e155, 1e300])
@pytest.mark.parametrize("kind", ["large", "small", "graded"])
def test_extreme_entries_end_in_a_verdict_without_a_warning(size, kind):
    """Warnings are errors here: what overflows on the way is not known, and no more."""
    A = {
        "large": [[0.0, size], [-size, -size]],
        "small": [[0.0, 1 / size], [-1 / size, -1 / size]],
        "graded": [[0.0, size], [-4 / size, -0.8]],
    }[kind]
    bank = ssaudit.build_bank([A], [[[0.0], [1.0]]], [[[1.0, 0.0]]], [[[0.0]]], revision="A")
    asked = ssaudit.Criteria((ssaudit.Requirement("gain", "gain_margin_db", at_least=6.0),))
    for gain in (1.0, 1 / size):
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[gain]]), "outputs")
        row = ssaudit.audit(bank, loop, asked, depth="margins").points.iloc[0]
        assert row["verdict"] in ("ok", "short", "doubt")
        if np.isnan(row["gain_margin_db"]):
            assert row["verdict"] == "doubt"


def test_a_search_that_rounding_keeps_alive_gives_up(monkeypatch):
    """Pieces of the frequency axis double with every round where rounding hides the level."""
    from ssaudit.margins import peak_search
    from ssaudit.margins.real_radius import find_real_radius

    longest = []
    genuine = peak_search._drop_failed

    def counting(state):
        kept = genuine(state)
        longest.append(len(kept[0]))
        return kept

    monkeypatch.setattr(peak_search, "_drop_failed", counting)
    monkeypatch.setattr(peak_search, "MOST_PIECES", 300)
    graded = np.array([[[0.0, 1e145], [-4e-145 - 1.0, -0.8]]])
    with np.errstate(all="ignore"):
        found = find_real_radius(graded)
    assert not found.confirmed[0]
    assert np.isnan(found.radius[0])
    assert max(longest) <= 300
