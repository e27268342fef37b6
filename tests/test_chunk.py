"""Chunks of every kind of model, end to end: descriptor, sampled, mixed, poles on the axis."""

import json
from dataclasses import replace

import mpmath
import numpy as np
import pandas as pd
import pytest

import ssaudit
from ssaudit.bank import ModelBank, Points
from ssaudit.errors import LoopError
from ssaudit.loop import parts
from ssaudit.loop.assembly import Sampling

CLOSED = ssaudit.Loop("", None, "none")
NOTHING = ssaudit.Criteria()
DEPTHS = ("poles", "modes", "margins")


def with_mass(bank, E):
    """The same bank as descriptor models E x' = A x + B u."""
    (section,) = bank.sections
    mass = np.broadcast_to(np.asarray(E, dtype=float), (len(bank), *np.shape(E)[-2:])).copy()
    matrices = {**section.matrices, "E": mass}
    return replace(bank, sections=(replace(section, matrices=matrices),))


def joined(*banks):
    """One bank of the sections of several, with ids that tell them apart."""
    points = [bank.points for bank in banks]
    names = list(dict.fromkeys(name for p in points for name in p.coordinates))
    every = Points(
        np.concatenate([p.ids for p in points]),
        {name: np.concatenate([p.coordinates[name] for p in points]) for name in names},
        points[0].units,
        {},
        np.concatenate([p.void for p in points]),
    )
    return ModelBank("A", every, tuple(s for bank in banks for s in bank.sections))


def poles(found, point):
    modes = found.modes[found.modes["point"] == point]
    return np.sort_complex((modes["real"] + 1j * modes["imag"]).to_numpy())


# ---- descriptor models


def some_models(points=6, seed=2):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((points, 3, 3)) - np.linspace(0.5, 3, points)[:, None, None] * np.eye(3)
    B, C = rng.standard_normal((points, 3, 2)), rng.standard_normal((points, 2, 3))
    return A, B, C, 0.2 * rng.standard_normal((points, 2, 2))


@pytest.mark.parametrize("feed", ["states", "outputs"])
@pytest.mark.parametrize("depth", ["poles", "modes"])
def test_mass_of_one_is_the_explicit_model(feed, depth):
    K = 0.2 * np.ones((2, 3 if feed == "states" else 2))
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain(K), feed)
    bank = ssaudit.build_bank(*some_models(), revision="A")
    plain = ssaudit.audit(bank, loop, NOTHING, depth=depth)
    found = ssaudit.audit(with_mass(bank, np.eye(3)), loop, NOTHING, depth=depth)
    assert set(plain.points["verdict"]) == {"ok", "lost"}
    assert list(found.points["verdict"]) == list(plain.points["verdict"])
    assert (found.points["infinite_poles"] == 0).all()
    for point in plain.points["point"]:
        np.testing.assert_allclose(poles(found, point), poles(plain, point), rtol=1e-11)
    if depth == "modes":
        np.testing.assert_allclose(
            found.points["participation_1"], plain.points["participation_1"], rtol=1e-8
        )


def test_a_scaled_and_mixed_mass_is_divided_out():
    """E x' = (E A) x + (E B) u is x' = A x + B u, however E mixes the equations."""
    A, B, C, D = some_models()
    E = np.array([[2.0, 1.0, 0.0], [0.0, 1e-3, 5.0], [1.0, 0.0, 40.0]])
    loop = ssaudit.Loop("positive", ssaudit.ConstantGain(0.1 * np.ones((2, 2))), "outputs")
    plain = ssaudit.audit(ssaudit.build_bank(A, B, C, D, revision="A"), loop, NOTHING)
    bank = ssaudit.build_bank(E @ A, E @ B, C, D, revision="A")
    found = ssaudit.audit(with_mass(bank, E), loop, NOTHING)
    assert list(found.points["verdict"]) == list(plain.points["verdict"])
    for point in plain.points["point"]:
        np.testing.assert_allclose(poles(found, point), poles(plain, point), rtol=1e-9)
    # The control: without E these are other models.
    other = ssaudit.audit(bank, loop, NOTHING)
    assert not np.allclose(other.points["max_real"], plain.points["max_real"], rtol=1e-2)


