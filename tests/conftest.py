"""What many tests need: exports on disk, and commands run in this process."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from ssaudit.bank import ModelBank, Source
from ssaudit.bank_arrays import build_bank
from ssaudit.bank_writer import BankWriter, Batch
from ssaudit.cli import main


@dataclass(frozen=True)
class Ran:
    """What came of a command: its exit code and what it wrote."""

    code: int
    out: str
    err: str


@pytest.fixture
def command(capsys: pytest.CaptureFixture[str]) -> Callable[..., Ran]:
    """Run a command of the program, as ``command("audit", bank, "--loop", loop)``."""

    def run(*arguments: str | Path) -> Ran:
        capsys.readouterr()
        code = main([str(argument) for argument in arguments])
        written = capsys.readouterr()
        return Ran(code, written.out, written.err)

    return run


@pytest.fixture
def export(tmp_path: Path) -> Callable[..., Path]:
    """Write stacked matrices as an HDF5 export in the default layout."""

    def write(
        name: str,
        matrices: Mapping[str, Any],
        *,
        ids: list[str] | None = None,
        coordinates: Mapping[str, tuple[Any, str]] | None = None,
        **attributes: Any,
    ) -> Path:
        path = tmp_path / name
        with h5py.File(path, "w") as file:
            for key, value in matrices.items():
                file[key] = np.asarray(value, dtype=float)
            if ids is not None:
                file["ids"] = ids
            for key, (values, units) in (coordinates or {}).items():
                file[f"points/{key}"] = np.asarray(values, dtype=float)
                file[f"points/{key}"].attrs["units"] = units
            for key, value in attributes.items():
                file.attrs[key] = value
        return path

    return write


@pytest.fixture(scope="session")
def oscillators() -> Callable[..., ModelBank]:
    """Build a bank whose models, closed with u = -[1 1] x, have the damping that is asked for."""

    def build(damping: Any, omega: Any = 2.0, **about: Any) -> ModelBank:
        zeta, frequency = np.broadcast_arrays(np.atleast_1d(np.asarray(damping, float)), omega)
        A = np.zeros((len(zeta), 2, 2))
        A[:, 0, 1], A[:, 1, 0], A[:, 1, 1] = 1, 1 - frequency**2, 1 - 2 * zeta * frequency
        names = {"revision": "A", "states": ["height", "rate"], "inputs": ["flap"]}
        return build_bank(A, np.tile([[0.0], [1.0]], (len(zeta), 1, 1)), **names | about)

    return build


@pytest.fixture(scope="session")
def save_bank() -> Callable[[ModelBank, Path], Path]:
    """Write a bank that was built from arrays to its file."""

    def save(bank: ModelBank, path: Path) -> Path:
        with BankWriter(path, bank.revision) as writer:
            start = 0
            for section in bank.sections:
                stop = start + len(section)
                writer.append(Batch(bank.points.between(start, stop), section))
                start = stop
            source = Source("export.h5", "0" * 64, len(bank))
            writer.finish([source], ids_given=bank.ids_given)
        return path

    return save


@dataclass(frozen=True)
class Project:
    """A folder with a loop, criteria and banks, and the commands that are run on them."""

    folder: Path
    run: Callable[..., Ran]
    build: Callable[..., ModelBank]
    save: Callable[[ModelBank, Path], Path]

    @property
    def ledger(self) -> Path:
        return self.folder / "ledger"

    def bank(self, name: str, damping: Any, **about: Any) -> Path:
        about.setdefault("revision", name)
        return self.save(self.build(damping, **about), self.folder / f"{name}.h5")

    def audit(self, bank: Path, *more: str | Path) -> Ran:
        loop, criteria = self.folder / "loop.toml", self.folder / "criteria.toml"
        return self.run("audit", bank, "--loop", loop, "--criteria", criteria, *more)

    def log(self, *banks: Path) -> list[Ran]:
        return [self.audit(bank, "--ledger", self.ledger) for bank in banks]


@pytest.fixture
def project(
    tmp_path: Path,
    command: Callable[..., Ran],
    oscillators: Callable[..., ModelBank],
    save_bank: Callable[[ModelBank, Path], Path],
) -> Project:
    """Make a folder with a loop of gains [1 1] and criteria that ask for a damping of 0.2."""
    folder = tmp_path / "project"
    folder.mkdir()
    (folder / "loop.toml").write_text('sign = "negative"\n[gain]\nmatrix = [[1.0, 1.0]]\n')
    (folder / "criteria.toml").write_text(
        '[[require]]\nname = "ride"\nquantity = "damping_ratio"\nat_least = 0.2\n'
    )
    return Project(folder, command, oscillators, save_bank)
