"""Doubt through the whole audit: what makes it, what settles it, and what it counts as."""

import json
import re
import sys
from importlib.util import find_spec

import numpy as np
import pandas as pd
import pytest

import ssaudit
from ssaudit.errors import SsauditError
from ssaudit.loop import parts
from ssaudit.loop.uncertainty import Uncertain
from ssaudit.modes import stacked
from ssaudit.modes.proof import BOTH, EXACT

CLOSED = ssaudit.Loop("", None, "none")
# Well-known integer test matrix (from memory); its fifth power is exactly zero, so that all its
# poles are 0, while floating-point solvers scatter them on a circle of radius about 0.04.
NILPOTENT = np.array(
    [
        [-9, 11, -21, 63, -252],
        [70, -69, 141, -421, 1684],
        [-575, 575, -1149, 3451, -13801],
        [3891, -3891, 7782, -23345, 93365],
        [1024, -1024, 2048, -6144, 24572],
    ],
    dtype=float,
)
SHIFTED = NILPOTENT - np.eye(5) / 128  # exactly representable; all poles at -1/128


def audited(*A, loop=CLOSED, criteria=None, depth="modes", prove="", matrices=(), **bank):
    built = ssaudit.build_bank(np.array(A), *matrices, revision="A", **bank)
    asked = criteria or ssaudit.Criteria()
    return ssaudit.audit(built, loop, asked, depth=depth, prove=prove)


def row(A, **about):
    return dict(audited(A, **about).points.iloc[0])


def oscillator(zeta, omega=2.0):
    return np.array([[0.0, 1.0], [-(omega**2), -2 * zeta * omega]])


RIDE = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),))


def rounded(A, digits):
    return np.array([[float(f"{x:.{digits - 1}e}") for x in r] for r in A])


class TestRoundedExports:
    def test_requirement_within_rounding_is_in_doubt(self):
        found = row(rounded(oscillator(0.199), 2), criteria=RIDE, digits=2)
        assert (found["verdict"], found["doubt"]) == ("doubt", "ride")
        assert re.fullmatch(
            r"ride: damping_ratio 0\.2\d* ± 0\.0\d* against ≥ 0\.2", found["reason"]
        )

    def test_the_reason_names_value_spread_and_limit(self):
        found = row(oscillator(0.199), criteria=RIDE, digits=3)
        assert re.fullmatch(
            r"ride: damping_ratio 0\.199 ± 0\.00\d\d? against ≥ 0\.2", found["reason"]
        )
        assert found["missed"] == ""
        # Half a unit of the last digit moves it by about that much.
        spread = float(found["reason"].split("± ")[1].split(" ")[0])
        ends = [0.7955 / 4, 0.7965 / 4]
        assert spread >= (ends[1] - ends[0]) / 2

    @pytest.mark.parametrize("digits", [6, None])
    def test_more_digits_settle_it(self, digits):
        assert row(oscillator(0.199), criteria=RIDE, digits=digits)["verdict"] == "short"
        assert row(oscillator(0.201), criteria=RIDE, digits=digits)["verdict"] == "ok"

    def test_stability_within_rounding_is_in_doubt(self):
        A = np.array([[-100.0, 1.0], [99.9, -1.0]])  # determinant 0.1, trace -101
        found = row(A, digits=3)
        assert (found["verdict"], found["doubt"]) == ("doubt", "stability")
        assert re.fullmatch(
            r"stability: real part -0\.00099\d* ± \S+ 1/s reaches 0", found["reason"]
        )
        assert row(A, digits=6)["verdict"] == "ok"
        assert row(A)["verdict"] == "ok"

    @pytest.mark.parametrize("digits", [3, 4, 6])
    def test_true_poles_lie_within_the_radii_of_the_rounded_models(self, digits):
        rng = np.random.default_rng(digits)
        A = rng.standard_normal((30, 4, 4)) - 3 * np.eye(4)
        B, C = rng.standard_normal((30, 4, 2)), rng.standard_normal((30, 3, 4))
        D, K = 0.2 * rng.standard_normal((30, 3, 2)), 0.3 * rng.standard_normal((2, 3))
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain(K), "outputs")
        cut = [np.array([rounded(M, digits) for M in stack]) for stack in (A, B, C, D)]
        found = audited(*cut[0], loop=loop, matrices=cut[1:], digits=digits).modes
        true = audited(*A, loop=loop, matrices=(B, C, D)).modes
        largest = 0.0
        for point, modes in found.groupby("point"):
            other = true[true["point"] == point]
            s = other["real"].to_numpy() + 1j * other["imag"].to_numpy()
            gap = np.abs((modes["real"] + 1j * modes["imag"]).to_numpy()[:, None] - s).min(axis=1)
            assert (gap <= modes["radius"]).all()
            largest = max(largest, float((gap / modes["radius"]).max()))
        assert largest > 0.02  # far smaller radii would not do


