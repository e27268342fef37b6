"""The same 300 models in every format, orientation and grouping give the same bank, to the bit."""

from functools import partial

import intake_writers as writers
import numpy as np
import pytest

from ssaudit.bank_arrays import build_bank
from ssaudit.bank_file import read_bank
from ssaudit.intake.ingest import ingest

EXACT = {
    "npz first axis": writers.npz_axis,
    "npz first axis compressed": partial(writers.npz_axis, compressed=True),
    "npz first axis column-major": partial(writers.npz_axis, column_major=True),
    "npz last axis": partial(writers.npz_axis, last=True),
    "npz last axis fortran": partial(writers.npz_axis, last=True, fortran=True),
    "npz first axis fortran": partial(writers.npz_axis, fortran=True),
    "npz last axis column-major": partial(writers.npz_axis, last=True, column_major=True),
    "npz flat": writers.flat_axis,
    "npz flat column-major": partial(writers.flat_axis, column_major=True),
    "npz group": writers.npz_group,
    "npz file": writers.npz_file,
    "hdf5 first axis": writers.hdf5_axis,
    "hdf5 first axis column-major": partial(writers.hdf5_axis, column_major=True),
    "hdf5 first axis compressed": partial(writers.hdf5_axis, compression="gzip"),
    "hdf5 last axis": partial(writers.hdf5_axis, last=True),
    "hdf5 last axis column-major": partial(writers.hdf5_axis, last=True, column_major=True),
    "hdf5 last axis chunked": partial(writers.hdf5_axis, last=True, chunks=True, shuffle=True),
    "hdf5 group": writers.hdf5_group,
    "hdf5 group column-major": partial(writers.hdf5_group, column_major=True),
    "hdf5 file": writers.hdf5_file,
    "csv row": writers.csv_row,
    "csv row named": partial(writers.csv_row, named=True),
    "csv row from 0": partial(writers.csv_row, zero_based=True),
    "csv row semicolons and commas": partial(writers.csv_row, sep=";", decimal=","),
    "csv long": writers.csv_long,
    "csv long named": partial(writers.csv_long, named=True),
    "csv file": writers.plain_matrices,
    "csv file commas": partial(writers.plain_matrices, delimiter=","),
    "parquet row": writers.parquet_row,
    "parquet row named": partial(writers.parquet_row, named=True),
    "parquet lists flat": writers.parquet_lists,
    "parquet lists flat column-major": partial(writers.parquet_lists, column_major=True),
    "parquet lists nested": partial(writers.parquet_lists, flat=False),
    "parquet long": writers.parquet_long,
    "parquet long named": partial(writers.parquet_long, named=True),
    "parquet long in any order": partial(writers.parquet_long, shuffled=True),
    "json-lines nested": writers.json_lines,
    "json-lines flat column-major": partial(writers.json_lines, flat=True, column_major=True),
    "matrix-market array": writers.matrix_market,
    "matrix-market coordinate": partial(writers.matrix_market, sparse=True),
}


@pytest.fixture(scope="module")
def models():
    return writers.Models()


@pytest.fixture(scope="module")
def expected(models):
    return build_bank(
        *models.matrices.values(),
        revision="R",
        states=writers.STATES,
        inputs=writers.INPUTS,
        outputs=writers.OUTPUTS,
        ids=models.ids.tolist(),
        coordinates={"speed": (models.speed, "m/s"), "mass": (models.mass, "t")},
        tags={"gear": models.gear.tolist()},
    )


@pytest.fixture
def take_in(tmp_path):
    def taker(write, models):
        folder = tmp_path / "export"
        folder.mkdir()
        (tmp_path / "layout.toml").write_text(write(folder, models))
        ingest([folder], revision="R", bank=tmp_path / "bank.h5", layout=tmp_path / "layout.toml")
        return read_bank(tmp_path / "bank.h5")

    return taker


def test_there_are_300_models(expected):
    assert len(expected) == expected.usable == 300


@pytest.mark.parametrize("name", EXACT)
def test_the_same_bank(name, models, expected, take_in):
    with take_in(EXACT[name], models) as bank:
        assert bank.points.void[bank.points.void != ""].tolist() == []
        (section,) = bank.sections
        for matrix, stack in models.matrices.items():
            np.testing.assert_array_equal(section.read(0, 300)[matrix], stack)
        assert bank.digest == expected.digest


def test_a_wrong_order_gives_another_bank(models, expected, take_in):
    # The control: the same export read row-major where it is column-major.
    def square_only(folder, models):
        arrays = writers.axis_arrays(models, False, True)
        np.savez(folder / "a.npz", **{n: a for n, a in arrays.items() if n not in "BCD"})
        text = writers.axis_layout("npz", False, False)
        return text.replace("[names]", '[matrices]\nA = "A"\n[names]').replace(
            f"inputs = {writers.INPUTS}\noutputs = {writers.OUTPUTS}", ""
        )

    with take_in(square_only, models) as bank:
        assert bank.digest != expected.digest
        np.testing.assert_array_equal(
            bank.sections[0].read(0, 300)["A"], models.matrices["A"].transpose(0, 2, 1)
        )


@pytest.mark.parametrize(
    ("write", "digits"),
    [
        (partial(writers.csv_row, float_format="%.5e"), 6),
        (partial(writers.matrix_market, precision=7), 7),
    ],
)
def test_text_to_the_printed_digits(write, digits, models, take_in):
    with take_in(write, models) as bank:
        (section,) = bank.sections
        assert section.digits == digits
        for matrix, stack in models.matrices.items():
            read = section.read(0, 300)[matrix]
            np.testing.assert_allclose(read, stack, rtol=0.5 * 10.0 ** (1 - digits), atol=0)
            if np.any(stack % 1):
                # The rounding was there: the entries are not those before it.
                assert np.any(read != stack)
