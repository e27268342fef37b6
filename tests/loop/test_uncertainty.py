"""Stated uncertainty: which entries it is about, and that poles stay within what follows."""

from itertools import product

import numpy as np
import pandas as pd
import pytest

import ssaudit
from ssaudit.errors import LoopError
from ssaudit.loop import parts
from ssaudit.loop.files import read_loop
from ssaudit.loop.uncertainty import Uncertain, misfit_of, stated_errors

STATES, INPUTS, OUTPUTS = ("a", "b", "c"), ("flap", "rudder"), ("h", "r")
CLOSED = ("", None, "none")


def section(points=1):
    rng = np.random.default_rng(0)
    shapes = [(3, 3), (3, 2), (2, 3), (2, 2)]
    stacks = [rng.standard_normal((points, *shape)) for shape in shapes]
    names = {"states": STATES, "inputs": INPUTS, "outputs": OUTPUTS}
    return ssaudit.build_bank(*stacks, revision="A", **names).sections[0]


def entries(*statements, feed="outputs"):
    """Errors as stated about the matrices of two points and a gain of [1 2; 3 4] (or of 2x3)."""
    some = section(2)
    signals = OUTPUTS if feed == "outputs" else STATES
    K = np.arange(1.0, 1 + 2 * len(signals)).reshape(1, 2, -1)
    matrices = some.read(0, 2)
    return stated_errors(statements, some, signals, {**matrices, "K": K}), {**matrices, "K": K}


@pytest.mark.parametrize("name", ["A", "B", "C", "D", "K"])
@pytest.mark.parametrize(("absolute", "relative"), [(0.1, 0.0), (0.0, 0.2), (0.1, 0.2)])
def test_whole_matrices(name, absolute, relative):
    found, matrices = entries(Uncertain(name, absolute=absolute, relative=relative))
    assert list(found) == [name]
    np.testing.assert_allclose(found[name], absolute + relative * np.abs(matrices[name]))


@pytest.mark.parametrize(
    ("name", "row", "column", "place"),
    [
        ("A", "b", "", np.s_[:, 1, :]), ("A", "", "c", np.s_[:, :, 2]),
        ("A", "c", "a", np.s_[:, 2, 0]), ("B", "a", "rudder", np.s_[:, 0, 1]),
        ("B", "", "flap", np.s_[:, :, 0]), ("C", "r", "b", np.s_[:, 1, 1]),
        ("D", "h", "rudder", np.s_[:, 0, 1]), ("K", "rudder", "h", np.s_[:, 1, 0]),
        ("K", "flap", "", np.s_[:, 0, :]), ("K", "", "r", np.s_[:, :, 1]),
    ],
)  # fmt: skip
def test_rows_columns_and_entries_are_those_named(name, row, column, place):
    found, matrices = entries(Uncertain(name, row, column, absolute=0.5, relative=0.1))
    expected = np.zeros(matrices[name].shape)
    expected[place] = 0.5 + 0.1 * np.abs(matrices[name][place])
    np.testing.assert_allclose(found[name], expected, rtol=1e-15)


def test_gains_on_states_are_named_by_states():
    found, matrices = entries(Uncertain("K", "rudder", "c", relative=0.5), feed="states")
    assert np.argwhere(found["K"]).tolist() == [[0, 1, 2]]
    assert found["K"][0, 1, 2] == 0.5 * matrices["K"][0, 1, 2]


def test_statements_add_up():
    found, matrices = entries(
        Uncertain("A", absolute=1.0), Uncertain("A", "a", "a", relative=0.5), Uncertain("B", "a",
        absolute=2.0)
    )  # fmt: skip
    assert set(found) == {"A", "B"}
    np.testing.assert_allclose(found["A"][:, 0, 0], 1.0 + 0.5 * np.abs(matrices["A"][:, 0, 0]))
    assert (found["A"][:, 1:, 1:] == 1.0).all()
    assert (found["B"][:, 1:] == 0).all()


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: Uncertain("Q", absolute=1.0), "unknown matrix 'Q'"),
        (lambda: Uncertain("A"), "absolute or relative, above 0"),
        (lambda: Uncertain("A", absolute=-1.0), "above 0"),
        (lambda: Uncertain("A", absolute=1.0, relative=-1.0), "above 0"),
    ],
)
def test_what_states_nothing_is_refused(build, message):
    with pytest.raises(LoopError, match=message):
        build()


