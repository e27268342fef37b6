"""Stable inside or only from outside: both answers, through every way out of the audit."""

import json

import numpy as np
import pandas as pd
import pytest

import ssaudit
from ssaudit.loop import parts
from ssaudit.outside import closed_outputs, seen_from_outside

HIDDEN = ", hidden: no input and output together show it"
CLOSED = ssaudit.Loop("", None, "none")
# Modes -1 and 2; an input of the first alone, an output of the second alone, both of both.
A = np.diag([-1.0, 2.0])
FIRST, SECOND, BOTH = np.array([[1.0, 0.0]]), np.array([[0.0, 1.0]]), np.array([[1.0, 1.0]])


def row(A, B=None, C=None, D=None, *, loop=CLOSED, criteria=None, depth="modes", **bank):
    given = (None if M is None else [M] for M in (A, B, C, D))
    built = ssaudit.build_bank(*given, revision="A", **bank)
    found = ssaudit.audit(built, loop, criteria or ssaudit.Criteria(), depth=depth)
    return dict(found.points.iloc[0])


def answers(found):
    return [None if found[f"stable_{end}"] is pd.NA else bool(found[f"stable_{end}"])
            for end in ("inside", "outside")]  # fmt: skip


@pytest.mark.parametrize(
    ("reach", "show", "outside"),
    [(FIRST, BOTH, True), (BOTH, FIRST, True), (FIRST, FIRST, True), (FIRST, SECOND, True),
     (BOTH, BOTH, False), (SECOND, BOTH, False), (BOTH, SECOND, False), (SECOND, SECOND, False)],
)  # fmt: skip
def test_unstable_mode_that_nothing_shows_is_lost_and_said_to_be_hidden(reach, show, outside):
    found = row(A, reach.T, show, np.zeros((1, 1)))
    assert found["verdict"] == "lost"
    assert answers(found) == [False, outside]
    assert found["reason"] == "not stable: 1 pole right of the axis" + HIDDEN * outside


def test_several_inputs_and_outputs_hide_it_only_together():
    # The first input reaches it and the second does not; one of them is enough.
    B, C = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[1.0, 0.0], [1.0, 1.0]])
    assert answers(row(A, B, C)) == [False, False]
    assert answers(row(A, B[:, :1], C)) == [False, True]
    assert answers(row(A, B, C[:1])) == [False, True]


def test_in_mixed_states_and_odd_units():
    rng = np.random.default_rng(0)
    for outside in (True, False):
        turn = rng.standard_normal((4, 4))
        units = np.diag(2.0 ** rng.integers(-30, 30, 4))
        back = np.linalg.inv(turn) @ np.linalg.inv(units)
        B = rng.standard_normal((4, 2))
        B[1] *= not outside
        found = row(
            units @ turn @ np.diag([-1.0, 2.0, -3.0, -0.5]) @ back,
            units @ turn @ B,
            rng.standard_normal((2, 4)) @ back,
        )
        assert answers(found) == [False, outside]


def test_stable_is_stable_from_outside():
    for B, C in ((BOTH.T, BOTH), (FIRST.T, FIRST)):
        found = row(-np.eye(2), B, C)
        assert found["verdict"] == "ok"
        assert answers(found) == [True, True]


def test_a_short_point_is_stable():
    criteria = ssaudit.Criteria((ssaudit.Requirement("decay", "real", at_most=-3.0),))
    found = row(-np.eye(2), BOTH.T, BOTH, criteria=criteria)
    assert found["verdict"] == "short"
    assert answers(found) == [True, True]


def test_doubt_about_a_requirement_is_no_doubt_about_stability():
    criteria = ssaudit.Criteria((ssaudit.Requirement("decay", "real", at_most=-1.0),))
    found = row(np.diag([-1.0, -2.0]), BOTH.T, BOTH, criteria=criteria)
    assert (found["verdict"], found["doubt"]) == ("doubt", "decay")
    assert answers(found) == [True, True]


