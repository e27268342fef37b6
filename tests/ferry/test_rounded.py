"""The rounded export: regenerated, in the default layout, and rounded as it says."""

import re
from pathlib import Path

import numpy as np
import pytest
from ferry_reckoning import DATA

import ssaudit
from ssaudit.ferry.models import INPUTS, OUTPUTS, STATES, build_models
from ssaudit.ferry.rounded import DIGITS, build_rounded, round_to_digits, write_rounded
from ssaudit.ferry.vessel import STERN_TANK, Ferry

MATRICES = ("A", "B", "C", "D")


@pytest.fixture(scope="module")
def stored() -> dict[str, np.ndarray]:
    """The file in data/, nothing unpickled."""
    with np.load(DATA / "ferry-b-rounded.npz", allow_pickle=False) as file:
        return dict(file)


def test_regenerated_to_the_same_numbers(stored: dict[str, np.ndarray], tmp_path: Path) -> None:
    with np.load(write_rounded(tmp_path / "again.npz"), allow_pickle=False) as file:
        assert sorted(file) == sorted(stored)
        for name in file:
            if file[name].dtype.kind == "f":
                # A last digit may fall the other way where another machine rounds otherwise.
                np.testing.assert_allclose(file[name], stored[name], rtol=10.0 ** (1 - DIGITS))
                assert (file[name] != stored[name]).mean() < 1e-3
            else:
                np.testing.assert_array_equal(file[name], stored[name])


def test_layout_is_the_default_one(stored: dict[str, np.ndarray]) -> None:
    assert (DATA / "ferry-b-rounded.npz").stat().st_size < 50_000
    assert tuple(stored["states"]) == STATES
    assert tuple(stored["inputs"]) == INPUTS
    assert tuple(stored["outputs"]) == OUTPUTS
    assert (stored["dt"], stored["digits"]) == (0, 4)
    assert [stored[name].shape for name in MATRICES] == [
        (273, 9, 9),
        (273, 9, 2),
        (273, 4, 9),
        (273, 4, 2),
    ]
    units = {name: str(stored[f"units_{name}"]) for name in ("speed", "mass", "immersion")}
    assert units == {"speed": "m/s", "mass": "t", "immersion": "m"}
    assert len(set(stored["ids"])) == 273


def test_every_entry_is_within_half_a_unit_of_its_last_digit(
    stored: dict[str, np.ndarray],
) -> None:
    point = (stored[f"at_{name}"] for name in ("speed", "mass", "immersion"))
    exact = build_models(Ferry(STERN_TANK), *point)
    for name in MATRICES:
        true, rounded = getattr(exact, name), stored[name]
        decade = np.floor(np.log10(np.where(rounded == 0, 1.0, np.abs(rounded))))
        half_unit = np.where(rounded == 0, 0.0, 0.5 * 10.0 ** (decade - 3))
        assert (np.abs(true - rounded) <= half_unit * (1 + 1e-9)).all()
    # Control: most entries that vary were changed, so that the digits matter.
    varying = np.ptp(exact.A, axis=0) > 0
    assert (stored["A"] != exact.A)[:, varying].mean() > 0.95


def test_rounding_is_that_of_decimals() -> None:
    M = np.array([[0.0, 123449.0], [-9.9996, 2.5e-7]])
    np.testing.assert_array_equal(round_to_digits(M, 4), [[0.0, 123400.0], [-10.0, 2.5e-7]])
    ids, models = build_rounded()
    assert ids[-1] == "v24.0-m125-h1.4"
    np.testing.assert_array_equal(models.A, round_to_digits(models.A, DIGITS))


def test_the_documents_state_the_radii_that_are_found(tmp_path):
    """The table of doubts in data/README.md, and the verdict table of README.md."""
    root = Path(__file__).parents[2]
    ssaudit.ingest([root / "data/ferry-b-rounded.npz"], revision="B", bank=tmp_path / "b.h5")
    loop = ssaudit.read_loop(root / "configs/loops/ferry-a-undelayed.toml")
    criteria = ssaudit.read_criteria(root / "configs/criteria/ferry.toml")
    with ssaudit.read_bank(tmp_path / "b.h5") as bank:
        points = ssaudit.audit(bank, loop, criteria).points.set_index("point")
    told = (root / "data/README.md").read_text(encoding="utf-8")
    rows = re.findall(r"\| `(v[\w.-]+)` \| (-?[\d.]+) ± ([\d.]+) \|", told)
    assert len(rows) == (points["doubt"] == "stability").sum() == 4
    for name, real, radius in rows:
        assert float(real) == pytest.approx(points.loc[name, "real"], abs=6e-5)
        # Rounded up, as the reasons are.
        found = points.loc[name, "radius"]
        assert found <= float(radius) <= 1.1 * found
    name, real, radius = rows[0]
    readme = (root / "README.md").read_text(encoding="utf-8")
    assert f"`{name}`: real part {real} ± {radius} 1/s" in readme