class TestWhatDoubtCountsAs:
    @pytest.fixture
    def ran(self, project):
        """Audit one model, written with some digits, with what doubt counts as."""

        def run(A, digits, counts_as, *more):
            bank = ssaudit.build_bank([A], revision="A", digits=digits)
            path = project.save(bank, project.folder / "bank.h5")
            (project.folder / "loop.toml").write_text('feed = "none"\n')
            (project.folder / "criteria.toml").write_text(
                (f'doubt = "{counts_as}"\n' if counts_as else "")
                + '[[require]]\nname = "ride"\nquantity = "damping_ratio"\nat_least = 0.2\n'
            )
            ran = project.audit(path, "--json", "-", *more)
            return ran.code, json.loads(ran.out)

        return run

    @pytest.mark.parametrize(("counts_as", "code"), [("ok", 0), ("not ok", 1), ("", 1)])
    def test_about_a_requirement_it_is_for_the_criteria_to_say(self, ran, counts_as, code):
        found, report = ran(oscillator(0.199), 3, counts_as)
        assert found == code
        assert report["points"]["doubt"] == 1
        assert report["tolerated"] == (counts_as == "ok")
        assert report["worst"][0]["doubt"] == "ride"

    def test_about_stability_it_never_counts_as_ok(self, ran):
        A = np.array([[-100.0, 1.0], [99.9, -1.0]])
        code, report = ran(A, 3, "ok")
        assert code == 1
        assert report["tolerated"] == 0
        assert report["worst"][0]["doubt"] == "stability"

    def test_of_a_cross_check_it_never_counts_as_ok(self, ran, monkeypatch):
        off_by(monkeypatch, 1e-3)
        code, report = ran(oscillator(0.5), None, "ok")
        assert code == 1
        assert report["tolerated"] == 0
        assert report["worst"][0]["doubt"] == "cross-check"


def off_by(monkeypatch, error):
    """Make the eigenvalue solver wrong by some error or to some poles."""
    genuine = stacked.find_vectors

    def wrong(A):
        poles, right, failed = genuine(A)
        changed = poles + error if np.isscalar(error) else np.array([error] * len(A), dtype=complex)
        return changed, right, failed

    monkeypatch.setattr(stacked, "find_vectors", wrong)


class TestCrossChecks:
    def test_the_sum_of_the_poles(self, monkeypatch):
        assert row(oscillator(0.5))["verdict"] == "ok"
        off_by(monkeypatch, 1e-9)
        found = row(oscillator(0.5))
        assert (found["verdict"], found["doubt"]) == ("doubt", "cross-check")
        assert found["reason"] == "cross-check: the sum of the poles differs from the trace"

    def test_conjugates(self, monkeypatch):
        assert row(-np.eye(3))["verdict"] == "ok"
        off_by(monkeypatch, [-1 + 1j, -1 - 0.5j, -1 - 0.5j])
        found = row(-np.eye(3))
        assert (found["verdict"], found["doubt"]) == ("doubt", "cross-check")
        assert found["reason"] == "cross-check: the poles are not symmetric about the real axis"

    def test_coefficients(self, monkeypatch):
        A = np.array([[0.0, 1.0], [-2.0, -3.0]])  # poles -1 and -2
        monkeypatch.setattr(
            stacked, "paired_radii", lambda A, modes, *_: np.full(modes.poles.shape, 1e-15)
        )
        assert row(A)["verdict"] == "ok"
        off_by(monkeypatch, [1.0, -4.0])  # of the right sum, on both sides of the axis
        found = row(A)
        assert found["verdict"] == "doubt"
        assert "the signs of the characteristic coefficients contradict" in found["reason"]

    def test_of_sampled_models(self, monkeypatch):
        A = np.diag([0.5, -0.25])
        assert row(A, dt=0.1)["verdict"] == "ok"
        off_by(monkeypatch, 1e-9)
        assert row(A, dt=0.1)["doubt"] == "cross-check"

    def test_an_error_within_rounding_passes(self, monkeypatch):
        off_by(monkeypatch, 1e-16)
        assert row(oscillator(0.5))["verdict"] == "ok"