def test_unknown_where_the_point_is_void_or_in_doubt():
    void = row(A * np.nan, BOTH.T, BOTH)
    assert void["verdict"] == "void"
    assert answers(void) == [None, None]
    known = row(np.diag([-1.0, -0.004]), BOTH.T, BOTH)
    assert known["verdict"] == "ok"  # the control
    unsure = ssaudit.Loop("", None, "none", uncertain=(uncertain(0.005),))
    doubt = row(np.diag([-1.0, -0.004]), BOTH.T, BOTH, loop=unsure)
    assert (doubt["verdict"], doubt["doubt"]) == ("doubt", "stability")
    assert answers(doubt) == [None, None]


def uncertain(size):
    from ssaudit.loop.uncertainty import Uncertain

    return Uncertain("A", absolute=size)


@pytest.mark.parametrize("missing", ["B", "C", "both"])
def test_unknown_from_outside_without_inputs_or_outputs(missing):
    B = None if missing in ("B", "both") else FIRST.T
    C = None if missing in ("C", "both") else FIRST
    found = row(A, B, C)
    assert answers(found) == [False, None]
    assert "hidden" not in found["reason"]
    assert answers(row(-np.eye(2), B, C)) == [True, True]


def test_state_feedback_that_does_not_reach_the_mode():
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[3.0, 5.0]]))
    found = row(A, FIRST.T, BOTH, loop=loop)
    assert answers(found) == [False, True]
    assert found["reason"].endswith(HIDDEN)
    assert answers(row(A, FIRST.T, loop=loop)) == [False, None]  # no C: nothing to tell by
    reached = row(
        A, SECOND.T, BOTH, loop=ssaudit.Loop("negative", ssaudit.ConstantGain([[0, 1.0]]))
    )
    assert answers(reached) == [False, False]
    assert reached["max_real"] == pytest.approx(1.0)


def test_feedthrough_may_cancel_what_the_states_show():
    """y = x₂ + u with u = -x₂ is 0 in the closed loop, whatever the unstable state does."""
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.0, 1.0]]))
    B, C = SECOND.T, SECOND
    assert answers(row(A, B, C, [[1.0]], loop=loop)) == [False, True]
    assert answers(row(A, B, C, [[0.5]], loop=loop)) == [False, False]
    through = {"C": C[None], "D": np.full((1, 1, 1), 1.0)}
    K = np.array([[[0.0, 1.0]]])
    assert (closed_outputs(through, K, -1, "states") == 0).all()
    assert closed_outputs(through, K, 1, "states").tolist() == [[[0.0, 2.0]]]


def test_closed_outputs_of_output_feedback():
    """y = C x + D u, u = σ K y: y = (I - σ D K)⁻¹ C x."""
    rng = np.random.default_rng(1)
    C, D, K = (
        rng.standard_normal((3, 2, 4)),
        rng.standard_normal((3, 2, 3)),
        0.3 * np.ones((1, 3, 2)),
    )
    for sign in (-1, 1):
        expected = np.linalg.solve(np.eye(2) - sign * D @ K, C)
        found = closed_outputs({"C": C, "D": D}, K, sign, "outputs")
        np.testing.assert_allclose(found, expected, rtol=1e-12)
        other = closed_outputs({"C": C, "D": D}, K, -sign, "outputs")
        assert not np.allclose(other, expected, rtol=1e-3)


@pytest.mark.parametrize(("show", "outside"), [(FIRST, True), (BOTH, False)])
def test_with_parts_in_the_path(show, outside):
    loop = ssaudit.Loop(
        "negative", ssaudit.ConstantGain([[0.2]]), "outputs",
        parts=(parts.first_order(0.1).at("servo", input="u1"),),
    )  # fmt: skip
    found = row(A, BOTH.T, show, [[0.0]], loop=loop)
    assert found["verdict"] == "lost"
    assert answers(found) == [False, outside]