LADDER = {
    # Voltage u, resistor, capacitor: C v' = i, 0 = u - v - R i; pole -1/(R C).
    "A": [[0.0, 1.0], [-1.0, -2.0]], "B": [[0.0], [1.0]], "E": [[0.5, 0.0], [0.0, 0.0]],
}  # fmt: skip


def descriptor_bank(export, command, tmp_path, models, **about):
    """Take an export with E in by the command."""
    stacks = {name: [m[name] for m in models] for name in models[0]}
    source = export("e.h5", stacks, **about)
    bank = tmp_path / "bank.h5"
    assert command("ingest", source, "--revision", "A", "--bank", bank).code == 0
    return bank


def test_ladder_with_an_algebraic_equation(export, command, tmp_path):
    bank = descriptor_bank(export, command, tmp_path, [LADDER], states=["v", "i"], inputs=["u"])
    loop, criteria = tmp_path / "loop.toml", tmp_path / "criteria.toml"
    criteria.write_text("")
    # Open, u = 0: -1/(R C) = -1. With u = -k i the resistance is R + k.
    for k, expected in ((0.0, -1.0), (2.0, -0.5), (-2.5, 4.0)):
        loop.write_text(f'sign = "negative"\n[gain]\nmatrix = [[0.0, {k}]]\n')
        ran = command("audit", bank, "--loop", loop, "--criteria", criteria, "--ledger",
                      tmp_path / f"ledger{k}")  # fmt: skip
        assert ran.code == (0 if expected < 0 else 1), ran.err
        (run,) = (tmp_path / f"ledger{k}").glob("run=*")
        (row,) = pd.read_parquet(run / "points.parquet").to_dict("records")
        assert row["infinite_poles"] == 1
        assert row["max_real"] == pytest.approx(expected, rel=1e-12)
        assert row["verdict"] == ("ok" if expected < 0 else "lost")
        assert len(pd.read_parquet(run / "modes.parquet")) == 1


def test_index_two_and_singular_pencils_are_void_with_the_reason():
    A = [np.array([[0.0, 1.0], [1.0, 0.0]]), np.array([[1.0, 0.0], [0.0, 0.0]]), -np.eye(2)]
    E = [np.diag([1.0, 0.0]), np.diag([1.0, 0.0]), np.eye(2)]
    bank = with_mass(ssaudit.build_bank(A, revision="A"), E)
    found = ssaudit.audit(bank, CLOSED, NOTHING)
    assert list(found.points["verdict"]) == ["void", "void", "ok"]
    assert found.points["reason"][0] == "the descriptor model has an index above one"
    assert found.points["reason"][1].startswith("the pencil (A, E) is singular")
    assert set(found.modes["point"]) == {"3"}
    assert found.summary.void == {reason: 1 for reason in found.points["reason"][:2]}


@pytest.mark.parametrize("side", ["input", "signal"])
def test_parts_on_a_descriptor_plant(side):
    """(R C s + 1)⁻¹ behind a servo lag, u = -k v: against the polynomial's roots by mpmath."""
    names = {"states": ["v", "i"], "inputs": ["u"], "outputs": ["voltage"]}
    bank = ssaudit.build_bank(
        [LADDER["A"]], [LADDER["B"]], [[[1.0, 0.0]]], [[[0.0]]], revision="A", **names
    )
    place = {"input": "u"} if side == "input" else {"signal": "voltage"}
    servo = parts.second_order(8.0, 0.4).at("servo", **place)
    for k in (2.0, 30.0):
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[k]]), "outputs", parts=(servo,))
        found = ssaudit.audit(with_mass(bank, LADDER["E"]), loop, NOTHING)
        # (s + 1)(s² + 6.4 s + 64) + 64 k, with R C = 1
        coefficients = [1, 7.4, 70.4, 64 + 64 * k]
        expected = [complex(root) for root in mpmath.polyroots(coefficients)]
        upper = np.sort_complex([root for root in expected if root.imag >= 0])
        np.testing.assert_allclose(poles(found, "1"), upper, rtol=1e-11)
        assert found.points["infinite_poles"][0] == 1
        lost = max(root.real for root in expected) > 0
        assert found.points["verdict"][0] == ("lost" if lost else "ok")
        assert lost == (k == 30.0)
        assert "servo.1" in set(", ".join(found.modes["top_states"]).split(", "))


