"""One point, explained: found by name or place, with what is known and what would help."""

import json

import numpy as np
import pytest

import ssaudit
from ssaudit.errors import SsauditError
from ssaudit.loop import parts
from ssaudit.loop.assembly import Sampling
from ssaudit.loop.uncertainty import Uncertain
from ssaudit.point import CHANGE, MOST_GAINS, explain_point, find_point


def place_bank(speed, mass=None, **about):
    count = len(speed)
    places = {"speed": (speed, "m/s")} | ({} if mass is None else {"mass": (mass, "t")})
    return ssaudit.build_bank(
        np.tile(-np.eye(1), (count, 1, 1)), np.ones((count, 1, 1)), revision="A",
        coordinates=places, **about,
    )  # fmt: skip


class TestFinding:
    def test_by_id(self):
        bank = place_bank([1.0, 2.0, 3.0], ids=["a", "b", "c"])
        assert [find_point(bank, id=name) for name in "abc"] == [0, 1, 2]

    def test_distances_are_shares_of_the_range(self):
        # Speeds span 10 m/s, masses 1000 t: 1 m/s counts as much as 100 t.
        bank = place_bank([0.0, 10.0, 5.0, 5.0], [0.0, 1000.0, 400.0, 600.0])
        assert find_point(bank, near={"speed": 5.0, "mass": 560.0}) == 3
        assert find_point(bank, near={"speed": 5.0, "mass": 440.0}) == 2
        # 1.4 m/s off, or 150 t off: without the scaling the first would be taken for the nearer.
        bank = place_bank([0.0, 10.0, 5.0, 6.6], [0.0, 1000.0, 650.0, 500.0])
        assert find_point(bank, near={"speed": 5.0, "mass": 500.0}) == 2
        assert find_point(bank, near={"speed": 5.0}) == 2
        assert find_point(bank, near={"mass": 510.0}) == 3

    def test_units_do_not_matter(self):
        rng = np.random.default_rng(0)
        speed, mass = rng.uniform(0, 30, 40), rng.uniform(80, 120, 40)
        wanted = np.column_stack([rng.uniform(0, 30, 20), rng.uniform(80, 120, 20)])
        plain, other = place_bank(speed, mass), place_bank(3.6 * speed, mass / 1000)
        for s, m in wanted:
            found = find_point(plain, near={"speed": s, "mass": m})
            assert found == find_point(other, near={"speed": 3.6 * s, "mass": m / 1000})
            share = ((speed - s) / np.ptp(speed)) ** 2 + ((mass - m) / np.ptp(mass)) ** 2
            assert found == share.argmin()

    def test_a_coordinate_that_is_the_same_everywhere(self):
        assert find_point(place_bank([5.0, 5.0], [1.0, 2.0]), near={"speed": 7.0, "mass": 2.0}) == 1

    @pytest.mark.parametrize("odd", [np.nan, np.inf, -np.inf])
    def test_points_without_a_place_are_never_the_nearest(self, odd):
        bank = place_bank([10.0, odd, 20.0])
        assert find_point(bank, near={"speed": 19.0}) == 2
        assert find_point(bank, near={"speed": 11.0}) == 0

    def test_of_equally_near_points_the_usable_one_is_taken(self):
        A = np.array([[[np.nan]], [[-1.0]]])
        bank = ssaudit.build_bank(
            A, revision="A", coordinates={"speed": ([4.0, 6.0], "m/s")}, ids=["void", "good"]
        )
        assert find_point(bank, near={"speed": 5.0}) == 1
        assert find_point(bank, near={"speed": 4.9}) == 0

    @pytest.mark.parametrize(
        ("asked", "message"),
        [
            ({"id": "cruize"}, "no point is named 'cruize'; did you mean cruise?"),
            ({"near": {"sped": 3.0}}, "unknown coordinate 'sped'; did you mean speed?"),
            ({"near": {}}, "no point is named; give its id, or coordinates near it"),
            ({}, "no point is named; give its id, or coordinates near it"),
        ],
    )
    def test_what_cannot_be_found(self, asked, message):
        bank = place_bank([1.0, 2.0], ids=["cruise", "landing"])
        with pytest.raises(SsauditError) as caught:
            find_point(bank, **asked)
        assert message in str(caught.value)

    def test_names_that_are_similar_among_many(self):
        bank = place_bank(np.arange(500.0), ids=[f"v{k:03}" for k in range(500)])
        with pytest.raises(SsauditError, match="similar: v"):
            find_point(bank, id="v12")
        with pytest.raises(SsauditError, match="see the ledger's points"):
            find_point(bank, id="something else")

    def test_name_that_several_points_have(self):
        bank = place_bank([1.0, 2.0], ids=["twin", "twin"])
        with pytest.raises(SsauditError, match=r"2 points are named 'twin'; .*--near"):
            find_point(bank, id="twin")


