"""The files in data/ and configs/: regenerated to the same numbers, and telling the story told."""

import csv
import tomllib
from collections import Counter
from dataclasses import dataclass
from itertools import product
from pathlib import Path

import h5py
import numpy as np
import pytest
from scipy.interpolate import RegularGridInterpolator
from scipy.ndimage import label

from ssaudit.ferry.__main__ import main
from ssaudit.ferry.export import IMMERSIONS, MASSES, REVISIONS, SPEEDS
from ssaudit.ferry.models import INPUTS, OUTPUTS, STATES, build_models

ROOT = Path(__file__).parents[2]
DATA, LOOPS = ROOT / "data", ROOT / "configs" / "loops"
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
    for letter in REVISIONS:
        name = f"ferry-{letter}.h5"
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


@dataclass(frozen=True)
class Outcome:
    """Verdicts of one revision by this file's own reckoning, and how near a limit any point is."""

    ids: np.ndarray
    void: np.ndarray
    lost: np.ndarray
    short: np.ndarray
    max_real: np.ndarray
    nearest: float


def read_gains(path: Path, points: np.ndarray) -> np.ndarray:
    """Gains at speeds and masses, interpolated by scipy."""
    with path.open(newline="") as file:
        rows = list(csv.DictReader(file))
    grid = [sorted({float(row[name]) for row in rows}) for name in ("speed", "mass")]
    values = np.array([[[float(r[f"K:{i}:{s}"]) for s in STATES] for i in INPUTS] for r in rows])
    table = values.reshape(len(grid[0]), len(grid[1]), len(INPUTS), len(STATES))
    return np.asarray(RegularGridInterpolator(grid, table)(points))


def judge(revision: str, gains: str) -> Outcome:
    """Audit one demo export from its files, without the product's own audit."""
    with h5py.File(DATA / f"ferry-{revision}.h5") as file:
        A, B, ids = file["A"][:], file["B"][:], file["ids"][:].astype(str)
        points = np.stack([file[f"points/{n}"][:] for n in ("speed", "mass", "immersion")], axis=1)
    K = read_gains(LOOPS / f"ferry-gains-{gains}.csv", points[:, :2])
    void = ~(np.isfinite(A).all(axis=(1, 2)) & np.isfinite(B).all(axis=(1, 2)))
    places = [tuple(p) for p in points.round(9)]
    by_id, by_place = Counter(ids.tolist()), Counter(places)
    for row, place in enumerate(places):
        void[row] |= by_id[str(ids[row])] > 1 or by_place[place] > 1
    poles = np.full(A.shape[:2], -1.0 + 0j)
    poles[~void] = np.linalg.eigvals(A[~void] - B[~void] @ K[~void])
    max_real = poles.real.max(axis=1)
    lost, gaps = ~void & (max_real >= 0), [np.abs(max_real).min()]
    short = np.zeros(len(ids), dtype=bool)
    requirements = tomllib.loads((ROOT / "configs/criteria/ferry.toml").read_text())["require"]
    for need in requirements:
        low, high = need.get("frequency", (0.0, np.inf))
        inside = (np.abs(poles) >= low) & (np.abs(poles) <= high)
        speed = need.get("where", {}).get("speed", (0.0, np.inf))
        applies = ~void & (points[:, 0] >= speed[0]) & (points[:, 0] <= speed[1])
        value = {"damping_ratio": -poles.real / np.abs(poles), "real": poles.real}[need["quantity"]]
        margin = value - need["at_least"] if "at_least" in need else need["at_most"] - value
        margin = np.where(inside, margin, np.inf).min(axis=1)
        short |= applies & (margin < 0)
        gaps.append(np.abs(margin[applies]).min())
        gaps += [np.abs(np.abs(poles[~void]) - edge).min() for edge in (low, high) if edge]
    return Outcome(ids, void, lost, short & ~lost, max_real, float(min(gaps)))


COUNTS = {  # void, lost, short, ok: the figures that data/README.md tells
    ("a", "a"): (6, 0, 13, 333),
    ("b", "a"): (6, 47, 136, 163),
    ("c", "c"): (5, 0, 5, 342),
}


@pytest.mark.parametrize(("revision", "gains"), COUNTS)
def test_verdicts_are_those_told(revision: str, gains: str) -> None:
    outcome = judge(revision, gains)
    ok = ~(outcome.void | outcome.lost | outcome.short)
    counts = [int(v.sum()) for v in (outcome.void, outcome.lost, outcome.short, ok)]
    assert tuple(counts) == COUNTS[revision, gains]
    assert outcome.nearest > CLEAR


def test_b_loses_one_connected_region_at_heavy_mass_and_high_speed() -> None:
    outcome = judge("b", "a")
    shape = len(SPEEDS), len(MASSES), len(IMMERSIONS)
    lost = outcome.lost[: np.prod(shape)].reshape(shape)
    assert label(lost)[1] == 1
    speed, mass, _ = np.nonzero(lost)
    assert min(np.array(SPEEDS)[speed]) == 18.0
    assert min(np.array(MASSES)[mass]) == 120.0
    worst = int(outcome.max_real.argmax())
    assert outcome.ids[worst] == "v24-m125-h1.0"
    assert outcome.max_real[worst] == pytest.approx(0.4083, abs=1e-4)


def test_it_is_the_tank_that_loses_the_region() -> None:
    # Control: with revision A's plant the same gains lose nothing, and C's gains mend B's plant.
    assert not judge("a", "a").lost.any()
    assert not judge("c", "c").lost.any()
    assert judge("b", "c").lost.sum() == 0


@pytest.mark.parametrize(
    ("rows", "columns", "expected"),
    [
        (("heave_rate", "pitch_rate"), ("flap_fore", "flap_aft"), 86),
        (("heave_rate", "pitch_rate"), ("heave", "heave_rate", "pitch", "pitch_rate"), 1),
        (("height_filtered",), ("pitch",), 0),
        ((), (), 0),
    ],
)
def test_flap_levers_are_the_cause(
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
    lost = np.linalg.eigvals(A - before.B @ K).real.max(axis=1) >= 0
    assert lost.sum() == expected


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