def test_descriptor_models_have_no_margins_and_say_so():
    bank = with_mass(ssaudit.build_bank(*some_models(), revision="A"), np.eye(3))
    K = ssaudit.ConstantGain(0.2 * np.ones((2, 2)))
    loop = ssaudit.Loop("negative", K, "outputs")
    found = ssaudit.audit(bank, loop, NOTHING, depth="margins")
    assert set(found.points["verdict"]) == {"ok", "lost"}
    assert found.points["gain_margin_db"].isna().all()
    asked = ssaudit.Requirement("asked", "gain_margin_db", at_least=0.0)
    judged = ssaudit.audit(bank, loop, ssaudit.Criteria((asked,)), depth="margins").points
    # Not known is not met: none of them passes.
    assert set(judged["verdict"]) == {"doubt", "lost"}
    assert (judged["doubt"][judged["verdict"] == "doubt"] == "asked").all()


def test_descriptor_models_cannot_be_sampled():
    bank = with_mass(ssaudit.build_bank(*some_models(), revision="A"), np.eye(3))
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain(np.ones((2, 2))), "outputs",
                        sampling=Sampling(0.1))  # fmt: skip
    with pytest.raises(LoopError, match="descriptor models cannot be sampled"):
        ssaudit.audit(bank, loop, NOTHING)


# ---- sampled models


def sampled_row(z, dt=0.1, depth="modes"):
    blocks = [[[p.real, p.imag], [-p.imag, p.real]] if p.imag else [[p.real]]
              for p in map(complex, z)]  # fmt: skip
    n = sum(map(len, blocks))
    A, place = np.zeros((n, n)), 0
    for block in blocks:
        A[place : place + len(block), place : place + len(block)] = block
        place += len(block)
    found = ssaudit.audit(
        ssaudit.build_bank([A], revision="A", dt=dt), CLOSED, NOTHING, depth=depth
    )
    return found.points.iloc[0], found.modes


@pytest.mark.parametrize("depth", DEPTHS)
def test_sampled_modes_through_the_logarithm(depth):
    dt, z = 0.05, 0.9 * np.exp(0.4j)
    row, modes = sampled_row([z, 0.3], dt, depth)
    assert row["verdict"] == "ok"
    modes = modes.sort_values("imag")
    np.testing.assert_allclose(modes["modulus"], [0.3, 0.9], rtol=1e-12)
    s = mpmath.log(mpmath.mpc(z)) / dt
    assert modes["real"].to_numpy()[1] == pytest.approx(float(s.real), rel=1e-12)
    assert modes["imag"].to_numpy()[1] == pytest.approx(float(s.imag), rel=1e-12)
    assert modes["damping_ratio"].to_numpy()[1] == pytest.approx(float(-s.real / abs(s)), rel=1e-12)
    assert modes["natural_frequency"].to_numpy()[1] == pytest.approx(float(abs(s)), rel=1e-12)
    # The modulus decides: half a per mille on either side of the circle.
    assert sampled_row([0.9995], dt, depth)[0]["verdict"] == "ok"
    assert sampled_row([1.0005], dt, depth)[0]["verdict"] == "lost"
    assert sampled_row([-1.0005], dt, depth)[0]["verdict"] == "lost"