class TestExactGrounds:
    def test_undamped_machine_is_lost_by_its_trace(self):
        """Kundur (1994), Ex. 12.2 with no damping (from memory): poles ± 6.39j."""
        A = np.array([[0.0, -0.757 / 7], [377.0, 0.0]])
        found = row(A)
        assert found["verdict"] == "lost"
        assert found["imag"] == pytest.approx(6.39, abs=0.005)
        # With digits the zeros stay exact, and so does their sum.
        assert row(A, digits=3)["verdict"] == "lost"
        moved = ssaudit.Loop("", None, "none", uncertain=(Uncertain("A", absolute=0.01),))
        assert row(A, loop=moved)["verdict"] == "doubt"
        damped = A + np.diag([-10 / 7, 0.0])
        assert row(damped)["verdict"] == "ok"
        assert row(damped)["damping_ratio"] == pytest.approx(0.112, abs=5e-4)

    def test_trace_of_exactly_zero_beside_scattered_poles(self):
        found = row(NILPOTENT)
        assert found["verdict"] == "lost"
        assert "the trace, which is the sum of the poles" in found["reason"]

    def test_trace_beyond_rounding_alone(self):
        # Two digits leave the sum of the diagonal unknown to 0.5 or so.
        A = np.array([[1.0, 2.0, 0.0], [-2.0, -99.0, 7.0], [0.0, -7.0, 98.0]])
        assert row(A)["verdict"] == "lost"

    def test_ill_conditioned_but_stable_is_not_lost_by_numbers(self):
        found = row(SHIFTED)
        assert np.linalg.eigvals(SHIFTED).real.max() > 0.01  # what plain poles would say
        assert (found["verdict"], found["doubt"]) == ("doubt", "stability")

    def test_sampled(self):
        assert row(np.eye(5) + NILPOTENT, dt=1.0)["verdict"] == "lost"
        found = row(np.eye(5) * 127 / 128 + NILPOTENT, dt=1.0)
        assert (found["verdict"], found["doubt"]) == ("doubt", "stability")


def summed_up(A):
    """Add a heading that sums up the first state, and a position that sums up the second."""
    n = len(A)
    whole = np.zeros((n + 2, n + 2))
    whole[:n, :n] = A
    whole[n, 0] = whole[n + 1, 1] = 1.0
    return whole


needs_flint = pytest.mark.skipif(find_spec("flint") is None, reason="python-flint is missing")


