"""Published margins by both ways into the program: an export and a loop file, and the library."""

import json
import tempfile
import tomllib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import minimize_scalar

import ssaudit
from ssaudit.loop.part_files import read_compensator

PRESETS = Path(__file__).parents[2] / "configs" / "criteria"
CLOSED = 'feed = "none"\n'


def fed_back(gain):
    return f'sign = "negative"\nfeed = "outputs"\n[gain]\nmatrix = [[{gain}]]\n'


def canonical(num, den):
    """Controllable canonical form of a strictly proper fraction with leading 1."""
    n = len(den) - 1
    A, B, C = np.zeros((n, n)), np.zeros((n, 1)), np.zeros((1, n))
    A[0] = -np.array(den[1:], dtype=float)
    A[1:, :-1] = np.eye(n - 1)
    B[0, 0] = 1.0
    C[0, n - len(num) :] = num
    return {"A": A, "B": B, "C": C, "D": np.zeros((1, 1))}


def stacked(*models):
    return {name: np.array([model[name] for model in models]) for name in models[0]}


def second_order(zeta):
    """1/(s(s + 2ζ)), whose closed loop has the damping ratio ζ."""
    return canonical([1], [1, 2 * zeta, 0])


@pytest.fixture(params=["library", "command"])
def margins(request, tmp_path, export, command) -> Callable[..., pd.DataFrame]:
    """Audit stacked matrices at depth margins; the points table."""

    def by_library(matrices, loop, criteria="", real=False):
        bank = ssaudit.build_bank(*(matrices.get(n) for n in "ABCD"), revision="published")
        (tmp_path / "criteria.toml").write_text(criteria)
        asked = ssaudit.read_criteria(tmp_path / "criteria.toml")
        found = ssaudit.audit(bank, built(loop), asked, depth="margins", real_radius=real)
        return found.points

    def by_command(matrices, loop, criteria="", real=False):
        folder = Path(tempfile.mkdtemp(dir=tmp_path))
        bank, file, asked = (folder / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
        file.write_text(loop)
        asked.write_text(criteria)
        source = export("export.h5", matrices)
        ran = command("ingest", source, "--revision", "published", "--bank", bank)
        assert ran.code == 0, ran.err
        ran = command(
            "audit", bank, "--loop", file, "--criteria", asked, "--depth", "margins",
            "--ledger", folder / "ledger", "--json", "-", *(["--real-radius"] if real else []),
        )  # fmt: skip
        assert ran.code in (0, 1), ran.err
        (run,) = (folder / "ledger").glob("run=*")
        points = pd.read_parquet(run / "points.parquet")
        agree(json.loads(ran.out), points)
        return points

    return by_library if request.param == "library" else by_command


def built(text):
    """Build the loop that a text states without reading it as a file."""
    about = tomllib.loads(text)
    if about["feed"] == "none":
        return ssaudit.Loop("", None, "none")
    if "compensator" in about:
        states, gain = read_compensator(about["compensator"], "loop")
        return ssaudit.Loop(about["sign"], gain, about["feed"], compensator=states)
    gain = ssaudit.ConstantGain(about["gain"]["matrix"])
    return ssaudit.Loop(about["sign"], gain, about["feed"])


def agree(report, points):
    """The JSON report names the worst of each margin in the ledger; no limit is null."""
    greatest = ("gain_factor_low", "peak_sensitivity", "peak_complementary")
    for entry in report["margins"]:
        column = points[entry["quantity"]].dropna()
        if column.empty:
            assert entry["value"] is None
            assert entry["point"] is None
        else:
            worst = column.max() if entry["quantity"] in greatest else column.min()
            assert entry["value"] == (worst if np.isfinite(worst) else None)
            assert points.set_index("point")[entry["quantity"]][entry["point"]] == worst


def test_three_lags(margins):
    """Nise, Control Systems Engineering, Routh-Hurwitz example (from memory): 0 < K < 1386."""
    (row,) = margins(stacked(canonical([1], [1, 18, 77, 0])), fed_back(100.0)).to_dict("records")
    assert row["verdict"] == "ok"
    assert 100 * row["gain_factor_high"] == pytest.approx(1386, rel=1e-12)
    assert row["gain_factor_low"] == pytest.approx(0, abs=1e-12)
    assert row["gain_factor_high_frequency"] == pytest.approx(8.775, abs=5e-4)
    assert row["gain_margin_db"] == pytest.approx(20 * np.log10(13.86), rel=1e-10)


def test_gain_beyond_the_range_is_lost_and_has_no_margin(margins):
    """The negative control of the range: on either side of 1386 the verdicts differ."""
    model = canonical([1], [1, 18, 77, 0])
    inside, outside = ({**model, "C": k * model["C"]} for k in (1386 * (1 - 1e-9), 1386 * 1.000001))
    points = margins(stacked(inside, outside), fed_back(1.0))
    assert list(points["verdict"]) == ["ok", "lost"]
    assert points["gain_factor_high"][0] == pytest.approx(1 / (1 - 1e-9), rel=1e-12)
    for name in ("gain_factor_high", "gain_margin_db", "disk_margin", "stability_radius"):
        assert pd.isna(points[name][1])


def test_unstable_plant(margins):
    """Franklin, Powell and Emami-Naeini, Routh example (from memory): K > 7.5."""
    (row,) = margins(stacked(canonical([1, 1], [1, 5, -6, 0])), fed_back(10.0)).to_dict("records")
    assert row["verdict"] == "ok"
    assert 10 * row["gain_factor_low"] == pytest.approx(7.5, rel=1e-12)
    assert row["gain_factor_high"] == np.inf
    assert row["gain_margin_db"] == pytest.approx(-20 * np.log10(0.75), rel=1e-10)


def test_unstable_plant_at_a_point(tmp_path, export, command):
    """The same from a gain at which it is lost: `point` tells the stable factors."""
    files = tmp_path / "bank.h5", tmp_path / "loop.toml"
    source = export("export.h5", stacked(canonical([1, 1], [1, 5, -6, 0])), ids=["p"])
    command("ingest", source, "--revision", "published", "--bank", files[0])
    files[1].write_text(fed_back(2.0))
    ran = command("point", files[0], "--loop", files[1], "--id", "p", "--json", "-")
    assert ran.code == 1, ran.err
    found = json.loads(ran.out)
    assert found["verdict"] == "lost"
    assert found["gain_factor_low"] is None
    (span,) = found["stable_gain_factors"]
    assert 2.0 * span["from"] == pytest.approx(7.5, rel=1e-12)
    assert span["to"] is None
    shown = command("point", files[0], "--loop", files[1], "--id", "p")
    assert "stable for 3.750 to inf" in shown.out


def test_disk_margin(margins):
    """Seiler, Packard and Gahinet, IEEE Control Systems Magazine 40(5), 2020 (from memory)."""
    model = canonical([25], [1, 10, 10, 10])
    (row,) = margins(stacked(model), fed_back(1.0)).to_dict("records")
    assert row["gain_margin_db"] == pytest.approx(20 * np.log10(3.6), rel=1e-10)
    assert row["phase_margin_deg"] == pytest.approx(29.1, abs=0.05)
    for end in ("input", "output"):
        alpha = row[f"disk_margin_{end}"]
        assert alpha == pytest.approx(0.458, abs=5e-4)
        assert (2 - alpha) / (2 + alpha) == pytest.approx(0.627, abs=5e-4)
        assert (2 + alpha) / (2 - alpha) == pytest.approx(1.594, abs=5e-4)
        assert np.degrees(2 * np.arctan(alpha / 2)) == pytest.approx(25.8, abs=0.05)
    # Both ends of one channel changing: the least of the three, and by as much again at least.
    assert row["disk_margin"] == row["disk_margin_both"] < 0.9 * row["disk_margin_input"]


# u = -Cc xc, xc' = Ac xc + Bc y: the observer of the nominal loop with gains of 10.
OBSERVER = """sign = "negative"
feed = "outputs"
[compensator]
states = ["first", "second"]
inputs = ["u1"]
signals = ["y1"]
A = [[-9.0, 1.0], [-20.0, -9.0]]
B = [[10.0], [10.0]]
C = [[10.0, 10.0]]
D = [[0.0]]
"""


def test_no_guaranteed_margin(margins):
    """Doyle, IEEE Trans. Automatic Control AC-23(4), 1978 (from memory): m < 1 + 1/(αβ)."""
    A, B, C = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[0.0], [1.0]]), np.array([[1.0, 0.0]])
    K = L = 10.0
    observer = A - B @ [[K, K]] - np.array([[L], [L]]) @ C
    np.testing.assert_array_equal(observer, [[-9.0, 1.0], [-20.0, -9.0]])
    plant = stacked({"A": A, "B": B, "C": C, "D": np.zeros((1, 1))})
    (row,) = margins(plant, OBSERVER).to_dict("records")
    assert row["verdict"] == "ok"
    assert row["gain_factor_high"] == pytest.approx(1.01, rel=1e-9)
    assert row["gain_margin_db"] == pytest.approx(20 * np.log10(1.01), rel=1e-7)
    # The other sign of the same compensator is another loop, and a lost one.
    (row,) = margins(plant, OBSERVER.replace("negative", "positive")).to_dict("records")
    assert row["verdict"] == "lost"


