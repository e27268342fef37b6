"""The bank's file: written whole or not at all, read back to the bit, refused when damaged."""

import os
from pathlib import Path

import h5py
import numpy as np
import pytest

from ssaudit.bank import Source
from ssaudit.bank_arrays import build_bank
from ssaudit.bank_file import read_bank
from ssaudit.bank_writer import BankWriter, Batch
from ssaudit.errors import BankError

RNG = np.random.default_rng(21)


def some_bank(count=40, n=3):
    return build_bank(
        RNG.standard_normal((count, n, n)),
        RNG.standard_normal((count, n, 2)),
        revision="R1",
        ids=[f"p{k}" for k in range(count)],
        coordinates={"speed": (np.arange(count, dtype=float), "m/s")},
        tags={"fuel/state.x%": ["föll"] * count},
        dt=0.02,
        digits=9,
    )


def write(path, *banks, **about):
    with BankWriter(path, "R1") as writer:
        for bank in banks:
            section = bank.sections[0]
            writer.append(Batch(bank.points, section))
        return writer.finish([Source("a.h5", "0" * 64, len(banks[0]))], ids_given=True, **about)


def test_what_is_written_is_read_back_to_the_bit(tmp_path):
    bank = some_bank()
    digest = write(tmp_path / "bank.h5", bank, intake={"notes": ["one"]})
    with read_bank(tmp_path / "bank.h5") as back:
        assert back.digest == digest == bank.digest
        assert back.compute_digest() == digest
        assert back.points.ids.tolist() == bank.points.ids.tolist()
        assert back.points.tags["fuel/state.x%"].tolist() == ["föll"] * 40
        assert back.points.units == {"speed": "m/s"}
        section = back.sections[0]
        assert (section.dt, section.digits) == (0.02, 9)
        np.testing.assert_array_equal(section.read(3, 9)["A"], bank.sections[0].matrices["A"][3:9])
        assert back.sources == (Source("a.h5", "0" * 64, 40),)
        assert back.intake == {"notes": ["one"]}
        assert back.name == "bank.h5"


def test_the_bank_does_not_depend_on_batches(tmp_path):
    bank = some_bank()
    whole = write(tmp_path / "whole.h5", bank)
    with BankWriter(tmp_path / "parts.h5", "R1") as writer:
        for start in range(0, 40, 7):
            stop = min(40, start + 7)
            part = bank.sections[0].read(start, stop)
            section = type(bank.sections[0])(
                *(getattr(bank.sections[0], kind) for kind in ("states", "inputs", "outputs")),
                0.02,
                9,
                part,
            )
            writer.append(Batch(bank.points.between(start, stop), section))
        assert writer.finish([], ids_given=True) == whole


def test_sections_part_points_by_shape(tmp_path):
    small, large = some_bank(4, 2), some_bank(5, 4)
    ids = np.array([f"q{k}" for k in range(5)])
    large = type(large)("R1", type(large.points)(
        ids, large.points.coordinates, large.points.units, large.points.tags, large.points.void,
    ), large.sections)  # fmt: skip
    write(tmp_path / "bank.h5", small, large)
    with read_bank(tmp_path / "bank.h5") as back:
        assert [len(section) for section in back.sections] == [4, 5]
        # The same places in two sections are two models of one place, not duplicates.
        assert back.usable == 9


def test_digits_found_by_inspection_are_the_most_of_a_section(tmp_path):
    bank = some_bank(6)
    section = type(bank.sections[0])(("a", "b", "c"), ("u", "v"), (), 0.0, None,
                                     bank.sections[0].matrices)  # fmt: skip
    for seen, stored in (((3, 7, 5), 7), ((3, 17), None), ((None,), None)):
        with BankWriter(tmp_path / "bank.h5", "R") as writer:
            for number, digits in enumerate(seen):
                part = type(section)(section.states, section.inputs, (), 0.0, None,
                                     section.read(number, number + 1))  # fmt: skip
                writer.append(Batch(bank.points.between(number, number + 1), part, digits))
            writer.finish([], ids_given=True)
        with read_bank(tmp_path / "bank.h5") as back:
            assert len(back.sections) == 1
            assert back.sections[0].digits == stored


