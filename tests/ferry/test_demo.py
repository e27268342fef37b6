"""The demo as a user runs it: the pipeline, its ledger, and doubt that a proof settles."""

import json
import shutil
from dataclasses import dataclass
from itertools import product
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet
import pytest
from ferry_reckoning import DATA, LOOPS, ROOT, close, delay_of, read_gains

from ssaudit.cli import main
from ssaudit.ferry.export import IMMERSIONS, MASSES, SPEEDS
from ssaudit.ferry.models import build_models
from ssaudit.ferry.vessel import STERN_TANK, Ferry

COUNTS = {  # ok, short, lost, doubt, void: the figures that data/README.md tells
    "A": (336, 10, 0, 0, 6),
    "B": (174, 129, 43, 0, 6),
    "C": (341, 6, 0, 0, 5),
}
VERDICTS = ("ok", "short", "lost", "doubt", "void")
GRID = {"speed": SPEEDS, "mass": MASSES, "immersion": IMMERSIONS}


@dataclass(frozen=True)
class Demo:
    """A copy of the demo's folders, and what its pipeline left in it."""

    folder: Path
    code: int

    @property
    def ledger(self) -> Path:
        return self.folder / "out" / "ferry" / "ledger"

    def points(self, revision: str) -> pd.DataFrame:
        """Points table of the one run of a revision, read with pyarrow alone."""
        runs = {path.parent: json.loads(path.read_text()) for path in self.ledger.rglob("run.json")}
        (run,) = [path for path, about in runs.items() if about["revision"] == revision]
        return pyarrow.parquet.read_table(run / "points.parquet").to_pandas()


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Demo:
    folder = tmp_path_factory.mktemp("demo")
    (folder / "data").mkdir()
    for path in DATA.glob("ferry-*"):
        shutil.copy(path, folder / "data")
    for name in ("configs", "pipelines"):
        shutil.copytree(ROOT / name, folder / name)
    return Demo(folder, main(["run", str(folder / "pipelines" / "ferry.toml")]))


def audit_rounded(demo: Demo, *more: str) -> pd.DataFrame:
    """Points table of an audit of the rounded export, by point."""
    bank, table = demo.folder / "rounded.h5", demo.folder / "rounded.csv"
    if not bank.exists():
        source = demo.folder / "data" / "ferry-b-rounded.npz"
        assert main(["ingest", str(source), "--revision", "B-rounded", "--bank", str(bank)]) == 0
    loop = demo.folder / "configs" / "loops" / "ferry-a-undelayed.toml"
    criteria = demo.folder / "configs" / "criteria" / "ferry.toml"
    named = ["--loop", loop, "--criteria", criteria]
    arguments = ["audit", bank, *named, "--csv", table, *more]
    assert main([str(argument) for argument in arguments]) == 1
    return pd.read_csv(table, keep_default_na=False).set_index("point")


@pytest.fixture(scope="module")
def unproved(demo: Demo) -> pd.DataFrame:
    return audit_rounded(demo)


@pytest.fixture(scope="module")
def proved(demo: Demo) -> pd.DataFrame:
    return audit_rounded(demo, "--prove", "doubt")


def test_run_finds_what_the_data_readme_tells(demo: Demo) -> None:
    assert demo.code == 1
    for revision, told in COUNTS.items():
        verdicts = demo.points(revision)["verdict"].value_counts()
        assert tuple(int(verdicts.get(verdict, 0)) for verdict in VERDICTS) == told, revision


def neighbours_reached(places: set[tuple[int, ...]]) -> set[tuple[int, ...]]:
    """Places reached from the first by steps to the next value of one coordinate."""
    waiting = [min(places)]
    reached = set(waiting)
    while waiting:
        place = waiting.pop()
        for axis, step in product(range(len(place)), (-1, 1)):
            beside = (*place[:axis], place[axis] + step, *place[axis + 1 :])
            if beside in places - reached:
                reached.add(beside)
                waiting.append(beside)
    return reached


def test_lost_points_of_b_are_one_connected_region(demo: Demo) -> None:
    points = demo.points("B")
    lost = points[points["verdict"] == "lost"]
    places = {
        tuple(values.index(row[f"at_{name}"]) for name, values in GRID.items())
        for _, row in lost.iterrows()
    }
    assert len(places) == COUNTS["B"][2]
    assert neighbours_reached(places) == places
    # Control: without the points at 23 m/s the rest does not hang together.
    rest = {place for place in places if GRID["speed"][place[0]] != 23.0}
    assert neighbours_reached(rest) != rest


def test_worst_point_of_b_is_the_one_told(demo: Demo) -> None:
    points = demo.points("B").set_index("point")
    worst = points.loc[points["max_real"].idxmax()]
    assert worst.name == "v24-m125-h1.4"
    assert (worst["max_real"], worst["imag"]) == pytest.approx((0.3112, 4.701), abs=1e-3)