def test_delay_of_an_integrator(margins):
    """Standard result of any text on delay systems (from memory): K tau < π/2."""
    gains = [0.1, 1.0, 25.0]
    points = margins(stacked(*(canonical([k], [1, 0]) for k in gains)), fed_back(1.0))
    expected = [np.pi / (2 * k) for k in gains]
    np.testing.assert_allclose(points["delay_margin_s"], expected, rtol=1e-12)
    np.testing.assert_allclose(points["delay_margin_s_frequency"], gains, rtol=1e-12)
    np.testing.assert_allclose(points["phase_margin_deg"], 90.0, rtol=1e-12)


def test_phase_margin_of_second_order(margins):
    """Ogata, Modern Control Engineering (from memory): phase margin over damping ratio."""
    figures = {0.1: 11.42, 0.3: 33.27, 0.5: 51.83, 0.7: 65.16}
    points = margins(stacked(*map(second_order, figures)), fed_back(1.0))
    np.testing.assert_allclose(points["phase_margin_deg"], list(figures.values()), atol=0.005)
    np.testing.assert_allclose(points["min_damping"], list(figures), rtol=1e-12)
    assert (points["gain_margin_db"] == np.inf).all()


def test_radius_of_a_jordan_block(margins):
    """Closed form (sqrt(k² + 4) - k)/2 for [[-1, k], [0, -1]] at k = 4."""
    (row,) = margins({"A": [[[-1.0, 4.0], [0.0, -1.0]]]}, CLOSED, real=True).to_dict("records")
    assert row["stability_radius"] == pytest.approx(0.2360679775, rel=1e-7)
    # A real change has to bring the poles to the axis: at zero, where the smallest singular value
    # is that of A itself, or in a pair.
    assert row["real_stability_radius"] >= row["stability_radius"] * (1 - 1e-7)
    assert row["real_stability_radius"] == pytest.approx(0.2360679775, rel=1e-6)


