"""The intake report: what it says is right, suspects are flagged and kept, it fits a screen."""

import io
import json

import intake_writers as writers
import numpy as np
import pytest
from rich.console import Console
from rich.text import Text

from ssaudit.bank_arrays import build_bank
from ssaudit.bank_file import read_bank
from ssaudit.intake.envelope import describe_coordinates, find_grid, levels
from ssaudit.intake.ingest import ingest
from ssaudit.intake.orientation import BY_LABELS, BY_SHAPES, looks_turned, weigh
from ssaudit.intake.survey import checksums, code_sizes
from ssaudit.report.intake_text import _wrapped, intake_text

RNG = np.random.default_rng(51)


def smooth(speed, mass):
    """Models that vary smoothly over a grid: the first states are heave and its rate."""
    A = np.zeros((speed.size, 3, 3))
    A[:, 0, 1] = 1.0
    A[:, 1, 0], A[:, 1, 1] = -0.4 * speed, -0.1 * speed
    A[:, 1, 2] = 0.02 * speed**2 / mass * 100
    A[:, 2, 2] = -5.0
    return A


@pytest.fixture
def content():
    speed, mass = (a.ravel() for a in np.meshgrid(np.arange(5.0, 25.0), np.arange(80.0, 121, 10)))
    return {
        "A": smooth(speed, mass),
        "B": np.tile([[0.0, 0], [0, 0], [5, 0]], (speed.size, 1, 1)),
        "C": np.tile([[1.0, 0, 0], [0, 0, 0]], (speed.size, 1, 1)),
        "states": np.array(["heave", "heave_rate", "flap"]),
        "inputs": np.array(["command", "spare"]),
        "outputs": np.array(["height", "dead"]),
        "at_speed": speed,
        "at_mass": mass,
        "units_speed": "m/s",
    }


@pytest.fixture
def report(tmp_path):
    def reporter(**content):
        np.savez(tmp_path / "a.npz", **content)
        return ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5").report

    return reporter


def test_a_clean_export(report, content):
    found = report(**content)
    assert (found.files, found.points, found.usable, found.void) == (1, 100, 100, {})
    speed, mass = found.coordinates
    assert (speed.name, speed.unit, speed.least, speed.greatest) == ("speed", "m/s", 5.0, 24.0)
    assert (speed.distinct, speed.least_step, speed.greatest_step) == (20, 1.0, 1.0)
    assert (mass.distinct, mass.least_step) == (5, 10.0)
    assert (found.grid.places, found.grid.holes) == (100, 0)
    (section,) = found.sections
    entries = {e.matrix: (e.zero, e.constant) for e in section.entries}
    # A: heave row 1 constant, flap pole constant, three vary; B and C never change.
    assert entries == {"A": (4, 2), "B": (5, 1), "C": (5, 1)}
    assert section.orientation.says == "as read"
    assert section.orientation.why == "d(heave)/dt = heave_rate"
    suspects = found.suspects
    assert (suspects.jumps, suspects.close, suspects.alike) == (0, 0, 0)
    assert suspects.jumps_examined
    assert found.notes == (
        "input spare drives no state at any point",
        "output dead shows no state at any point",
    )


def test_the_report_is_in_the_bank(report, content, tmp_path):
    found = report(**content)
    with read_bank(tmp_path / "bank.h5") as bank:
        assert bank.intake == json.loads(json.dumps(found.to_json()))
        assert bank.intake["sections"][0]["states"] == ["heave", "heave_rate", "flap"]


def test_void_points_are_counted_by_reason(report, content):
    content["A"][3, 0, 0] = content["A"][7, 1, 2] = np.nan
    content["B"][9, 2, 1] = np.inf
    found = report(**content)
    assert found.void == {"an entry of A is NaN": 2, "an entry of B is infinite": 1}
    assert found.usable == 97