def test_nothing_is_left_when_the_work_stops(tmp_path):
    class StopError(Exception):
        pass

    def stopped():
        with BankWriter(tmp_path / "new" / "deep" / "bank.h5", "R") as writer:
            bank = some_bank(3)
            writer.append(Batch(bank.points, bank.sections[0]))
            raise StopError

    with pytest.raises(StopError):
        stopped()
    assert list(tmp_path.iterdir()) == []


def test_an_old_bank_stays_until_the_new_one_is_whole(tmp_path):
    path = tmp_path / "bank.h5"
    write(path, some_bank(3))
    before = path.read_bytes()
    empty = build_bank(np.full((2, 1, 1), np.nan), revision="R")
    with pytest.raises(BankError) as caught:
        write(path, empty)
    assert str(caught.value) == (
        "bank.h5: no usable point among 2: A[1,1] is NaN (2 points); mend the export"
    )
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


def test_places_that_cannot_be_written(tmp_path):
    (tmp_path / "file").write_text("x")
    (tmp_path / "folder").mkdir()
    for target, words in (
        (tmp_path / "file" / "bank.h5", "cannot be written"),
        (tmp_path / "folder", "is a folder"),
        (Path("/proc/nowhere/bank.h5"), "cannot be written"),
        (tmp_path / ("x" * 300), "cannot be written"),
        (tmp_path / "a\0b", "cannot be written"),
    ):
        with pytest.raises(BankError) as caught:
            write(target, some_bank(2))
        assert words in str(caught.value)
        assert "\n" not in str(caught.value)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["file", "folder"]


def test_a_bank_has_the_rights_of_any_new_file(tmp_path):
    old = os.umask(0o027)
    try:
        write(tmp_path / "bank.h5", some_bank(2))
    finally:
        os.umask(old)
    assert (tmp_path / "bank.h5").stat().st_mode & 0o777 == 0o640


def test_files_that_are_no_banks(tmp_path):
    (tmp_path / "text.h5").write_text("no bank")
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["A"] = np.eye(2)
    write(tmp_path / "bank.h5", some_bank())
    whole = (tmp_path / "bank.h5").read_bytes()
    (tmp_path / "cut.h5").write_bytes(whole[: len(whole) // 2])
    with h5py.File(tmp_path / "bank.h5", "r+") as file:
        file.attrs["schema"] = 99
    for name, words in (
        ("nothing.h5", "there is no such bank; make it with ssaudit ingest"),
        ("text.h5", "is not an HDF5 file, or is cut short"),
        ("other.h5", "is HDF5 but not a bank"),
        ("cut.h5", "is not an HDF5 file, or is cut short"),
        ("bank.h5", "has bank schema 99, this version reads 1"),
    ):
        with pytest.raises(BankError) as caught:
            read_bank(tmp_path / name)
        assert words in str(caught.value)


@pytest.mark.parametrize("missing", ["points/id", "sections/0/A", "sources", "points/void_rows"])
def test_a_bank_that_lacks_a_part(tmp_path, missing):
    write(tmp_path / "bank.h5", some_bank())
    with h5py.File(tmp_path / "bank.h5", "r+") as file:
        del file[missing]
    with pytest.raises(BankError, match="damaged bank"):
        read_bank(tmp_path / "bank.h5")


def test_a_bank_whose_points_and_matrices_differ(tmp_path):
    write(tmp_path / "bank.h5", some_bank())
    with h5py.File(tmp_path / "bank.h5", "r+") as file:
        for name in ("A", "B"):
            file[f"sections/0/{name}"].resize(30, axis=0)
    with pytest.raises(BankError, match="sections and its points differ"):
        read_bank(tmp_path / "bank.h5")


def test_a_changed_entry_changes_the_computed_digest(tmp_path):
    digest = write(tmp_path / "bank.h5", some_bank())
    with h5py.File(tmp_path / "bank.h5", "r+") as file:
        file["sections/0/A"][0, 0, 0] += 1e-12
    with read_bank(tmp_path / "bank.h5") as back:
        assert back.digest == digest
        assert back.compute_digest() != digest


def test_many_sources_fit(tmp_path):
    bank = some_bank(3)
    with BankWriter(tmp_path / "bank.h5", "R") as writer:
        writer.append(Batch(bank.points, bank.sections[0]))
        sources = [Source(f"file{k}.h5", "0" * 64, 1) for k in range(10_000)]
        writer.finish(sources, ids_given=True)
    with read_bank(tmp_path / "bank.h5") as back:
        assert len(back.sources) == 10_000