def test_common_single_loop_practice(margins):
    """6 dB and 45 deg (common practice, no source), by the preset."""
    preset = (PRESETS / "single-loop.toml").read_text(encoding="utf-8")
    loops = [
        second_order(0.5),  # 51.83 deg, no limit of the gain
        second_order(0.3),  # 33.27 deg
        canonical([25], [1, 10, 10, 10]),  # 11.1 dB, 29.1 deg
        canonical([1386 / 1.9], [1, 18, 77, 0]),  # 5.58 dB
    ]
    loops = [padded(loop, 3) for loop in loops]
    points = margins(stacked(*loops), fed_back(1.0), preset)
    assert list(points["verdict"]) == ["ok", "short", "short", "short"]
    assert points["reason"][1] == "phase margin: phase_margin_deg 33.3 deg, 12 below 45"
    assert points["missed"][2] == "phase margin"
    assert points["missed"][3] == "gain margin; phase margin"
    assert points["gain_margin_db"][3] == pytest.approx(20 * np.log10(1.9), rel=1e-10)


def padded(model, n):
    """The same loop with quick lags that nothing excites, so that all have as many states."""
    k = n - len(model["A"])
    A = np.zeros((n, n))
    A[: n - k, : n - k] = model["A"]
    A[n - k :, n - k :] = -5.0 * np.eye(k)
    B, C = np.zeros((n, 1)), np.zeros((1, n))
    B[: n - k], C[:, : n - k] = model["B"], model["C"]
    return {"A": A, "B": B, "C": C, "D": model["D"]}


def peak_of_sensitivity(zeta):
    """Largest abs S of 1/(s(s + 2ζ)), by a search of its formula."""

    def size(w):
        return abs((1j * w) ** 2 + 2j * zeta * w) / abs((1j * w) ** 2 + 2j * zeta * w + 1)

    found = minimize_scalar(lambda w: -size(w), bounds=(0.5, 4.0), options={"xatol": 1e-10})
    return -found.fun


def test_zones_of_magnetic_bearings(margins):
    """ISO 14839-3:2006 (from memory): peak sensitivity 3, 4 and 5 part the zones A to D."""
    preset = (PRESETS / "magnetic-bearing.toml").read_text(encoding="utf-8")
    damping = [0.3, 0.15, 0.12, 0.09]
    peaks = [peak_of_sensitivity(zeta) for zeta in damping]
    assert peaks[0] < 3 < peaks[1] < 4 < peaks[2] < 5 < peaks[3]
    points = margins(stacked(*map(second_order, damping)), fed_back(1.0), preset)
    np.testing.assert_allclose(points["peak_sensitivity"], peaks, rtol=1e-6)
    zones = ["zone A", "zone B or better", "zone C or better"]
    assert list(points["missed"]) == ["; ".join(zones[:k]) for k in range(4)]
    assert list(points["verdict"]) == ["ok", "short", "short", "short"]