def controlled(dt=0.0, feed="outputs", seed=0, **loop):
    """A stable loop with feedthrough, two inputs and three signals."""
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((5, 5))
    A = 0.8 * A / np.abs(np.linalg.eigvals(A)).max() if dt else A - 3 * np.eye(5)
    B, C, D = rng.standard_normal((5, 2)), rng.standard_normal((3, 5)), rng.standard_normal((3, 2))
    K = 0.15 * rng.standard_normal((2, 5 if feed == "states" else 3))
    bank = ssaudit.build_bank([A], [B], [C], [0.2 * D], revision="A", dt=dt, ids=["p"])

    def loop_of(gain):
        return ssaudit.Loop("negative", ssaudit.ConstantGain(gain), feed, **loop)

    return bank, K, loop_of


class TestGains:
    @pytest.mark.parametrize("feed", ["states", "outputs"])
    @pytest.mark.parametrize(
        "loop",
        [{}, {"parts": (parts.first_order(0.05).at("servo", input="u1"),)},
         {"sampling": Sampling(0.02, 1)}],
        ids=["plain", "parts", "sampling"],
    )  # fmt: skip
    @pytest.mark.parametrize("dt", [0.0, 0.1])
    def test_derivatives_agree_with_differences(self, feed, loop, dt):
        if dt and loop:
            return  # parts and sampling are for continuous models
        bank, K, loop_of = controlled(dt, feed, **loop)
        report = explain_point(bank, loop_of(K), id="p")
        assert 0 < len(report.effects) <= MOST_GAINS
        signals = bank.sections[0].states if feed == "states" else bank.sections[0].outputs

        def damping(changes):
            """Least damping under changed gains: a point of one audit each."""
            steps = np.arange(len(changes), dtype=float)
            (section,) = bank.sections
            stacks = [np.repeat(M, len(steps), axis=0) for M in section.read(0, 1).values()]
            many = ssaudit.build_bank(
                *stacks, revision="A", dt=dt, coordinates={"step": (steps, "")}
            )
            gain = ssaudit.GainSchedule(
                ("step",), (steps,), K + np.array(changes), section.inputs, signals, "refuse"
            )
            closing = ssaudit.Loop("negative", gain, feed, **loop)
            return ssaudit.audit(many, closing, ssaudit.Criteria()).points["min_damping"]

        steps, changes = [], []
        for effect in report.effects:
            i, j = bank.sections[0].inputs.index(effect.input), signals.index(effect.signal)
            assert effect.gain == K[i, j]
            h = 1e-4 * max(abs(K[i, j]), 0.05)
            steps.append(h)
            for step in (h, -h, h / 2, -h / 2):
                changes.append(np.zeros(K.shape))
                changes[-1][i, j] = step
        found = np.reshape(damping(changes), (-1, 4))
        for effect, h, (a, b, c, d) in zip(report.effects, steps, found, strict=True):
            slope = (4 * (c - d) / h - (a - b) / (2 * h)) / 3
            assert effect.derivative == pytest.approx(slope, rel=1e-6, abs=1e-8)
            assert effect.change == pytest.approx(CHANGE * effect.gain * effect.derivative)

    def test_those_that_move_the_least_damping_most_come_first(self):
        bank, K, loop_of = controlled()
        effects = explain_point(bank, loop_of(K), id="p").effects
        sizes = [abs(effect.gain * effect.derivative) for effect in effects]
        assert sizes == sorted(sizes, reverse=True)
        assert sizes[0] > sizes[-1]

    def test_of_a_compensator_only_what_commands_and_signals_share(self):
        bank, _, _ = controlled()
        K = 0.1 * np.ones((3, 4))
        K[2, 3] = -2.0
        names = ("u1", "u2", "c"), ("y1", "y2", "y3", "c")
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain(K, *names), "outputs",
                            compensator=("c",))  # fmt: skip
        effects = explain_point(bank, loop, id="p").effects
        assert {effect.input for effect in effects} <= {"u1", "u2"}
        assert {effect.signal for effect in effects} <= {"y1", "y2", "y3"}

    def test_without_damped_poles_there_is_nothing_to_move(self):
        """z = 0 has no damping ratio, and real poles keep theirs."""
        bank = ssaudit.build_bank([np.diag([0.5, 0.3])], [[[1.0], [0.0]]], revision="A", dt=0.1)
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.5, 0.0]]))
        report = explain_point(bank, loop, id="1")
        assert report.effects == ()
        assert min(mode["modulus"] for mode in report.modes) == 0.0


