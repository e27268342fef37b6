"""The files in data/ and configs/: regenerated to the same numbers, and telling the story told."""

import csv
from itertools import product
from pathlib import Path

import h5py
import numpy as np
import pytest
from ferry_reckoning import DATA, LOOPS, close, delay_of, judge, read_gains
from scipy.ndimage import label

from ssaudit.ferry.__main__ import main
from ssaudit.ferry.export import IMMERSIONS, MASSES, REVISIONS, SPEEDS
from ssaudit.ferry.models import INPUTS, OUTPUTS, STATES, build_models

SAME = 1e-9  # relative; rounding differs between machines
CLEAR = 1e-6  # no point may lie nearer than this to a limit
MATRICES = ("A", "B", "C", "D")


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Everything written afresh, through the command that the documentation names."""
    folder = tmp_path_factory.mktemp("ferry")
    assert main([str(folder), "--configs", str(folder)]) == 0
    return folder


@pytest.mark.parametrize("letter", REVISIONS)
def test_exports_are_regenerated_to_the_same_numbers(made: Path, letter: str) -> None:
    name = f"ferry-{letter}.h5"
    with h5py.File(made / name) as new, h5py.File(DATA / name) as old:
        assert {k: np.array(v).tolist() for k, v in new.attrs.items()} == {
            k: np.array(v).tolist() for k, v in old.attrs.items()
        }
        assert new["ids"][:].tolist() == old["ids"][:].tolist()
        for key in (*MATRICES, "points/speed", "points/mass", "points/immersion"):
            np.testing.assert_allclose(new[key][:], old[key][:], rtol=SAME, atol=1e-9)


@pytest.mark.parametrize("name", ["ferry-gains-a.csv", "ferry-gains-c.csv"])
def test_gain_tables_are_regenerated_to_the_same_numbers(made: Path, name: str) -> None:
    new, old = (list(csv.reader((f / name).read_text().splitlines())) for f in (made, LOOPS))
    assert new[0] == old[0]
    np.testing.assert_allclose(
        np.array(new[1:], dtype=float), np.array(old[1:], dtype=float), rtol=1e-5
    )


def test_writing_twice_gives_the_same_bytes(made: Path, tmp_path: Path) -> None:
    main([str(tmp_path)])
    for name in (*(f"ferry-{letter}.h5" for letter in REVISIONS), "ferry-b-rounded.npz"):
        assert (tmp_path / name).read_bytes() == (made / name).read_bytes()


@pytest.mark.parametrize("letter", REVISIONS)
def test_layout_is_the_default_one(letter: str) -> None:
    path = DATA / f"ferry-{letter}.h5"
    assert path.stat().st_size < 400_000
    with h5py.File(path) as file:
        assert tuple(file.attrs["states"]) == STATES
        assert tuple(file.attrs["inputs"]) == INPUTS
        assert tuple(file.attrs["outputs"]) == OUTPUTS
        assert file.attrs["dt"] == 0
        assert "digits" not in file.attrs
        rows = len(file["ids"])
        assert [file[m].shape for m in MATRICES] == [
            (rows, 9, 9),
            (rows, 9, 2),
            (rows, 4, 9),
            (rows, 4, 2),
        ]
        units = {name: column.attrs["units"] for name, column in file["points"].items()}
    assert units == {"speed": "m/s", "mass": "t", "immersion": "m"}


def test_b_and_c_share_the_plant() -> None:
    with h5py.File(DATA / "ferry-b.h5") as b, h5py.File(DATA / "ferry-c.h5") as c:
        np.testing.assert_array_equal(b["A"][:], c["A"][:])
        differs = (b["B"][:] != c["B"][:]).any(axis=(1, 2))
        assert b["ids"][:][differs].tolist() == [b"v16-m115-h1.6"]


COUNTS = {  # void, lost, short, ok: the figures that data/README.md tells
    ("a", "a"): (6, 0, 10, 336),
    ("b", "a"): (6, 43, 129, 174),
    ("c", "c"): (5, 0, 6, 341),
    ("a", "a-undelayed"): (6, 0, 0, 346),
    ("b", "a-undelayed"): (6, 30, 123, 193),
}


@pytest.mark.parametrize(("revision", "loop"), COUNTS)
def test_verdicts_are_those_told(revision: str, loop: str) -> None:
    outcome = judge(revision, loop)
    ok = ~(outcome.void | outcome.lost | outcome.short)
    counts = [int(v.sum()) for v in (outcome.void, outcome.lost, outcome.short, ok)]
    assert tuple(counts) == COUNTS[revision, loop]
    assert outcome.nearest > CLEAR


def test_b_loses_one_connected_region_at_heavy_mass_and_high_speed() -> None:
    outcome = judge("b", "a")
    shape = len(SPEEDS), len(MASSES), len(IMMERSIONS)
    lost = outcome.lost[: np.prod(shape)].reshape(shape)
    assert label(lost)[1] == 1
    speed, mass, _ = np.nonzero(lost)
    assert min(np.array(SPEEDS)[speed]) == 17.0
    assert min(np.array(MASSES)[mass]) == 120.0
    assert set(np.array(SPEEDS)[speed[np.array(MASSES)[mass] == 120.0]]) == {24.0}
    worst = int(outcome.max_real.argmax())
    assert outcome.ids[worst] == "v24-m125-h1.4"
    assert outcome.max_real[worst] == pytest.approx(0.3112, abs=1e-4)


@pytest.mark.parametrize(("revision", "low", "high"), [("a", 0.0083, 2.17), ("c", 0.0913, 2.09)])
def test_one_factor_on_all_gains_has_the_range_told(revision: str, low: float, high: float) -> None:
    # The ends told are rounded; 1 % beyond either of them some point is lost, 1 % within none.
    points = np.array(list(product(SPEEDS, MASSES, IMMERSIONS)))
    models = build_models(REVISIONS[revision].ferry, *points.T)
    K = read_gains(LOOPS / f"ferry-gains-{revision}.csv", points[:, :2])
    expected = {0.99 * low: True, 1.01 * low: False, 0.99 * high: False, 1.01 * high: True}
    for factor, loses in expected.items():
        closed = close(models.A, models.B, factor * K, delay_of(revision))
        assert (np.linalg.eigvals(closed).real.max() >= 0) == loses, factor


def test_it_is_the_tank_that_loses_the_region() -> None:
    # Control: with revision A's plant the same gains lose nothing, and C's gains mend B's plant.
    assert not judge("a", "a").lost.any()
    assert not judge("c", "c").lost.any()
    assert judge("b", "c").lost.sum() == 0


@pytest.mark.parametrize(
    ("rows", "columns", "expected"),
    [
        (("heave_rate", "pitch_rate"), ("flap_aft",), 61),
        (("pitch_rate",), ("flap_aft",), 42),
        (("heave_rate", "pitch_rate"), ("flap_fore",), 0),
        (("heave_rate", "pitch_rate"), ("heave", "heave_rate", "pitch", "pitch_rate"), 20),
        (("height_filtered",), ("pitch",), 0),
        ((), (), 0),
    ],
)
def test_aft_flap_lever_is_the_main_cause(
    rows: tuple[str, ...], columns: tuple[str, ...], expected: int
) -> None:
    # Entries of B's plant put into A's, one kind at a time, over all 350 points.
    points = np.array(list(product(SPEEDS, MASSES, IMMERSIONS)))
    before, after = (build_models(REVISIONS[r].ferry, *points.T) for r in ("a", "b"))
    A = before.A.copy()
    for row, column in product(rows, columns):
        place = STATES.index(row), STATES.index(column)
        A[:, *place] = after.A[:, *place]
    K = read_gains(LOOPS / "ferry-gains-a.csv", points[:, :2])
    closed = close(A, before.B, K, delay_of("a"))
    lost = np.linalg.eigvals(closed).real.max(axis=1) >= 0
    assert lost.sum() == expected


def test_pade_model_of_the_delay_is_all_pass_and_late() -> None:
    # The closed matrix of one integrator behind the delay has poles where s P(s) + k = 0, with
    # the quotient of Padé written out: an independent way to the same polynomial.
    delay, gain = delay_of("a"), 3.0
    one = np.ones((1, 1, 1))
    found = np.sort_complex(np.linalg.eigvals(close(0 * one, one, gain * one, delay))[0])
    square, linear = delay**2 / 12, delay / 2
    top, bottom = [square, -linear, 1.0], [square, linear, 1.0]
    whole = np.polyadd(np.polymul(bottom, [1.0, 0.0]), np.multiply(gain, top))
    np.testing.assert_allclose(found, np.sort_complex(np.roots(whole)), rtol=1e-10)
    s = 5.5j  # rad/s, where the ferry's loops cross over
    assert np.polyval(top, s) / np.polyval(bottom, s) == pytest.approx(np.exp(-s * delay), abs=1e-9)
    assert delay == 0.01


def test_damage_is_where_it_is_told() -> None:
    for letter, revision in REVISIONS.items():
        damage = revision.damage
        with h5py.File(DATA / f"ferry-{letter}.h5") as file:
            ids = file["ids"][:].astype(str).tolist()
            A, B, C = file["A"][:], file["B"][:], file["C"][:]
            places = np.stack([file[f"points/{n}"][:] for n in ("speed", "mass", "immersion")], 1)
        assert {ids[i] for i in np.unique(np.nonzero(np.isnan(A))[0])} == {damage.nan}
        infinite = {ids[i] for i in np.unique(np.nonzero(np.isinf(B))[0])}
        assert infinite == ({damage.infinite} if damage.infinite else set())
        assert np.isfinite(C).all()
        first, second = (i for i, name in enumerate(ids) if name == damage.repeated_id)
        assert not np.array_equal(A[first], A[second])
        assert places[second, 2] == pytest.approx(places[first, 2] + 0.1)
        again, rerun = ids.index(damage.rerun), ids.index(f"{damage.rerun}-rerun")
        np.testing.assert_array_equal(places[again], places[rerun])
        assert not np.array_equal(A[again], A[rerun])