@pytest.mark.parametrize("depth", DEPTHS)
def test_poles_at_zero_and_on_the_negative_real_axis(depth):
    row, modes = sampled_row([0.0, -0.5, 0.25], 0.1, depth)
    assert row["verdict"] == "ok"
    modes = modes.sort_values("modulus", ignore_index=True)
    np.testing.assert_allclose(modes["modulus"], [0.0, 0.25, 0.5], rtol=1e-12)
    # z = 0 is gone after one sample; a negative z alternates, at half the sampling rate.
    assert modes["real"][0] == -np.inf
    assert modes["time_constant"][0] == 0.0
    assert modes["imag"][2] == pytest.approx(np.pi / 0.1, rel=1e-12)
    assert modes["real"][2] == pytest.approx(np.log(0.5) / 0.1, rel=1e-12)
    assert modes["imag"][1] == 0.0
    assert row["max_real"] == pytest.approx(np.log(0.5) / 0.1, rel=1e-12)


def test_sampled_poles_at_odd_places_in_json_and_parquet(project):
    z = np.diag([0.0, -0.5])
    bank = project.save(ssaudit.build_bank([z, np.diag([0.0, -1.5])], revision="A", dt=0.1,
                                           ids=["good", "bad"]),
                        project.folder / "bank.h5")  # fmt: skip
    (project.folder / "loop.toml").write_text('feed = "none"\n')
    (project.folder / "criteria.toml").write_text("")
    ran = project.audit(bank, "--ledger", project.ledger, "--json", "-", "--depth", "margins")
    assert ran.code == 1, ran.err

    def refuse(word):
        raise AssertionError(f"{word} is not JSON")

    (worst,) = json.loads(ran.out, parse_constant=refuse)["worst"]
    assert worst["point"] == "bad"
    assert worst["real"] == pytest.approx(np.log(1.5) / 0.1)
    assert worst["imag"] == pytest.approx(np.pi / 0.1)
    (run,) = project.ledger.glob("run=*")
    modes = pd.read_parquet(run / "modes.parquet")
    assert modes["modulus"].tolist() == pytest.approx([0.0, 0.5, 0.0, 1.5])


# ---- mixed banks


def test_sections_of_different_size_and_sampling_time():
    rng = np.random.default_rng(3)
    small = ssaudit.build_bank(
        -np.ones((3, 1, 1)), np.ones((3, 1, 1)), np.ones((3, 1, 1)), np.zeros((3, 1, 1)),
        revision="A", ids=["s1", "s2", "s3"],
    )  # fmt: skip
    A = rng.standard_normal((4, 3, 3)) / 6
    sampled = ssaudit.build_bank(
        A, np.ones((4, 3, 1)), np.ones((4, 1, 3)), np.zeros((4, 1, 1)),
        revision="A", ids=["d1", "d2", "d3", "d4"], dt=0.1,
    )  # fmt: skip
    lost = ssaudit.build_bank(
        [1.5 * np.eye(2)], np.zeros((1, 2, 1)), np.zeros((1, 1, 2)), np.zeros((1, 1, 1)),
        revision="A", ids=["l1"], dt=0.5,
    )  # fmt: skip
    mass = with_mass(ssaudit.build_bank(
        [LADDER["A"]], [LADDER["B"]], [[[1.0, 0.0]]], [[[0.0]]], revision="A", ids=["e1"]
    ), LADDER["E"])  # fmt: skip
    broken = ssaudit.build_bank(
        [[[np.nan]]], [[[1.0]]], [[[1.0]]], [[[0.0]]], revision="A", ids=["v1"], dt=0.2
    )
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.1]]), "outputs")
    banks = [small, sampled, lost, mass, broken]
    for depth in DEPTHS:
        whole = ssaudit.audit(joined(*banks), loop, NOTHING, depth=depth)
        assert list(whole.points["point"]) == [i for bank in banks for i in bank.points.ids]
        for bank in banks[:4]:
            alone = ssaudit.audit(bank, loop, NOTHING, depth=depth)
            for name in ("points", "modes", "loops"):
                one, other = getattr(alone, name), getattr(whole, name)
                if name == "loops" and not len(one):
                    continue
                other = other[other["point"].isin(bank.points.ids)].reset_index(drop=True)
                pd.testing.assert_frame_equal(one, other, check_dtype=False)
        assert whole.points["verdict"].tolist() == ["ok"] * 7 + ["lost", "ok", "void"]
        sizes = whole.modes.groupby("point")["modulus"].apply(lambda m: m.notna().all())
        assert sizes[["d1", "l1"]].all()
        assert not sizes[["s1", "e1"]].any()