@needs_flint
class TestProofs:
    @pytest.mark.parametrize("prove", ["doubt", "worst", "all"])
    def test_nilpotent_matrix_and_its_shift(self, prove):
        found = audited(SHIFTED, NILPOTENT, NILPOTENT + np.eye(5) / 128, prove=prove)
        assert list(found.points["verdict"]) == ["ok", "lost", "lost"]
        assert found.points["reason"][0] == ""
        assert found.points["doubt"][0] == ""
        proofs = list(found.points["proof"])
        if prove == "doubt":  # the others are settled without proof
            assert proofs == ["stable", "", ""]
            assert found.summary.proofs == {"stable": 1}
        else:
            assert proofs == ["stable", "unstable", "unstable"]
            assert found.summary.proofs == {"stable": 1, "unstable": 2}
            assert found.points["reason"][1].endswith(f"; proved, {EXACT}")
        assert found.summary.counts["doubt"] == 0

    def test_without_proof_it_stays_in_doubt(self):
        found = audited(SHIFTED)
        assert list(found.points["verdict"]) == ["doubt"]
        assert "proof" not in found.points

    def test_worst_are_those_that_the_summary_lists(self):
        models = [SHIFTED - k * np.eye(5) / 1024 for k in range(6)]
        bank = ssaudit.build_bank(models, revision="A")
        criteria = ssaudit.Criteria()
        plain = ssaudit.audit(bank, CLOSED, criteria, worst=2)
        listed = {point["point"] for point in plain.summary.worst}
        found = ssaudit.audit(bank, CLOSED, criteria, worst=2, prove="worst", chunk=2)
        proved = set(found.points["point"][found.points["proof"] != ""])
        assert proved == listed
        assert len(proved) == 2
        assert found.summary.counts == {"ok": 2, "short": 0, "lost": 0, "doubt": 4, "void": 0}

    def test_proved_stable_is_still_judged_by_the_requirements(self):
        asked = (
            ("decay", {"at_most": -1.0}, "short"),
            ("decay", {"at_most": 0.0}, "doubt"),
            ("fast", {"at_most": 10.0}, "ok"),
        )
        for name, limits, verdict in asked:
            requirement = ssaudit.Requirement(name, "real", **limits)
            found = row(SHIFTED, criteria=ssaudit.Criteria((requirement,)), prove="doubt")
            assert (found["verdict"], found["proof"]) == (verdict, "stable")
            assert found["doubt"] == ("decay" if verdict == "doubt" else "")
            assert found["stable_inside"]
            assert found["stable_outside"]

    def test_proved_stable_without_known_margins_does_not_meet_one(self):
        """What poles cannot tell, margins cannot either."""
        asked = ssaudit.Requirement("radius", "stability_radius", at_least=1e-3)
        criteria = ssaudit.Criteria((asked,))
        found = row(SHIFTED, criteria=criteria, prove="doubt", depth="margins")
        assert found["proof"] == "stable"
        assert found["verdict"] in ("short", "doubt")

    def test_uncertain_model_stays_open_and_in_doubt(self):
        found = row(SHIFTED, digits=6, prove="doubt")
        assert (found["verdict"], found["doubt"], found["proof"]) == ("doubt", "stability", "open")
        undecided = ssaudit.Loop("", None, "none", uncertain=(Uncertain("A", absolute=0.1),))
        found = row(np.diag([-0.05, -2.0]), loop=undecided, prove="doubt")
        assert (found["verdict"], found["proof"]) == ("doubt", "open")

    def test_box_of_models_is_proved_where_it_is_small(self):
        A = np.array([[-100.0, 1.0], [99.9, -1.0]])
        wide = row(A, digits=3, prove="all")
        assert (wide["verdict"], wide["proof"]) == ("doubt", "open")
        # Half a unit of 99.9, 0.05, is half of the determinant: both kinds lie in the box.
        assert wide["reason"].endswith(BOTH)
        small = row(A, digits=6, prove="all")
        assert (small["verdict"], small["proof"]) == ("ok", "stable")

    @pytest.mark.parametrize("named", [("heading", "position"), ("heading",), ()])
    def test_neutral_states_are_left_out_of_proofs(self, named):
        states = ["a", "b", "c", "d", "e", "heading", "position"]
        criteria = ssaudit.Criteria((), named)
        found = row(summed_up(SHIFTED), states=states, criteria=criteria, prove="all")
        if len(named) == 2:
            assert (found["verdict"], found["proof"]) == ("ok", "stable")
        else:
            assert (found["verdict"], found["proof"]) == ("lost", "unstable")

    def test_neutral_states_are_left_out_of_proofs_of_fed_back_states(self):
        """The gains have a column for the heading, of zeros."""
        states = ["a", "b", "c", "d", "e", "heading", "position"]
        B = np.zeros((7, 1))
        B[3, 0] = 1.0
        K = np.array([[3.0, -1.0, 4.0, 1.0, -5.0, 0.0, 0.0]])
        A = summed_up(SHIFTED) + B @ K
        A[5:, :] = summed_up(SHIFTED)[5:, :]
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain(K))
        criteria = ssaudit.Criteria((), ("heading", "position"))
        about = {"states": states, "matrices": ([B],), "loop": loop, "criteria": criteria}
        assert row(A, **about)["verdict"] == "doubt"
        found = row(A, prove="doubt", **about)
        assert (found["verdict"], found["proof"]) == ("ok", "stable")

    @pytest.mark.parametrize("sign", ["negative", "positive"])
    def test_feedthrough_is_closed_exactly(self, sign):
        """KD = 1 (or -1), so that A = SHIFTED ± B K C / 2 closes to the shifted matrix exactly."""
        sigma = -1 if sign == "negative" else 1
        B = np.array([[1.0], [0.0], [2.0], [-1.0], [0.0]])
        C = np.array([[1.0, -2.0, 0.0, 1.0, 0.0], [0.0, 1.0, 1.0, 0.0, -1.0]])
        K, D = np.array([[2.0, -4.0]]), -sigma * np.array([[0.5], [0.0]])
        A = SHIFTED - sigma * B @ K @ C / 2
        loop = ssaudit.Loop(sign, ssaudit.ConstantGain(K), "outputs")
        about = {"loop": loop, "matrices": ([B], [C], [D])}
        assert row(A, **about)["verdict"] == "doubt"
        found = row(A, prove="doubt", **about)
        assert (found["verdict"], found["proof"]) == ("ok", "stable")
        # Half the feedthrough is another loop; its proof says what its exact poles are.
        other = {**about, "matrices": ([B], [C], [D / 2])}
        closed = A + sigma * B @ K @ C / 1.5
        assert np.linalg.eigvals(closed).real.max() > 1
        assert row(A, prove="all", **other)["proof"] == "unstable"

    def test_sampled(self):
        for shift, outcome in ((127 / 128, "stable"), (1.0, "unstable"), (-1.0, "unstable"),
                               (-127 / 128, "stable")):  # fmt: skip
            found = row(NILPOTENT + shift * np.eye(5), dt=0.5, prove="all")
            assert found["proof"] == outcome
            assert found["verdict"] == ("ok" if outcome == "stable" else "lost")

    def test_with_parts_and_sampling(self):
        """Assembled loops are proved for every model within the rounding of assembling them."""
        A, B, C, D = [[[0.0, 1.0], [-2.0, -0.4]]], [[[0.0], [1.0]]], [[[1.0, 0.0]]], [[[0.0]]]
        servo = parts.first_order(0.1).at("servo", input="u1")
        for gain, outcome in ((1.0, "stable"), (9.0, "unstable")):
            loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[gain]]), "outputs",
                                parts=(servo,))  # fmt: skip
            found = row(A[0], loop=loop, matrices=(B, C, D), prove="all")
            assert found["proof"] == outcome
            assert found["verdict"] == ("ok" if outcome == "stable" else "lost")

    @pytest.mark.parametrize("sign", ["negative", "positive"])
    @pytest.mark.parametrize("dt", [0.0, 0.1])
    def test_no_verdict_contradicts_its_proof(self, sign, dt):
        rng = np.random.default_rng(5)
        count = 60
        A = rng.standard_normal((count, 4, 4))
        if dt:
            A *= rng.uniform(0.5, 1.2, count)[:, None, None] / 2
        else:
            A -= rng.uniform(0.5, 2.5, count)[:, None, None] * np.eye(4)
        B, C = rng.standard_normal((count, 4, 2)), rng.standard_normal((count, 2, 4))
        D = 0.3 * rng.standard_normal((count, 2, 2))
        loop = ssaudit.Loop(sign, ssaudit.ConstantGain(0.2 * np.ones((2, 2))), "outputs")
        about = {"loop": loop, "matrices": (B, C, D), "dt": dt}
        before = audited(*A, **about).points["verdict"]
        after = audited(*A, prove="all", **about).points
        expected = after["proof"].map({"stable": "ok", "unstable": "lost"})
        assert set(expected) == {"ok", "lost"}
        decided = before != "doubt"
        assert decided.mean() > 0.9
        np.testing.assert_array_equal(before[decided], expected[decided])
        np.testing.assert_array_equal(after["verdict"], expected)