def test_sampled_models():
    found = row(np.diag([0.5, 1.5]), FIRST.T, BOTH, dt=0.1)
    assert found["reason"] == "not stable: 1 pole outside the unit circle" + HIDDEN
    assert answers(found) == [False, True]
    assert answers(row(np.diag([0.5, 1.5]), BOTH.T, BOTH, dt=0.1)) == [False, False]
    assert answers(row(np.diag([0.5, -0.9]), BOTH.T, BOTH, dt=0.1)) == [True, True]


def test_hidden_pole_on_the_axis():
    found = row(np.diag([-1.0, 0.0]), FIRST.T, BOTH)
    assert found["verdict"] == "lost"
    assert answers(found) == [False, True]
    assert "hidden" in found["reason"]
    assert answers(row(np.diag([-1.0, 0.0]), BOTH.T, BOTH)) == [False, False]


def test_repeated_pole_of_which_one_is_hidden_is_not_said_to_be_hidden():
    found = row(np.diag([-1.0, 2.0, 2.0]), [[1.0], [1.0], [0.0]], [[1.0, 1.0, 1.0]])
    assert found["verdict"] == "lost"
    assert answers(found)[1] is not True
    assert "hidden" not in found["reason"]


def test_at_depth_poles_it_is_not_looked_for():
    found = row(A, FIRST.T, BOTH, depth="poles")
    assert answers(found) == [False, None]
    assert "hidden" not in found["reason"]
    assert answers(row(-np.eye(2), FIRST.T, BOTH, depth="poles")) == [True, True]


def test_nothing_to_ask():
    assert len(seen_from_outside(np.zeros((0, 2, 2)), {}, None, sign=-1, feed="none",
                                 entry_error=None, dt=0.0)) == 0  # fmt: skip


def test_ways_out_of_the_audit(export, command, tmp_path):
    """Truth values with nulls in Parquet, in pandas, in JSON and in CSV."""
    states = [A, A, -np.eye(2), A * np.nan]
    reach = [FIRST.T, BOTH.T, BOTH.T, BOTH.T]
    ids = ["hidden", "seen", "good", "void"]
    source = export("e.h5", {"A": states, "B": reach, "C": [BOTH] * 4, "D": np.zeros((4, 1, 1))},
                    ids=ids)  # fmt: skip
    bank, loop, criteria = (tmp_path / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
    loop.write_text('feed = "none"\n')
    criteria.write_text("")
    command("ingest", source, "--revision", "A", "--bank", bank)
    table, ledger = tmp_path / "points.csv", tmp_path / "ledger"
    ran = command("audit", bank, "--loop", loop, "--criteria", criteria, "--ledger", ledger,
                  "--csv", table, "--json", "-")  # fmt: skip
    expected = {
        "hidden": [False, True], "seen": [False, False], "good": [True, True], "void": [None, None],
    }  # fmt: skip
    for point in json.loads(ran.out)["worst"]:
        assert [point["stable_inside"], point["stable_outside"]] == expected[point["point"]]
    assert {p["point"] for p in json.loads(ran.out)["worst"]} == {"hidden", "seen", "void"}
    import pyarrow.parquet as pq

    (run,) = ledger.glob("run=*")
    parquet = pq.read_table(run / "points.parquet")
    assert str(parquet.schema.field("stable_outside").type) == "bool"
    by_library = ssaudit.audit(ssaudit.read_bank(bank), CLOSED, ssaudit.Criteria()).points
    assert str(by_library["stable_inside"].dtype) == "boolean"
    written = pd.read_csv(table)
    for place, point in enumerate(ids):
        found = parquet.slice(place, 1).to_pylist()[0]
        assert [found["stable_inside"], found["stable_outside"]] == expected[point]
        assert answers(by_library.iloc[place]) == expected[point]
        texts = [str(written[f"stable_{end}"][place]) for end in ("inside", "outside")]
        assert texts == [str(x) if x is not None else "nan" for x in expected[point]]
    shown = command("point", bank, "--loop", loop, "--id", "hidden")
    assert "hidden: no input and output together show it" in shown.out