def drift(demo: Demo, before: str, after: str, code: int) -> dict[str, dict[str, object]]:
    """Changed points of a drift by name, once its exit code is as expected."""
    target = demo.folder / f"{before}-{after}.json"
    words = ["drift", str(demo.ledger), "--from", before, "--to", after, "--json", str(target)]
    assert main(words) == code
    return {change["point"]: change for change in json.loads(target.read_text())["changed"]}


def test_drift_shows_what_b_loses_and_c_mends(demo: Demo) -> None:
    lost = set(demo.points("B").query("verdict == 'lost'")["point"])
    losing, mending = drift(demo, "A", "B", code=1), drift(demo, "B", "C", code=0)
    assert {p for p, change in losing.items() if change["verdict_to"] == "lost"} == lost
    assert {p for p, change in mending.items() if change["verdict_from"] == "lost"} == lost
    assert {mending[p]["verdict_to"] for p in lost} == {"ok", "short"}
    assert {mending[p]["change"] for p in lost} == {"better"}


IN_DOUBT = {"v18.5-m125-h1.4", "v21.0-m123-h1.4", "v21.5-m123-h1.4", "v23.0-m122-h1.4"}


def test_rounding_leaves_a_few_points_in_doubt_about_stability(unproved: pd.DataFrame) -> None:
    verdicts = unproved["verdict"].value_counts()
    assert set(verdicts.index) == {"ok", "short", "lost", "doubt"}
    assert verdicts["doubt"] <= 8
    about = unproved[unproved["doubt"] == "stability"]
    assert set(about.index) == IN_DOUBT
    assert about["reason"].str.contains("reaches 0").all()


def test_proof_settles_doubt(unproved: pd.DataFrame, proved: pd.DataFrame) -> None:
    stable, unstable = "v21.0-m123-h1.4", "v18.5-m125-h1.4"
    assert proved.loc[stable, ["verdict", "proof"]].tolist() == ["short", "stable"]
    assert proved.loc[unstable, ["verdict", "proof"]].tolist() == ["lost", "unstable"]
    assert proved.loc["v23.0-m122-h1.4", ["verdict", "proof"]].tolist() == ["doubt", "open"]
    sure = unproved["verdict"] != "doubt"
    assert (proved["verdict"][sure] == unproved["verdict"][sure]).all()


def unrounded_real(point: pd.Series) -> float:
    """Largest real part [1/s] of the closed loop at a point before its model was rounded."""
    place = np.array([[point[f"at_{name}"] for name in GRID]])
    model = build_models(Ferry(STERN_TANK), *place.T)
    K = read_gains(LOOPS / "ferry-gains-a.csv", place[:, :2])
    assert delay_of("a-undelayed") == 0
    return float(np.linalg.eigvals(close(model.A, model.B, K, 0.0)).real.max())


def test_no_verdict_contradicts_the_model_before_rounding(
    unproved: pd.DataFrame, proved: pd.DataFrame
) -> None:
    for table in (unproved, proved):
        for _, point in table[table["doubt"] != "stability"].iterrows():
            assert (unrounded_real(point) >= 0) == (point["verdict"] == "lost"), point.name


def worst_corners(name: str) -> tuple[float, float]:
    """Largest real part at the corners of the rounding box furthest to the left and right.

    To first order: the entries' derivatives of the critical pole give the signs.
    """
    with np.load(DATA / "ferry-b-rounded.npz", allow_pickle=False) as file:
        row = file["ids"].tolist().index(name)
        A, B = file["A"][row], file["B"][row]
        place = np.array([[file["at_speed"][row], file["at_mass"][row]]])
    K = read_gains(LOOPS / "ferry-gains-a.csv", place)[0]
    poles, right = np.linalg.eig(A - B @ K)
    critical = poles.real.argmax()
    left = np.linalg.inv(right)[critical]
    slopes = np.outer(left, right[:, critical]).real, -np.outer(left, K @ right[:, critical]).real

    def half_unit(M: np.ndarray) -> np.ndarray:
        size = np.where(M == 0, 1.0, np.abs(M))
        return np.where(M == 0, 0.0, 0.5 * 10.0 ** (np.floor(np.log10(size)) - 3))

    def real(side: float) -> float:
        corner = [
            M + side * np.sign(slope) * half_unit(M)
            for M, slope in zip((A, B), slopes, strict=True)
        ]
        return float(np.linalg.eigvals(corner[0] - corner[1] @ K).real.max())

    return real(-1.0), real(1.0)


def test_proofs_hold_at_the_corners_that_matter_most() -> None:
    assert max(worst_corners("v21.0-m123-h1.4")) < 0
    assert min(worst_corners("v18.5-m125-h1.4")) > 0
    # The one that stays open does so with reason: stable and unstable models round to it.
    left, right = worst_corners("v23.0-m122-h1.4")
    assert left < 0 < right


def test_full_digits_leave_no_doubt(demo: Demo) -> None:
    # Control: it is the rounding that makes the doubt, not the method.
    points = demo.points("B")
    assert (points["verdict"] != "doubt").all()
    near = points["max_real"].abs().min()
    assert near < 0.003