class TestDescriptorProofs:
    @pytest.fixture
    def ran(self, export, command, tmp_path):
        def run(A, E, stated=""):
            bank, loop, criteria = (tmp_path / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
            source = export("e.h5", {"A": [A], "E": [E]})
            loop.write_text('feed = "none"\n' + stated)
            criteria.write_text("")
            assert command("ingest", source, "--revision", "A", "--bank", bank).code == 0
            ran = command("audit", bank, "--loop", loop, "--criteria", criteria, "--prove", "all",
                          "--csv", tmp_path / "points.csv")  # fmt: skip
            (row,) = pd.read_csv(tmp_path / "points.csv").to_dict("records")
            return ran.code, row["verdict"], row["proof"]

        return run

    @needs_flint
    def test_pencil_is_proved_exactly(self, ran):
        E = np.diag([2.0, 4.0, 1.0, 0.5, 8.0])
        assert ran(E @ SHIFTED, E) == (0, "ok", "stable")
        assert ran(E @ NILPOTENT, E) == (1, "lost", "unstable")

    @needs_flint
    def test_uncertain_mass_is_not_taken_for_exact(self, ran):
        """E of 1 ± 2 may have either sign, and the pole with it."""
        stated = '[[uncertain]]\nmatrix = "E"\nabsolute = 2.0\n'
        assert ran([[-1.0]], [[1.0]]) == (0, "ok", "stable")
        assert ran([[-1.0]], [[1.0]], stated) == (1, "doubt", "open")


class TestWithoutTheExtra:
    @pytest.fixture(autouse=True)
    def _missing(self, monkeypatch):
        monkeypatch.setitem(sys.modules, "flint", None)

    def test_the_command_says_what_to_install_and_leaves_nothing(self, project):
        bank = project.bank("A", [0.5])
        before = sorted(project.folder.rglob("*"))
        for prove in ("doubt", "worst", "all"):
            ran = project.audit(
                bank, "--prove", prove, "--ledger", project.ledger,
                "--csv", project.folder / "points.csv", "--json", project.folder / "found.json",
            )  # fmt: skip
            assert (ran.code, ran.out) == (2, "")
            assert ran.err.count("\n") == 1
            assert 'pip install "ssaudit[prove]"' in ran.err
            assert "python-flint" in ran.err
            assert sorted(project.folder.rglob("*")) == before
        assert project.audit(bank).code == 0  # without proofs nothing is missing

    def test_the_library_says_the_same(self):
        with pytest.raises(SsauditError, match="python-flint"):
            audited(SHIFTED, prove="doubt")


def test_unknown_words_are_refused():
    with pytest.raises(SsauditError, match="prove is 'some'; choose one of"):
        audited(SHIFTED, prove="some")


@needs_flint
def test_proofs_in_the_ledger_and_the_report(project):
    bank = ssaudit.build_bank([SHIFTED, -np.eye(5)], revision="A", ids=["near", "good"])
    path = project.save(bank, project.folder / "bank.h5")
    (project.folder / "loop.toml").write_text('feed = "none"\n')
    (project.folder / "criteria.toml").write_text("")
    plain = project.audit(path, "--ledger", project.ledger)
    assert plain.code == 1
    ran = project.audit(path, "--prove", "doubt", "--ledger", project.ledger, "--json",
                        project.folder / "found.json")  # fmt: skip
    assert ran.code == 0
    assert "1 proved stable: near" in ran.out
    report = json.loads((project.folder / "found.json").read_text())
    assert report["proofs"] == {"stable": 1}
    assert report["settings"]["prove"] == "doubt"
    runs = sorted(project.ledger.glob("run=*"), key=lambda path: path.stat().st_mtime_ns)
    assert len(runs) == 2  # another question is another run
    frames = [pd.read_parquet(run / "points.parquet") for run in runs]
    assert sorted("proof" in frame for frame in frames) == [False, True]
    (frame,) = (frame for frame in frames if "proof" in frame)
    assert dict(zip(frame["point"], frame["proof"], strict=True)) == {"near": "stable", "good": ""}