class TestReport:
    def test_it_is_the_row_of_the_audit(self):
        bank, K, loop_of = controlled()
        criteria = ssaudit.Criteria((ssaudit.Requirement("gain", "gain_margin_db", at_least=99),))
        report = explain_point(bank, loop_of(K), id="p", criteria=criteria)
        whole = ssaudit.audit(bank, loop_of(K), criteria, depth="margins", real_radius=True)
        expected = dict(whole.points.iloc[0])
        assert report.row.keys() == expected.keys()
        for name, value in report.row.items():
            if name.startswith("stable_"):
                assert bool(value) == expected[name]
            else:
                np.testing.assert_equal(value, expected[name])
        assert len(report.modes) == len(whole.modes)
        damping = [mode["damping_ratio"] for mode in report.modes]
        assert damping == sorted(damping)
        assert report.row["verdict"] == "short"
        assert {loop.name for loop in report.loops} == set(whole.loops["loop"])

    def test_lost_point_has_no_margins_but_stable_factors(self):
        """L = k/(s - 2) is stable above 2 alone; at 1 it is lost."""
        bank = ssaudit.build_bank([[[2.0]]], [[[1.0]]], revision="A", ids=["p"])
        report = explain_point(
            bank, ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]])), id="p"
        )
        assert report.row["verdict"] == "lost"
        assert np.isnan(report.row["gain_margin_db"])
        assert report.gains.low.tolist() == [[pytest.approx(2.0)]]
        assert report.gains.high.tolist() == [[np.inf]]
        assert report.row["stable_outside"] == -1  # no outputs to tell by

    def test_void_point(self):
        bank = ssaudit.build_bank([[[np.nan]]], [[[1.0]]], revision="A", ids=["p"])
        report = explain_point(
            bank, ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]])), id="p"
        )
        assert (report.row["verdict"], report.row["reason"]) == ("void", "A[1,1] is NaN")
        assert report.modes == []
        assert report.loops == ()
        assert report.gains is None
        assert report.effects == ()

    def test_point_outside_the_table_is_void(self):
        bank = place_bank([1.0, 9.0], ids=["in", "out"])
        gain = ssaudit.GainSchedule(
            ("speed",), (np.array([0.0, 5.0]),), np.ones((2, 1, 1)), ("u1",), ("x1",), "refuse"
        )
        loop = ssaudit.Loop("negative", gain)
        assert explain_point(bank, loop, id="in").row["verdict"] == "ok"
        report = explain_point(bank, loop, id="out")
        assert report.row["verdict"] == "void"
        assert "speed" in report.row["reason"]

    def test_models_that_come_closed(self):
        bank = ssaudit.build_bank([[[-1.0]]], revision="A", ids=["p"])
        report = explain_point(bank, ssaudit.Loop("", None, "none"), id="p")
        assert report.row["verdict"] == "ok"
        assert report.row["stability_radius"] == pytest.approx(1.0)
        assert report.loops == ()
        assert report.gains is None

    def test_neutral_states_are_left_out(self):
        A = np.array([[[0.0, 1.0, 0.0], [-1.0, -0.5, 0.0], [1.0, 0.0, 0.0]]])
        bank = ssaudit.build_bank(
            A, [[[0.0], [1.0], [0.0]]], revision="A", states=["a", "b", "heading"], ids=["p"]
        )
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.5, 0.5, 0.0]]))
        criteria = ssaudit.Criteria((), ("heading",))
        report = explain_point(bank, loop, id="p", criteria=criteria)
        assert report.row["verdict"] == "ok"
        # s² + (0.5 + 0.5 k) s + 1 + 0.5 k: stable for k above -1.
        assert report.gains.low.tolist() == [[pytest.approx(-1.0)]]
        assert report.row["gain_factor_low"] == pytest.approx(-1.0)
        assert {loop.name for loop in report.loops} == {"input u1", "signal a", "signal b"}
        assert explain_point(bank, loop, id="p").row["verdict"] == "lost"

    def test_doubt_about_the_point(self):
        bank = ssaudit.build_bank([[[-0.5]]], [[[1.0]]], revision="A", ids=["p"])
        loop = ssaudit.Loop(
            "negative", ssaudit.ConstantGain([[0.0]]), uncertain=(Uncertain("A", absolute=1.0),)
        )
        report = explain_point(bank, loop, id="p")
        assert (report.row["verdict"], report.row["doubt"]) == ("doubt", "stability")

    def test_coordinates_tags_and_how_far_apart(self):
        bank = ssaudit.build_bank(
            [[[-1.0]], [[-2.0]]], [[[1.0]], [[1.0]]], revision="A", ids=["a", "b"],
            coordinates={"speed": ([10.0, 20.0], "m/s")}, tags={"config": ["hull", "foil"]},
        )  # fmt: skip
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]]))
        report = explain_point(bank, loop, near={"speed": 18.5})
        assert (report.point, report.at, report.tags) == ("b", {"speed": 20.0}, {"config": "foil"})
        assert report.units == {"speed": "m/s"}
        assert report.apart == {"speed": 1.5}
        assert explain_point(bank, loop, id="a").apart == {}

    def test_loop_and_criteria_must_fit(self):
        bank = place_bank([1.0])
        with pytest.raises(SsauditError, match="gain matrix is for 2"):
            explain_point(bank, ssaudit.Loop("negative", ssaudit.ConstantGain(np.ones((2, 1)))),
                          id="1")  # fmt: skip
        with pytest.raises(SsauditError, match="neutral names no state"):
            explain_point(bank, ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]])), id="1",
                          criteria=ssaudit.Criteria((), ("heading",)))  # fmt: skip


