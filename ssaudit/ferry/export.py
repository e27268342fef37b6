"""The three demo exports, as a simulation group would hand them over, damage included."""

from dataclasses import dataclass, fields, replace
from itertools import product
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ssaudit.ferry.gains import WEIGHTS_A, WEIGHTS_C, write_gains
from ssaudit.ferry.models import INPUTS, OUTPUTS, STATES, Models, build_models
from ssaudit.ferry.vessel import BOW_TANK, FRESH_WATER, STERN_TANK, Ferry

Array = NDArray[np.float64]

SPEEDS = tuple(np.arange(15.0, 25.0))
"""Speeds of the envelope [m/s]."""

MASSES = tuple(np.arange(95.0, 126.0, 5.0))
"""Masses of the envelope [t]."""

IMMERSIONS = (1.0, 1.2, 1.4, 1.6, 1.8)
"""Immersions of the envelope [m]."""

SLIP = 0.1
"""Immersion by which a repeated id differs from the point it names [m]."""


@dataclass(frozen=True)
class Damage:
    """What is wrong with an export; each names a point by its id.

    Parameters
    ----------
    nan : str
        A has a NaN in it, as a failed trim leaves it.
    repeated_id : str
        The id stands once more on a model of another immersion.
    rerun : str
        The point was run once more, in fresh water, under another id but the same coordinates.
    infinite : str, optional
        B has an infinite entry, as a division by zero leaves it.
    """

    nan: str
    repeated_id: str
    rerun: str
    infinite: str | None = None


@dataclass(frozen=True)
class Revision:
    """One export.

    Parameters
    ----------
    ferry : Ferry
        The ferry it is of.
    damage : Damage
        What is wrong with the file.
    """

    ferry: Ferry
    damage: Damage


REVISIONS = {
    "a": Revision(
        Ferry(BOW_TANK),
        Damage("v17-m100-h1.2", "v19-m110-h1.4", "v20-m095-h1.8", infinite="v21-m120-h1.6"),
    ),
    "b": Revision(
        Ferry(STERN_TANK),
        Damage("v22-m105-h1.0", "v18-m100-h1.4", "v20-m095-h1.8", infinite="v16-m115-h1.6"),
    ),
    "c": Revision(Ferry(STERN_TANK), Damage("v22-m105-h1.0", "v18-m100-h1.4", "v20-m095-h1.8")),
}
"""The demo revisions by the letter in their file names."""


def point_id(speed: float, mass: float, immersion: float) -> str:
    """Id of a point from speed [m/s], mass [t] and immersion [m].

    Examples
    --------
    >>> point_id(18.0, 95.0, 1.4)
    'v18-m095-h1.4'
    """
    return f"v{speed:02.0f}-m{mass:03.0f}-h{immersion:.1f}"


def build_export(revision: Revision) -> tuple[list[str], Models]:
    """Models of one export over the whole envelope, with their ids and the damage done.

    Parameters
    ----------
    revision : Revision

    Returns
    -------
    ids : list of str
    models : Models
        One row an id; the rows of repeated id and rerun come last.

    Examples
    --------
    >>> ids, models = build_export(REVISIONS["a"])
    >>> len(ids), ids[-1], models.A.shape
    (352, 'v20-m095-h1.8-rerun', (352, 9, 9))
    """
    envelope = np.array(list(product(SPEEDS, MASSES, IMMERSIONS)))
    ids = [point_id(*point) for point in envelope]
    damage = revision.damage
    slipped, again = envelope[ids.index(damage.repeated_id)], envelope[ids.index(damage.rerun)]
    stray = _build(revision.ferry, slipped[None] + [0.0, 0.0, SLIP])
    rerun = _build(replace(revision.ferry, density=FRESH_WATER), again[None])
    models = _join(_build(revision.ferry, envelope), stray, rerun)
    models.A[ids.index(damage.nan), STATES.index("pitch_rate"), STATES.index("pitch")] = np.nan
    if damage.infinite is not None:
        models.B[ids.index(damage.infinite), STATES.index("flap_aft_rate"), 1] = np.inf
    return [*ids, damage.repeated_id, f"{damage.rerun}-rerun"], models


def _build(ferry: Ferry, points: Array) -> Models:
    """Models at rows of speed [m/s], mass [t], immersion [m]."""
    return build_models(ferry, *points.T)


def _join(*parts: Models) -> Models:
    """Several stacks as one."""
    names = [field.name for field in fields(Models)]
    return Models(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))


def write_export(path: Path, ids: list[str], models: Models) -> None:
    """Write an export in HDF5, without time stamps so that the same models give the same bytes.

    Parameters
    ----------
    path : Path
        File to write.
    ids : list of str
        Id of each point.
    models : Models
        In the same order.
    """
    import h5py

    packed = {"compression": "gzip", "compression_opts": 9, "shuffle": True, "track_times": False}
    text = h5py.string_dtype("utf-8", length=max(map(len, ids)))
    with h5py.File(path, "w") as file:
        file.attrs["states"], file.attrs["inputs"] = list(STATES), list(INPUTS)
        file.attrs["outputs"], file.attrs["dt"] = list(OUTPUTS), 0.0
        for name in ("A", "B", "C", "D"):
            file.create_dataset(name, data=getattr(models, name), **packed)
        file.create_dataset("ids", data=np.array([i.encode() for i in ids], dtype=text), **packed)
        for name, units in (("speed", "m/s"), ("mass", "t"), ("immersion", "m")):
            column = file.create_dataset(f"points/{name}", data=getattr(models, name), **packed)
            column.attrs["units"] = units


def write_exports(folder: Path) -> list[Path]:
    """Write ``ferry-a.h5``, ``ferry-b.h5`` and ``ferry-c.h5``.

    Parameters
    ----------
    folder : Path
        Made if missing.

    Returns
    -------
    list of Path
        The files written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    written = []
    for letter, revision in REVISIONS.items():
        written.append(folder / f"ferry-{letter}.h5")
        write_export(written[-1], *build_export(revision))
    return written


def write_gain_tables(folder: Path) -> list[Path]:
    """Write ``ferry-gains-a.csv`` (for A, kept in B) and ``ferry-gains-c.csv``.

    Parameters
    ----------
    folder : Path
        Made if missing.

    Returns
    -------
    list of Path
        The files written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    written = [folder / "ferry-gains-a.csv", folder / "ferry-gains-c.csv"]
    write_gains(written[0], REVISIONS["a"].ferry, WEIGHTS_A)
    write_gains(written[1], REVISIONS["c"].ferry, WEIGHTS_C)
    return written
