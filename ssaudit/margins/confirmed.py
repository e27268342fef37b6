"""What is not confirmed is not shown: margins with their open points left empty."""

import dataclasses
from typing import TypeVar

import numpy as np

Found = TypeVar("Found")


def only_confirmed(found: Found) -> Found:
    """Leave the numbers of points empty that are not confirmed.

    Parameters
    ----------
    found : dataclass
        Arrays with the points first; ``confirmed`` (points,) bool says where they are decided.

    Returns
    -------
    of the same type
        NaN in every array of floats at the points that are not confirmed.

    Examples
    --------
    >>> from ssaudit.margins.peak_search import Peak
    >>> peak = Peak(np.array([2.0, 3.0]), np.array([1.0, 1.0]), np.array([True, False]))
    >>> only_confirmed(peak).value
    array([ 2., nan])
    """
    values = {f.name: getattr(found, f.name) for f in dataclasses.fields(found)}  # type: ignore[arg-type]
    open_points = ~np.asarray(values["confirmed"])
    changed = {}
    for name, value in values.items():
        if isinstance(value, np.ndarray) and value.dtype.kind == "f":
            changed[name] = value.copy()
            changed[name][open_points] = np.nan
    return dataclasses.replace(found, **changed)  # type: ignore[type-var]