@pytest.mark.parametrize(("point", "factor"), [(42, 1000.0), (42, 0.001), (0, 1000.0)])
def test_an_entry_that_jumps_is_flagged_and_not_removed(report, content, point, factor):
    content["A"][point, 1, 2] *= factor
    found = report(**content)
    assert found.usable == 100
    jumps = found.suspects.jump_examples
    if point == 0:
        # A corner of the grid has no neighbours on both sides, and is not judged.
        assert found.suspects.jumps == 0
        return
    assert found.suspects.jumps == 1
    assert (jumps[0].point, jumps[0].entry) == ("43", "A[heave_rate, flap]")
    assert jumps[0].value == content["A"][point, 1, 2]
    assert 0.25 < jumps[0].factor / factor < 4


def test_passing_through_zero_and_steps_are_no_jumps(report, content):
    speed, mass = content["at_speed"], content["at_mass"]
    content["A"][:, 1, 2] = (speed - 14.001) * 10
    content["A"][:, 1, 1] = np.where(speed > 15, 1000.0, 1.0)
    # A ridge along one coordinate is no jump either: neighbours along it are as large.
    content["A"][:, 1, 0] = np.where(mass == 100, 1000.0, 1.0)
    assert report(**content).suspects.jumps == 0


def test_holes_in_the_grid(report, content):
    kept = np.ones(100, dtype=bool)
    kept[[5, 50, 99]] = False
    for name in ("A", "B", "C", "at_speed", "at_mass"):
        content[name] = content[name][kept]
    grid = report(**content).grid
    assert (grid.places, grid.holes) == (100, 3)
    assert {tuple(sorted(hole.items())) for hole in grid.examples} == {
        (("mass", 80.0), ("speed", 10.0)),
        (("mass", 100.0), ("speed", 15.0)),
        (("mass", 120.0), ("speed", 24.0)),
    }


def test_scattered_points_are_no_grid():
    points = build_bank(
        np.ones((200, 1, 1)),
        revision="R",
        coordinates={n: (RNG.uniform(size=200), "") for n in ("speed", "mass")},
    ).points
    assert find_grid(points) is None
    assert describe_coordinates(points)[0].distinct == 200


def test_values_that_differ_by_rounding_are_one():
    assert levels(np.array([0.1 + 0.2, 0.3, 0.5, 0.7])).tolist() == [0.3, 0.5, 0.7]
    assert levels(np.array([np.nan, 1.0, np.inf])).tolist() == [1.0]
    assert levels(np.array([1e308, -1e308])).tolist() == [-1e308, 1e308]


def test_points_that_nearly_coincide_and_points_that_are_alike(report, content):
    content["at_speed"][1] = content["at_speed"][0] + 1e-6
    content["at_mass"][1] = content["at_mass"][0]
    content["A"][30] = content["A"][60]
    content["A"][31] = content["A"][60]
    found = report(**content).suspects
    assert (found.close, found.alike) == (2, 3)
    assert (found.close_examples[0].first, found.close_examples[0].second) == ("1", "2")
    assert {found.alike_examples[0].first, found.alike_examples[0].second} <= {"31", "32", "61"}


def test_checksums_tell_models_apart_to_the_bit():
    A = RNG.standard_normal((50, 4, 4))
    again = A.copy()
    again[7, 2, 1] = np.nextafter(again[7, 2, 1], 9)
    differ = checksums({"A": A}) != checksums({"A": again})
    assert np.flatnonzero(differ).tolist() == [7]
    # Entries that change places give another sum.
    turned = checksums({"A": A.transpose(0, 2, 1)})
    assert np.all(turned != checksums({"A": A}))


def test_sizes_are_binary_exponents_with_a_sign():
    values = RNG.standard_normal(1000) * 10.0 ** RNG.integers(-15, 15, 1000)
    codes = code_sizes(values.reshape(-1, 1, 1)).ravel().astype(int)
    expected = (np.frexp(np.abs(values))[1] - 1 + 64) * np.sign(values)
    np.testing.assert_array_equal(codes, expected)
    extremes = np.array([0.0, -0.0, 1e-300, 1e300, -1e300, np.inf]).reshape(-1, 1, 1)
    assert code_sizes(extremes).ravel().tolist() == [0, 0, 0, 127, -127, 127]


