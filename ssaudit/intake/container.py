"""What HDF5 and NPZ files have in common: named arrays, read in slices."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from ssaudit.errors import SourceError
from ssaudit.intake.guard import as_digits, as_number, split_names
from ssaudit.intake.layout import KINDS, Column, Layout, Place
from ssaudit.settings import nearest

# Significant digits of float types narrower than 64 bits, by their bytes: 24 and 11 binary digits
# (IEEE 754-2019, table 3.5) are 7.2 and 3.3 decimal ones.
NARROW_DIGITS = {4: 7, 2: 3}
# What arrays hold that hold no real numbers, by kind of type.
_HELD = {"S": "text", "U": "text", "O": "text", "c": "complex numbers", "b": "truth values"}


class Stored(Protocol):
    """An array in a file, checked to be there whole."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Its shape."""
        ...

    @property
    def dtype(self) -> np.dtype[Any]:
        """Its type."""
        ...

    def block(self, axis: int) -> int:
        """How many points along an axis are stored together."""
        ...

    def read(self, axis: int, start: int, stop: int) -> NDArray[Any]:
        """Read a range of an axis, and all of the others."""
        ...

    def whole(self) -> NDArray[Any]:
        """Read all of it."""
        ...


class Container(Protocol):
    """An open file of named arrays."""

    @property
    def where(self) -> str:
        """The file, for messages."""
        ...

    def __contains__(self, name: str) -> bool: ...

    def array(self, name: str) -> Stored:
        """Return an array, checked."""
        ...

    def under(self, prefix: str) -> list[str]:
        """Names of the arrays that begin with a prefix."""
        ...

    def groups(self, depth: int) -> list[str]:
        """Names of the groups that lie at a depth."""
        ...

    def attribute(self, path: str, name: str) -> Any:
        """Value of an attribute, or None."""
        ...

    def attributes(self, path: str) -> list[str]:
        """Names of the attributes of a group or array; "" is for the top."""
        ...

    def unit(self, name: str) -> str:
        """Return the unit that is stated for an array, or ""."""
        ...


def find(container: Container, place: Place, group: str = "") -> Any:
    """Value of an attribute or of a whole array, or None where there is none.

    Parameters
    ----------
    container : Container
        The open file.
    place : Place
        Where it lies.
    group : str
        Group that the place is relative to; what is not there is looked up from the top.
    """
    for base in dict.fromkeys((group, "")):
        attribute = place.attribute
        if attribute is not None:
            path = "/".join(part for part in (base, attribute[0]) if part)
            value = container.attribute(path, attribute[1])
            if value is not None:
                return value
        else:
            path = "/".join(part for part in (base, place.text) if part)
            if path in container:
                return container.array(path).whole()
    return None


def find_column(
    container: Container, column: Column, fields: Mapping[str, str], layout: Layout, group: str = ""
) -> Any:
    """Values of a coordinate or tag: from a field of a name, an attribute or an array.

    Raises
    ------
    SourceError
        When it is not there.
    """
    field = column.place.field
    if field is not None:
        return np.array([fields[field]])
    value = find(container, column.place, group)
    if value is None:
        raise SourceError(
            f"has no {column.place.text!r} for {column.name}",
            where=f"{container.where}{', ' + group if group else ''}",
            do=f"correct {layout.name}; {nearest(column.place.text, container.under('')[:200])}",
        )
    return value


def unit_of(container: Container, column: Column, group: str = "") -> str:
    """Return the unit that the file states for a coordinate, or ""."""
    if column.place.field is not None or column.place.attribute is not None:
        return ""
    for base in dict.fromkeys((group, "")):
        path = "/".join(part for part in (base, column.place.text) if part)
        if path in container:
            return container.unit(path)
    return ""


def describe(
    container: Container, layout: Layout, group: str = ""
) -> tuple[dict[str, tuple[str, ...]], float, int | None]:
    """Names, sampling time and digits that a file states at the places of its layout.

    Returns
    -------
    names : dict of tuple
    dt : float
        [s]
    digits : int or None

    Raises
    ------
    SourceError
        When a place of the layout is not there, or holds what it must not.
    """
    where = container.where
    names = {}
    for kind in KINDS:
        place = layout.names.get(kind)
        if isinstance(place, Place):
            value = _value(container, place, layout, kind, group)
            if value is not None:
                names[kind] = split_names(value, where, kind)
    dt, digits = layout.dt, layout.digits
    if isinstance(dt, Place):
        found = _value(container, dt, layout, "dt", group)
        dt = 0.0 if found is None else as_number(found, where, "dt")
    if isinstance(digits, Place):
        found = _value(container, digits, layout, "digits", group)
        digits = None if found is None else as_digits(found, where)
    return names, dt, digits