@pytest.mark.parametrize(
    ("statement", "message"),
    [
        (Uncertain("A", "bb", absolute=1.0), "names 'bb', not in A: did you mean b"),
        (Uncertain("A", "flap", absolute=1.0), "names 'flap', not in A"),
        (Uncertain("B", "a", "ruder", absolute=1.0), "did you mean rudder"),
        (Uncertain("K", "rudder", "a", absolute=1.0), "names 'a', not in K"),
        (Uncertain("E", "a", "h", absolute=1.0), "names 'h', not in E"),
    ],
)
def test_names_that_the_models_do_not_have(statement, message):
    assert message in misfit_of(statement, section(), OUTPUTS)
    bank = ssaudit.build_bank(
        *(section().read(0, 1)[name] for name in "ABCD"),
        revision="A", states=STATES, inputs=INPUTS, outputs=OUTPUTS,
    )  # fmt: skip
    loop = ssaudit.Loop(
        "negative", ssaudit.ConstantGain(np.eye(2)), "outputs", uncertain=(statement,)
    )
    with pytest.raises(LoopError, match="uncertain"):
        ssaudit.audit(bank, loop, ssaudit.Criteria())


FILE = 'sign = "negative"\n[gain]\nmatrix = [[1.0]]\n[[uncertain]]\n'


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('matrix = "A"\n', "[[uncertain]] 1: an uncertainty needs absolute or relative"),
        ("absolute = 1.0\n", "[[uncertain]] 1: matrix is missing"),
        ('matrix = "A"\nrelative = "5%"\n', "not a finite number"),
        ('matrix = "A"\nrow = 3\nrelative = 0.1\n', "row is 3, not text"),
        ('matrix = "A"\nrelativ = 0.1\n', "did you mean relative?"),
        ('matrix = "a"\nrelative = 0.1\n', "unknown matrix 'a'"),
    ],
)
def test_mistakes_in_the_file_are_named(tmp_path, text, message):
    (tmp_path / "loop.toml").write_text(FILE + text)
    with pytest.raises(LoopError) as caught:
        read_loop(tmp_path / "loop.toml")
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)


def verdict(A, *statements, B=None, loop=None, **bank):
    built = ssaudit.build_bank([A], None if B is None else [B], revision="A", **bank)
    closed = ssaudit.Loop(*CLOSED, uncertain=statements) if loop is None else loop
    return dict(ssaudit.audit(built, closed, ssaudit.Criteria()).points.iloc[0])


@pytest.mark.parametrize(
    ("statement", "size"),
    [
        ({"matrix": "A"}, "absolute"), ({"matrix": "A", "row": "x1"}, "absolute"),
        ({"matrix": "A", "column": "x1"}, "absolute"),
        ({"matrix": "A", "row": "x1", "column": "x1"}, "absolute"),
        ({"matrix": "A", "row": "x1", "column": "x1"}, "relative"),
        ({"matrix": "A"}, "relative"),
    ],
)  # fmt: skip
def test_verdict_turns_to_doubt_where_the_uncertainty_reaches_the_axis(statement, size):
    A = np.diag([-0.5, -400.0])
    reach = 0.5 if size == "absolute" else 1.0
    within = verdict(A, Uncertain(**statement, **{size: 0.98 * reach}))
    beyond = verdict(A, Uncertain(**statement, **{size: 1.02 * reach}))
    assert (within["verdict"], beyond["verdict"]) == ("ok", "doubt")
    assert beyond["doubt"] == "stability"
    assert within["radius"] == pytest.approx(0.49, rel=0.02)
    # As much about the entry of the other state leaves the verdict alone.
    elsewhere = Uncertain("A", "x2", "x2", absolute=0.51)
    assert verdict(A, elsewhere)["verdict"] == "ok"


def test_uncertain_gains():
    def closed(relative):
        loop = ssaudit.Loop(
            "negative",
            ssaudit.ConstantGain([[3.0]]),
            uncertain=(Uncertain("K", relative=relative),),
        )
        return verdict([[1.0]], B=[[1.0]], loop=loop)

    # The pole is 1 - 3 (1 ± relative).
    assert closed(0.66)["verdict"] == "ok"
    assert closed(0.66)["radius"] == pytest.approx(1.98, rel=1e-12)
    assert closed(0.67)["verdict"] == "doubt"


def test_uncertain_gains_of_a_schedule_are_relative_to_what_it_commands():
    grid, K = (np.array([0.0, 1.0]),), np.array([[[2.0]], [[4.0]]])
    schedule = ssaudit.GainSchedule(("speed",), grid, K, ("u1",), ("x1",), "refuse")
    bank = ssaudit.build_bank(
        np.ones((3, 1, 1)), np.ones((3, 1, 1)), revision="A",
        coordinates={"speed": ([0.0, 0.5, 1.0], "m/s")},
    )  # fmt: skip
    loop = ssaudit.Loop("negative", schedule, uncertain=(Uncertain("K", relative=0.6),))
    found = ssaudit.audit(bank, loop, ssaudit.Criteria()).points
    np.testing.assert_allclose(found["radius"], [1.2, 1.8, 2.4], rtol=1e-12)
    assert list(found["verdict"]) == ["doubt", "ok", "ok"]


