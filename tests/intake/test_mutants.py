"""Random mutants of valid exports: a bank of what was readable, or a one-line error.

2,000 mutants by default; SSAUDIT_LONG=1 takes ten times as many, of every kind of export.
"""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest
from mutants import COMPARED
from test_same_bank import EXACT

LONG = bool(os.environ.get("SSAUDIT_LONG"))
KINDS = (
    "hdf5 first axis",
    "hdf5 group",
    "npz first axis",
    "npz last axis column-major",
    "csv row",
    "csv long named",
    "parquet row",
    "parquet long",
    "json-lines nested",
    "matrix-market coordinate",
)
# Mutants of one kind; ten kinds make the 2,000.
COUNT = 2000 if LONG else 200
# Peak memory of a process that takes small exports in, libraries and the comparison included.
MOST_MEGABYTES = 400


@pytest.mark.parametrize("name", EXACT if LONG else KINDS)
def test_mutants(name):
    program = Path(__file__).with_name("mutants.py")
    command = [sys.executable, str(program), name, str(COUNT), "2027"]
    # A mutant that hangs or ends the process fails here.
    result = subprocess.run(command, capture_output=True, text=True, timeout=60 + COUNT)
    assert result.returncode == 0, result.stderr[-2000:]
    found = json.loads(result.stdout)
    assert found["problems"] == []
    assert found["banks"] + found["errors"] == COUNT
    # The mutants are no mere noise: some still are exports.
    assert found["banks"] > 0
    assert found["compared"] > 0 or name not in COMPARED
    assert found["megabytes"] < MOST_MEGABYTES


def test_the_comparison_can_fail(tmp_path, monkeypatch):
    import intake_writers as writers
    import mutants

    from ssaudit.bank_file import read_bank
    from ssaudit.intake.ingest import ingest

    layout = tmp_path / "layout.toml"
    layout.write_text(writers.npz_axis(tmp_path, writers.Models(6)))
    ingest([tmp_path / "a.npz"], revision="R", bank=tmp_path / "bank.h5", layout=layout)
    problems: list[str] = []
    with read_bank(tmp_path / "bank.h5") as bank:
        assert mutants.compare(bank, tmp_path / "a.npz", problems)
        assert problems == []
        writers.npz_axis(tmp_path, writers.Models(6, seed=8))
        mutants.compare(bank, tmp_path / "a.npz", problems)
        assert len(problems) == 6