class TestCommand:
    @pytest.fixture
    def point(self, project):
        bank = project.bank(
            "A", [0.5, 0.1, -0.3, np.nan], ids=["good", "slack", "wild", "void"],
            coordinates={"speed": ([10.0, 20.0, 30.0, 40.0], "m/s")},
        )  # fmt: skip

        def run(*more):
            return project.run("point", bank, "--loop", project.folder / "loop.toml", *more)

        return run

    @staticmethod
    def strict(text):
        def refuse(word):
            raise AssertionError(f"{word} is not JSON")

        return json.loads(text, parse_constant=refuse)

    def test_exit_codes_and_strict_json(self, point, project):
        criteria = project.folder / "criteria.toml"
        for name, code, verdict in (("good", 0, "ok"), ("slack", 1, "short"), ("wild", 1, "lost"),
                                    ("void", 1, "void")):  # fmt: skip
            ran = point("--criteria", criteria, "--id", name, "--json", "-")
            assert (ran.code, ran.err) == (code, "")
            found = self.strict(ran.out)
            assert (found["schema"], found["point"], found["verdict"]) == (1, name, verdict)
            defined = verdict in ("ok", "short")
            assert (found["gain_factor_low"] is not None) == defined
            assert (found["disk_margin"] is not None) == defined
            assert len(found["loops"]) == (0 if verdict == "void" else 3)
            for loop in found["loops"]:
                assert loop["stable"] == defined
                assert (loop["peak_sensitivity"] is not None) == defined
            assert len(found["modes"]) == (0 if verdict == "void" else 1)
        assert point("--id", "slack").code == 0  # stability alone is asked for

    def test_no_limit_is_null(self, point):
        found = self.strict(point("--id", "good", "--json", "-").out)
        assert found["gain_factor_high"] is None
        assert found["gain_margin_db"] is None
        (span,) = found["stable_gain_factors"]
        assert span["to"] is None
        assert span["from"] == pytest.approx(found["gain_factor_low"])

    def test_stable_factors_of_a_lost_point(self, point):
        """-2 ζ ω = 1.2 is the damping at hand: the rate gain 1 has to be 2.2 at least."""
        found = self.strict(point("--id", "wild", "--json", "-").out)
        (span,) = found["stable_gain_factors"]
        assert span["from"] == pytest.approx(2.2)

    def test_near(self, point):
        for asked, name in (("speed=12", "good"), ("speed=29.9", "wild"), ("speed=1e3", "void")):
            found = self.strict(point("--near", asked, "--json", "-").out)
            assert found["point"] == name
        assert found["apart"] == {"speed": 40.0 - 1e3}

    def test_json_to_a_file_beside_the_screen(self, point, project):
        path = project.folder / "point.json"
        ran = point("--id", "good", "--json", path)
        assert "Point good" in ran.out
        assert self.strict(path.read_text())["point"] == "good"

    @pytest.mark.parametrize(
        ("arguments", "message"),
        [
            (("--id", "god"), "no point is named 'god'; did you mean good?"),
            (("--near", "sped=3"), "unknown coordinate 'sped'; did you mean speed?"),
        ],
    )
    def test_what_is_not_there(self, point, arguments, message):
        ran = point(*arguments)
        assert (ran.code, ran.out) == (2, "")
        assert ran.err.count("\n") == 1
        assert message in ran.err

    @pytest.mark.parametrize(
        "arguments",
        [(), ("--near", "speed"), ("--near", "speed="), ("--near", "speed=fast"), ("--near", "=3"),
         ("--near", "speed=nan"), ("--near", "speed=inf"), ("--near", "speed=1,"),
         ("--near", "speed=1;mass=2"), ("--near", "speed=20", "--id", "good")],
    )  # fmt: skip
    def test_malformed_arguments(self, point, capsys, arguments):
        with pytest.raises(SystemExit) as ended:
            point(*arguments)
        assert ended.value.code == 2
        written = capsys.readouterr()
        assert written.out == ""
        assert written.err.count("\n") == 1

    def test_places_that_are_no_numbers(self, project):
        bank = project.bank(
            "A", [0.5, 0.5], ids=["here", "nowhere"],
            coordinates={"speed": ([10.0, np.inf], "m/s"), "mass": ([5.0, np.nan], "t")},
        )  # fmt: skip
        loop = project.folder / "loop.toml"
        for asked in ("speed=3", "speed=1e9", "mass=90", "mass=1,speed=1"):
            ran = project.run("point", bank, "--loop", loop, "--near", asked, "--json", "-")
            assert (ran.code, ran.err) == (0, "")
            assert self.strict(ran.out)["point"] == "here"
        for more in ((), ("--json", "-")):
            ran = project.run("point", bank, "--loop", loop, "--id", "nowhere", *more)
            assert (ran.code, ran.err) == (1, "")
        assert self.strict(ran.out)["at"] == {"speed": None, "mass": None}

    def test_outputs_that_would_overwrite_inputs(self, point, project):
        ran = point("--id", "good", "--json", project.folder / "loop.toml")
        assert ran.code == 2
        assert "is an input and an output" in ran.err
        criteria = project.folder / "criteria.toml"
        before = criteria.read_text()
        ran = point("--id", "good", "--criteria", criteria, "--json", criteria)
        assert ran.code == 2
        assert criteria.read_text() == before