STATED = (
    Uncertain("A", absolute=0.02),
    Uncertain("A", "b", "c", relative=0.05),
    Uncertain("B", "", "rudder", relative=0.1),
    Uncertain("C", "h", absolute=0.02),
    Uncertain("D", absolute=0.01),
    Uncertain("K", "flap", "r", absolute=0.03),
)


@pytest.mark.parametrize("path", [(), (parts.first_order(0.1).at("lag", input="*"),)])
@pytest.mark.parametrize("sign", ["negative", "positive"])
def test_poles_of_changed_models_lie_within_the_radii(sign, path):
    rng = np.random.default_rng(3)
    A = rng.standard_normal((3, 3)) + np.diag([-3.0, -7.0, -12.0])
    B, C, D = (0.5 * rng.standard_normal(s) for s in ((3, 2), (2, 3), (2, 2)))
    K = 0.5 * rng.standard_normal((2, 2))
    names = {"states": STATES, "inputs": INPUTS, "outputs": OUTPUTS, "revision": "A"}

    def audited(matrices, gains, *statements):
        """Poles and radii of each of some models under its own gains, by rising real part."""
        draws = np.arange(len(gains), dtype=float)
        bank = ssaudit.build_bank(*matrices, coordinates={"draw": (draws, "")}, **names)
        if len(draws) > 1:
            gain = ssaudit.GainSchedule(("draw",), (draws,), gains, INPUTS, OUTPUTS, "refuse")
        else:
            gain = ssaudit.ConstantGain(gains[0])
        loop = ssaudit.Loop(sign, gain, "outputs", uncertain=statements, parts=path)
        modes = ssaudit.audit(bank, loop, ssaudit.Criteria()).modes
        return [
            (rows["real"].to_numpy() + 1j * rows["imag"].to_numpy(), rows["radius"].to_numpy())
            for _, rows in modes.groupby(modes["point"].astype(int))
        ]

    nominal = [M[np.newaxis] for M in (A, B, C, D)]
    ((poles, radius),) = audited(nominal, K[np.newaxis], *STATED)
    ((_, exact),) = audited(nominal, K[np.newaxis])
    assert exact.max() < 1e-12  # what is not stated is not assumed
    some = ssaudit.build_bank(*nominal, **names).sections[0]
    given = {**some.read(0, 1), "K": K[np.newaxis]}
    spread = stated_errors(STATED, some, OUTPUTS, given)
    moved = {
        name: M + spread[name] * rng.choice([-1, 1], (200, *M.shape[1:]))
        for name, M in given.items()
    }
    largest = 0.0
    for changed, _ in audited([moved[name] for name in "ABCD"], moved["K"]):
        gap = np.abs(poles[:, None] - changed[None]).min(axis=1)
        assert (gap <= radius).all()
        largest = max(largest, (gap / radius).max())
    assert largest > 0.3  # a third of these radii would not do


def test_mass_matrix(export, command, tmp_path):
    """Pole -1/(2 ± e): stated in the loop file, and found by the command."""
    source = export("e.h5", {"A": [[[-1.0]]], "B": [[[1.0]]], "E": [[[2.0]]]})
    bank, loop, criteria = (tmp_path / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
    criteria.write_text("")
    assert command("ingest", source, "--revision", "A", "--bank", bank).code == 0
    for size, code in ((0.0, 0), (0.4, 0), (2.5, 1)):
        stated = f'[[uncertain]]\nmatrix = "E"\nabsolute = {size}\n' if size else ""
        loop.write_text(f'sign = "negative"\n[gain]\nmatrix = [[0.0]]\n{stated}')
        ran = command("audit", bank, "--loop", loop, "--criteria", criteria, "--csv",
                      tmp_path / "points.csv")  # fmt: skip
        assert ran.code == code, ran.err
        (row,) = pd.read_csv(tmp_path / "points.csv").to_dict("records")
        if size == 0.4:
            assert 0.125 <= row["radius"] < 0.5  # the farthest is -1/1.6
        assert row["verdict"] == ("doubt" if code else "ok")


def test_corners_of_a_small_box_reach_the_verdict():
    """[[uncertain]] on two entries: doubt exactly where a corner of the box is not stable."""
    A = np.array([[-1.0, 0.8], [0.5, -1.0]])
    for size in (0.1, 0.3, 0.45, 0.6):
        stated = (Uncertain("A", "x1", "x2", size), Uncertain("A", "x2", "x1", size))
        corners = [
            np.linalg.eigvals(A + size * np.array([[0, p], [q, 0]])).real.max()
            for p, q in product((-1, 1), repeat=2)
        ]
        found = verdict(A, *stated)["verdict"]
        if max(corners) >= 0:
            assert found == "doubt"
        elif size <= 0.1:
            assert found == "ok"
    assert max(corners) >= 0  # the last size reaches
