"""What the README shows works as it stands."""

import re
from pathlib import Path

import numpy as np
import pytest

from ssaudit.cli import main

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README, flags=re.DOTALL)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


def write_files(folder: Path) -> None:
    exec(blocks("python")[0], {})
    loop, schedule, criteria, parts, compensator, uncertain, pipeline = blocks("toml")
    (folder / "pipeline.toml").write_text(pipeline)
    gainless = loop.split("[gain]")[0]
    (folder / "parts.toml").write_text(loop + parts + uncertain)
    (folder / "computer.toml").write_text(gainless + compensator)
    (folder / "loop.toml").write_text(loop)
    (folder / "criteria.toml").write_text(criteria)
    head = 'sign = "negative"\nfeed = "states"\n'
    (folder / "scheduled.toml").write_text(head + schedule)
    table = "speed,K:flap:heave,K:flap:heave_rate\n10,6,1.5\n20,6,1.5\n"
    (folder / "gains.csv").write_text(table)


@pytest.mark.parametrize("loop", ["loop.toml", "scheduled.toml", "parts.toml", "computer.toml"])
def test_own_models_go_from_export_to_ledger(folder, capsys, loop):
    write_files(folder)
    commands = [
        line.split()[1:]
        for line in README.split("**4. Audit**")[1].splitlines()
        if line.startswith("    ssaudit ")
    ]
    assert [command[0] for command in commands] == ["ingest", "audit"]
    codes = [main([loop if w == "loop.toml" else w for w in command]) for command in commands]
    assert codes == [0, 0]
    assert "11 ok" in capsys.readouterr().out
    assert len(list((folder / "ledger").glob("run=*/points.parquet"))) == 1


def test_pipeline_file_runs(folder, capsys):
    write_files(folder)
    assert main(["run", "pipeline.toml"]) == 0
    shown = capsys.readouterr().out
    assert "Drift from revision A to B" in shown
    assert len(list((folder / "out" / "ledger").glob("run=*"))) == 2


def test_python_example_gives_its_numbers(folder, capsys):
    shown: dict[str, object] = {}
    exec("\n".join(blocks("python")), shown)
    before, after = shown["before"], shown["after"]
    # Characteristic polynomial at speed v: s² + 1.5 s + 6 - 4 + 0.1 v.
    speed = before.points["at_speed"].to_numpy()
    expected = 1.5 / (2 * np.sqrt(2 + 0.1 * speed))
    np.testing.assert_allclose(before.points["min_damping"], expected, rtol=1e-12)
    assert set(before.points["verdict"]) == {"ok"}
    # Adding 0.7 to the diagonal moves every pole to the right by 0.7.
    np.testing.assert_allclose(
        after.points["max_real"], before.points["max_real"] + 0.7, rtol=1e-12
    )
    assert "'worse': 11" in capsys.readouterr().out


def test_demo_commands_name_files_that_exist():
    for word in re.findall(r"(?:data|configs|pipelines)/[\w./-]+", README):
        assert (ROOT / word).exists(), word


def test_every_command_and_file_key_is_documented():
    for word in ("ingest", "audit", "point", "drift", "trend", "run"):
        assert f"ssaudit {word}" in README
    for key in ("sign", "feed", "matrix", "inputs", "signals", "table", "variables", "outside"):
        assert re.search(rf"\b{key} = ", README), key
    for key in ("unnamed", "neutral", "name", "quantity", "at_least", "frequency", "where"):
        assert re.search(rf"\b{key} = ", README), key
