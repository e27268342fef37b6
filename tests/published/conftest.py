"""Published figures, and one audit by either of the two ways into the program."""

import json
import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

import ssaudit


@pytest.fixture(scope="session")
def figures() -> dict[str, dict[str, Any]]:
    """Published figures by name, each with its source."""
    listed = json.loads(Path(__file__).with_name("figures.json").read_text(encoding="utf-8"))
    return {figure["id"]: figure for figure in listed}


@dataclass(frozen=True)
class Found:
    """What an audit found, whichever way it was asked for."""

    points: pd.DataFrame
    modes: pd.DataFrame
    counts: Mapping[str, int]

    @property
    def verdicts(self) -> list[str]:
        return list(self.points["verdict"])

    def poles(self, point: str) -> NDArray[np.complex128]:
        """Poles of a point by rising real part, of a conjugate pair the upper one."""
        rows = self.modes[self.modes["point"] == point]
        return np.sort_complex(rows["real"].to_numpy() + 1j * rows["imag"].to_numpy())


@pytest.fixture(params=["library", "command"])
def audited(
    request: pytest.FixtureRequest,
    tmp_path: Path,
    export: Callable[..., Path],
    command: Callable[..., Any],
) -> Callable[..., Found]:
    """Audit stacked matrices under a constant gain: by the library, and by the command line."""

    def by_library(
        matrices: Mapping[str, Any],
        *,
        ids: list[str],
        gain: Any = None,
        require: list[dict[str, Any]] | None = None,
    ) -> Found:
        bank = ssaudit.build_bank(
            *(matrices.get(name) for name in "ABCD"), revision="published", ids=ids
        )
        if gain is None:
            loop = ssaudit.Loop("", None, "none")
        else:
            loop = ssaudit.Loop("negative", ssaudit.ConstantGain(gain), "outputs")
        criteria = ssaudit.Criteria(tuple(ssaudit.Requirement(**item) for item in require or []))
        found = ssaudit.audit(bank, loop, criteria)
        return Found(found.points, found.modes, found.summary.counts)

    def by_command(
        matrices: Mapping[str, Any],
        *,
        ids: list[str],
        gain: Any = None,
        require: list[dict[str, Any]] | None = None,
    ) -> Found:
        source = export("export.h5", matrices, ids=ids)
        folder = Path(tempfile.mkdtemp(dir=tmp_path))
        bank, loop, criteria = (folder / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
        ledger = folder / "ledger"
        loop.write_text(
            'feed = "none"\n'
            if gain is None
            else f'sign = "negative"\nfeed = "outputs"\n[gain]\nmatrix = {gain}\n'
        )
        criteria.write_text("".join(_as_toml(item) for item in require or []))
        taken = command("ingest", source, "--revision", "published", "--bank", bank)
        assert taken.code == 0, taken.err
        ran = command(
            "audit",
            bank,
            "--loop",
            loop,
            "--criteria",
            criteria,
            "--ledger",
            ledger,
            "--json",
            "-",
            "--worst",
            "1000",
        )
        report = json.loads(ran.out)
        (run,) = ledger.glob("run=*")
        points, modes = (pd.read_parquet(run / f"{n}.parquet") for n in ("points", "modes"))
        _agree(report, points, ran.code)
        return Found(points, modes, {k: v for k, v in report["points"].items() if k != "total"})

    return by_library if request.param == "library" else by_command


def _as_toml(requirement: Mapping[str, Any]) -> str:
    return "[[require]]\n" + "".join(f"{k} = {json.dumps(v)}\n" for k, v in requirement.items())


def _agree(report: Mapping[str, Any], points: pd.DataFrame, code: int) -> None:
    """The JSON report, the exit code and the ledger say the same of every point."""
    not_ok = points[points["verdict"] != "ok"].set_index("point")
    assert code == (1 if len(not_ok) else 0)
    assert report["points"]["total"] == len(points)
    for verdict in ("ok", "short", "lost", "doubt", "void"):
        assert report["points"][verdict] == int((points["verdict"] == verdict).sum())
    assert {point["point"] for point in report["worst"]} == set(not_ok.index)
    for point in report["worst"]:
        row = not_ok.loc[point["point"]]
        assert (point["verdict"], point["reason"]) == (row["verdict"], row["reason"])
        for name in ("real", "imag", "damping_ratio"):
            value = row[name] if np.isfinite(row[name]) else None
            assert point[name] == value