def test_a_transposed_export_is_noticed(report, content):
    content["A"] = content["A"].transpose(0, 2, 1)
    found = report(**content)
    assert found.sections[0].orientation.says == "transposed"
    assert any("matrices look transposed" in note for note in found.notes)


def test_weighing_of_evidence():
    A = RNG.standard_normal((3, 3))
    varying = np.zeros((3, 3), dtype=bool)
    names = ("x", "y", "z")
    assert weigh(names, A, varying, "", "").says == "cannot tell"
    assert weigh(names, A, varying, BY_SHAPES, "B (3x1)").says == "as read"
    assert weigh(names, A, varying, BY_SHAPES, "").says == "cannot tell"
    assert weigh(names, A, varying, BY_LABELS, "").says == "as read"
    # Rows of an integrator chain.
    chain = A.copy()
    chain[0], chain[1] = [0, 1, 0], [0, 0, 1]
    constant = np.zeros((3, 3), dtype=bool)
    constant[:2] = True
    assert weigh(names, chain, constant, "", "").says == "as read"
    assert weigh(names, chain.T, constant.T, "", "").says == "transposed"
    assert weigh(names, chain.T, constant.T, BY_LABELS, "").says == "cannot tell"
    # Names outweigh structure.
    assert weigh(("y", "y_rate", "z"), chain, constant, "", "").why == "d(y)/dt = y_rate"


def test_one_file_of_many_that_is_transposed(tmp_path):
    for k in range(6):
        A = np.array([[0, 1.0, 0], [-4 - k, -0.4, 0.3], [0, 0, -5]])
        np.savez(tmp_path / f"p{k}.npz", A=A.T if k == 4 else A)
    found = ingest([tmp_path], revision="R", bank=tmp_path / "bank.h5").report
    assert any(
        note == "A of 1 point looks transposed against the others, first in p4.npz"
        for note in found.notes
    )
    usual = np.array([[0, 1], [1, 1]]) > 0
    assert not looks_turned(usual, usual)


@pytest.mark.parametrize("count", [1, 3, 300])
def test_the_screen_is_short(tmp_path, count):
    folder = tmp_path / "x"
    folder.mkdir()
    layout = tmp_path / "layout.toml"
    layout.write_text(writers.hdf5_axis(folder, writers.Models(count)))
    lines = screen(ingest([folder], revision="R", bank=tmp_path / "bank.h5", layout=layout))
    assert lines[0].startswith(f"revision R  {count} point")
    assert len(lines) <= 40


def screen(intake):
    console = Console(width=100, record=True, markup=False, highlight=False, quiet=False,
                      file=open("/dev/null", "w"))  # noqa: SIM115  # fmt: skip
    with console.file:
        console.print(intake_text(intake))
        lines = console.export_text().splitlines()
    assert all(len(line) <= 100 for line in lines)
    return lines


def test_the_worst_of_exports_still_fits_the_screen(tmp_path):
    rng = np.random.default_rng(3)
    for k in range(12):
        n = 2 + k % 6
        A = rng.standard_normal((40, n, n)) * 10.0 ** rng.integers(-9, 9, (40, n, n))
        A[k % 5 :: 7, 0, 0] = np.nan
        A[1::9, -1, 0] = np.inf
        columns = {f"at_c{j}\x1b[2J": rng.integers(0, 9, 40) * 1.0 for j in range(9)}
        words = {f"at_t{j}": rng.integers(0, 30, 40).astype(str) for j in range(5)}
        ids = np.array([f"{k}-{i % 38}" for i in range(40)])
        B = np.zeros((40, n, 9))
        np.savez(tmp_path / f"f{k}.npz", A=A, B=B, ids=ids, **columns, **words)
    intake = ingest([tmp_path], revision="R" * 80, bank=tmp_path / "bank.h5")
    lines = screen(intake)
    assert len(lines) <= 40
    assert not any("\x1b" in line for line in lines)
    assert any("other sections" in line for line in lines)