def _value(container: Container, place: Place, layout: Layout, what: str, group: str) -> Any:
    value = find(container, place, group)
    if value is None and not layout.lenient:
        raise SourceError(
            f"has no {place.text!r} for {what}", where=container.where, do=f"correct {layout.name}"
        )
    return value


def digits_of(types: Iterable[np.dtype[Any]]) -> tuple[int | None, str]:
    """Significant digits that matrices can have been written with, by their types.

    Parameters
    ----------
    types : iterable of dtype
        Types of the arrays.

    Returns
    -------
    digits : int or None
        Of the narrowest float type; None for whole numbers and 64-bit numbers.
    name : str
        Name of that type, or "".

    Examples
    --------
    >>> digits_of([np.dtype("f8"), np.dtype(">f4"), np.dtype("i2")])
    (7, 'float32')
    >>> digits_of([np.dtype("f8"), np.dtype("i4")])
    (None, '')
    """
    narrow = [t for t in types if t.kind == "f" and t.itemsize in NARROW_DIGITS]
    if not narrow:
        return None, ""
    narrowest = min(narrow, key=lambda t: t.itemsize)
    return NARROW_DIGITS[narrowest.itemsize], f"float{8 * narrowest.itemsize}"


def as_real(values: Any, name: str, where: str) -> NDArray[np.float64]:
    """Values of a matrix as 64-bit numbers.

    Raises
    ------
    SourceError
        When they are complex, words or anything else that is no real number.
    """
    array = np.asarray(values)
    if array.dtype.kind not in "fiu":
        holds = _HELD.get(array.dtype.kind, str(array.dtype))
        raise SourceError(
            f"{name} holds {holds}, not real numbers", where=where, do="export real matrices"
        )
    return array.astype(np.float64, copy=False)


def unflatten(
    matrices: Mapping[str, NDArray[np.float64]], column_major: bool
) -> dict[str, NDArray[np.float64]]:
    """Give matrices that were written as one row of entries their rows and columns back.

    Parameters
    ----------
    matrices : dict of (points, entries) or (points, rows, columns) float
        Matrices by name, A among them. Without A, they stay as they are.
    column_major : bool
        Whether entries run down the columns first.

    Returns
    -------
    dict of (points, rows, columns) float
        Those whose number of entries fits no shape have one row.

    Examples
    --------
    >>> unflatten({"A": np.zeros((5, 4)), "B": np.zeros((5, 2))}, False)["B"].shape
    (5, 2, 1)
    """
    turned = {
        name: stack.transpose(0, 2, 1) if column_major and stack.ndim == 3 else stack
        for name, stack in matrices.items()
    }
    full = shapes_of_flat({name: stack.shape[1:] for name, stack in turned.items()})
    result = {}
    for name, stack in turned.items():
        rows, columns = full[name]
        if stack.ndim == 3:
            result[name] = stack
        elif column_major:
            result[name] = stack.reshape(len(stack), columns, rows).transpose(0, 2, 1)
        else:
            result[name] = stack.reshape(len(stack), rows, columns)
    return result


def shapes_of_flat(sizes: Mapping[str, Sequence[int]]) -> dict[str, tuple[int, int]]:
    """Rows and columns of matrices of which some are flat, from the number of states."""
    a = sizes.get("A", (0, 0))
    n = int(a[0]) if len(a) == 2 else round(int(a[0] if a else 1) ** 0.5)
    found: dict[str, tuple[int, int]] = {}
    for name, size in sizes.items():
        if len(size) == 2:
            found[name] = (int(size[0]), int(size[1]))
            continue
        entries = int(size[0]) if size else 1
        found[name] = (1, entries)
        if name in ("A", "E") and n * n == entries:
            found[name] = (n, n)
        elif name == "B" and n and entries % n == 0:
            found[name] = (n, entries // n)
        elif name == "C" and n and entries % n == 0:
            found[name] = (entries // n, n)
    if len(sizes.get("D", (0, 0))) < 2:
        entries = int(sizes["D"][0]) if sizes["D"] else 1
        rows = found["C"][0] if "C" in found else 0
        columns = found["B"][1] if "B" in found else 0
        if rows and entries % rows == 0:
            found["D"] = (rows, entries // rows)
        elif columns and entries % columns == 0:
            found["D"] = (entries // columns, columns)
    return found
