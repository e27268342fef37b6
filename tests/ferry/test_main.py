"""The regenerating command."""

from pathlib import Path

import pytest

from ssaudit.ferry.__main__ import main

EXPORTS = ["ferry-a.h5", "ferry-b.h5", "ferry-c.h5", "ferry-b-rounded.npz"]
TABLES = ["ferry-gains-a.csv", "ferry-gains-c.csv"]


def test_writes_exports_only_unless_asked(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main([str(tmp_path / "new" / "folder")]) == 0
    assert {p.name for p in (tmp_path / "new" / "folder").iterdir()} == set(EXPORTS)
    assert [Path(line).name for line in capsys.readouterr().out.splitlines()] == EXPORTS


def test_writes_tables_where_told(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    main([str(tmp_path / "data"), "--configs", str(tmp_path / "loops")])
    assert sorted(p.name for p in (tmp_path / "loops").iterdir()) == TABLES
    assert len(capsys.readouterr().out.splitlines()) == 6