def test_two_exports_make_one_bank_of_two_sections(export, command, tmp_path):
    first = export("first.h5", {"A": [[[-1.0]]], "B": [[[1.0]]]}, ids=["slow"], states=["x"])
    second = export(
        "second.h5", {"A": [np.diag([0.5, -0.2])], "B": [np.ones((2, 1))]}, ids=["quick"],
        states=["x", "y"], dt=0.1,
    )  # fmt: skip
    bank, loop, criteria = (tmp_path / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
    ran = command("ingest", first, second, "--revision", "A", "--bank", bank)
    assert ran.code == 0, ran.err
    loop.write_text(
        'sign = "negative"\n[gain]\nmatrix = [[0.1]]\ninputs = ["u1"]\nsignals = ["x"]\n'
        'unnamed = "zero"\n'
    )
    criteria.write_text("")
    for depth in DEPTHS:
        ledger = tmp_path / depth
        ran = command("audit", bank, "--loop", loop, "--criteria", criteria, "--depth", depth,
                      "--ledger", ledger)  # fmt: skip
        assert ran.code == 0, ran.out + ran.err
        (run,) = ledger.glob("run=*")
        points = pd.read_parquet(run / "points.parquet").set_index("point")
        assert points["max_real"]["slow"] == pytest.approx(-1.1)
        closed = np.diag([0.5, -0.2]) - np.outer([1, 1], [0.1, 0])
        z = max(np.abs(np.linalg.eigvals(closed)))
        assert points["max_real"]["quick"] == pytest.approx(np.log(z) / 0.1)
        if depth == "margins":
            loops = pd.read_parquet(run / "loops.parquet").groupby("point").size()
            assert loops.to_dict() == {"slow": 2, "quick": 2}
        shown = command("point", bank, "--loop", loop, "--id", "quick")
        assert shown.code == 0, shown.err


@pytest.mark.parametrize("first", ["void", "mass"])
def test_a_first_group_without_margins_has_the_columns_of_all(project, monkeypatch, first):
    """Tables are written group by group, and joined: what comes first must not set their order."""
    monkeypatch.setattr("ssaudit.run_writer.GROUP_POINTS", 1)
    monkeypatch.setattr("ssaudit.auditing.MARGIN_POINTS", 1)
    bank = ssaudit.build_bank(
        [[[np.nan]] if first == "void" else [[-1.0]], [[-1.0]]], np.ones((2, 1, 1)),
        np.ones((2, 1, 1)), np.zeros((2, 1, 1)), revision="A", ids=["first", "second"],
    )  # fmt: skip
    if first == "mass":
        (section,) = bank.sections
        halves = [
            replace(section, matrices={n: M[k : k + 1] for n, M in section.matrices.items()})
            for k in (0, 1)
        ]
        halves[0] = replace(halves[0], matrices={**halves[0].matrices, "E": np.ones((1, 1, 1))})
        bank = replace(bank, sections=tuple(halves))
    path = project.save(bank, project.folder / "bank.h5")
    (project.folder / "loop.toml").write_text(
        'sign = "negative"\nfeed = "outputs"\n[gain]\nmatrix = [[1.0]]\n'
    )
    (project.folder / "criteria.toml").write_text("")
    ran = project.audit(path, "--depth", "margins", "--ledger", project.ledger)
    assert ran.err == ""
    assert ran.code == (1 if first == "void" else 0)
    (run,) = project.ledger.glob("run=*")
    points = pd.read_parquet(run / "points.parquet").set_index("point")
    assert np.isnan(points["gain_factor_low"]["first"])
    assert points["gain_factor_low"]["second"] == pytest.approx(-1.0)


# ---- poles on the axis


def axis_row(A, neutral=(), depth="modes", dt=0.0, **about):
    bank = ssaudit.build_bank([A], revision="A", states=[f"s{i}" for i in range(len(A))], dt=dt)
    loop = about.get("loop", CLOSED)
    return dict(
        ssaudit.audit(bank, loop, ssaudit.Criteria((), neutral), depth=depth).points.iloc[0]
    )


DAMPED = np.array([[0.0, 1.0], [-2.0, -1.0]])


def grown(*rows):
    """The damped model with more states, each of which sums up what its row says."""
    n = 2 + len(rows)
    A = np.zeros((n, n))
    A[:2, :2] = DAMPED
    for i, row in enumerate(rows):
        A[2 + i, : len(row)] = row
    return A


@pytest.mark.parametrize("depth", DEPTHS)
class TestAxisPoles:
    def test_heading(self, depth):
        A = grown([0, 1])
        exempt, judged = axis_row(A, ("s2",), depth), axis_row(A, (), depth)
        assert exempt["verdict"] == "ok"
        assert exempt["max_real"] == pytest.approx(-0.5)
        assert judged["verdict"] == "lost"
        assert judged["max_real"] == 0.0

    def test_two_headings_beside_each_other(self, depth):
        A = grown([0, 1], [1, 0])
        assert axis_row(A, ("s2", "s3"), depth)["verdict"] == "ok"
        assert axis_row(A, ("s2",), depth)["verdict"] == "lost"

    def test_position_that_sums_up_a_heading_grows_as_t(self, depth):
        A = grown([0, 1], [0, 0, 5])
        found = axis_row(A, ("s2", "s3"), depth)
        assert found["verdict"] == "lost"
        assert "grows as t" in found["reason"]

    def test_double_integrator(self, depth):
        found = axis_row(np.array([[0.0, 1.0], [0.0, 0.0]]), (), depth)
        assert found["verdict"] == "lost"
        assert found["reason"] == "not stable: a repeated pole at 0, which grows as t"

    def test_undamped_oscillator(self, depth):
        found = axis_row(np.array([[0.0, 1.0], [-4.0, 0.0]]), (), depth)
        assert found["verdict"] == "lost"
        assert found["imag"] == pytest.approx(2.0)
        # Naming its states exempts nothing: each depends on the other.
        assert (
            axis_row(np.array([[0.0, 1.0], [-4.0, 0.0]]), ("s0", "s1"), depth)["verdict"] == "lost"
        )
        # The control: the least damping that binary numbers hold for it is stable.
        A = np.array([[0.0, 1.0], [-4.0, -1e-3]])
        assert axis_row(A, (), depth)["verdict"] == "ok"

    def test_sampled(self, depth):
        A = np.eye(3)
        A[:2, :2] = [[0.9, 0.1], [-0.1, 0.9]]
        A[2, 0] = 0.1
        assert axis_row(A, ("s2",), depth, dt=0.1)["verdict"] == "ok"
        assert axis_row(A, (), depth, dt=0.1)["verdict"] == "lost"
        double = np.array([[1.0, 0.1], [0.0, 1.0]])
        found = axis_row(double, (), depth, dt=0.1)
        assert found["verdict"] == "lost"
        assert found["reason"] == "not stable: a repeated pole at 1, which grows as t"


def test_heading_in_the_loop_counts_and_outside_it_does_not():
    A, B = grown([1, 0])[None], np.array([[[0.0], [1.0], [0.0]]])
    criteria = ssaudit.Criteria((), ("heading",))
    bank = ssaudit.build_bank(A, B, revision="A", states=["a", "b", "heading"])
    for gain, verdict in ((0.0, "ok"), (0.2, "ok"), (-0.2, "lost")):
        K = np.array([[0.1, 0.1, gain]])
        found = ssaudit.audit(bank, ssaudit.Loop("negative", ssaudit.ConstantGain(K)), criteria)
        assert list(found.points["verdict"]) == [verdict]
        counted = A[0] - B[0] @ K
        if gain == 0:
            counted = counted[:2, :2]
        expected = np.linalg.eigvals(counted)
        assert found.points["max_real"][0] == pytest.approx(expected.real.max(), rel=1e-12)
        assert len(found.modes) == (expected.imag >= 0).sum()