def lines_at(intake, width):
    screen = io.StringIO()
    Console(file=screen, width=width, markup=False, highlight=False).print(intake_text(intake))
    return screen.getvalue().splitlines()


@pytest.mark.parametrize("width", [60, 80, 100, 120])
def test_lines_are_broken_between_words_and_not_padded(tmp_path, content, width):
    names = [f"long_name_of_state_{k}" for k in range(3)]
    content["states"] = np.array(names)
    content["A"][42, 1, 2] *= 1000.0
    np.savez(tmp_path / "a.npz", **content)
    intake = ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5")
    lines = lines_at(intake, width)
    assert all(line == line.rstrip() and len(line) <= width for line in lines)
    assert len(lines) <= 40
    # Nothing is lost on the way: what was broken reads on below.
    text = " ".join(" ".join(lines).split())
    jump = intake.report.suspects.jump_examples[0]
    for words in (*names, f"{jump.value:.4g}"[:5], "times greater than at its neighbours",
                  "5.000 to 24.00 m/s, 20 values in steps of 1.000"):  # fmt: skip
        assert words in text
    # Continuation lines stand below their column.
    at = next(k for k, line in enumerate(lines) if line.startswith("models"))
    assert all(line.startswith(" " * 11) for line in lines[at + 1 : at + 4])


def test_what_is_left_out_shows_an_ellipsis_behind_a_whole_word():
    console = Console(width=40, file=io.StringIO())
    words = [f"word{k}" for k in range(100)]
    shown = _wrapped(Text(" ".join(words)), console, 30, 2)
    assert len(shown) == 2
    text = " ".join(line.plain for line in shown)
    assert text.endswith(" …")
    kept = text.split()[:-1]
    assert kept == words[: len(kept)]
    assert all(line.cell_len <= 30 for line in shown)
    (cut,) = _wrapped(Text("x" * 50), console, 30, 1)
    assert cut.plain == "x" * 28 + " …"


def test_no_further_points_coincide_where_some_are_void_for_it(report, content, tmp_path):
    np.savez(tmp_path / "a.npz", **content)
    clean = ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5")
    assert any(line.endswith("no points coincide") for line in lines_at(clean, 100))
    content["at_speed"][1], content["at_mass"][1] = content["at_speed"][0], content["at_mass"][0]
    np.savez(tmp_path / "a.npz", **content)
    twice = ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5")
    assert any(line.endswith("no further points coincide") for line in lines_at(twice, 100))


def test_one_of_a_kind_is_not_called_many(tmp_path):
    A = RNG.standard_normal((1, 1, 1))
    np.savez(tmp_path / "a.npz", A=A, B=A, digits=1)
    intake = ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5")
    text = "\n".join(lines_at(intake, 100))
    assert "1 point: 1 state, 1 input, 0 outputs; continuous; 1 digit (stated)" in text
    assert "from 1 file" in text


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (RNG.uniform(size=5000), "5000 values, scattered"),
        (RNG.uniform(size=400) ** 3, "400 values, scattered"),
        (np.arange(5000.0), "5000 values in steps of 1.000"),
        (np.array([1.0, 10, 100, 1000]), "4 values in steps of 9.000 to 900.0"),
        (np.array([80.0, 90, 100, 120]), "4 values in steps of 10.00 to 20.00"),
    ],
)
def test_scattered_values_are_called_so(tmp_path, values, words):
    np.savez(tmp_path / "a.npz", A=RNG.standard_normal((len(values), 1, 1)), at_v=values)
    intake = ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5")
    assert any(line.endswith(words) for line in lines_at(intake, 100))
