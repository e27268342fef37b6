"""Columns for Arrow, from numpy.

pyarrow's own conversion imports pandas at its first call, which costs more than auditing thousands
of points; these two build the arrays from their buffers instead.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray


def arrow_array(column: NDArray[Any]) -> Any:
    """Turn a column into an Arrow array; NaN becomes null.

    Parameters
    ----------
    column : (rows,) array
        float64, int64, bool, objects that are str, or int8: 1 yes, 0 no, -1 unknown (null).

    Returns
    -------
    pyarrow.Array

    Examples
    --------
    >>> arrow_array(np.array([1.0, np.nan])).null_count
    1
    >>> arrow_array(np.array(["ok", "ζ"], dtype=object)).to_pylist()
    ['ok', 'ζ']
    """
    import pyarrow as pa

    if column.dtype == object:
        return _words(column)
    if column.dtype == bool:
        bits = pa.py_buffer(np.packbits(column, bitorder="little"))
        return pa.Array.from_buffers(pa.bool_(), len(column), [None, bits])
    if column.dtype == np.int8:
        masks = (np.packbits(mask, bitorder="little") for mask in (column >= 0, column == 1))
        return pa.Array.from_buffers(pa.bool_(), len(column), [pa.py_buffer(m) for m in masks])
    kind = {"f": pa.float64(), "i": pa.int64()}[column.dtype.kind]
    data = pa.py_buffer(np.ascontiguousarray(column, dtype=f"{column.dtype.kind}8"))
    missing = np.isnan(column) if column.dtype.kind == "f" else np.zeros(0, dtype=bool)
    if not missing.any():
        return pa.Array.from_buffers(kind, len(column), [None, data])
    known = pa.py_buffer(np.packbits(~missing, bitorder="little"))
    return pa.Array.from_buffers(kind, len(column), [known, data])


def _words(column: NDArray[np.object_]) -> Any:
    import pyarrow as pa

    if len(column) and column[0] is column[-1] and len(set(column)) == 1:
        word = column[0].encode("utf-8", "replace")
        every = np.arange(len(column) + 1, dtype=np.int32) * len(word)
        buffers = [None, pa.py_buffer(every), pa.py_buffer(word * len(column))]
        return pa.Array.from_buffers(pa.string(), len(column), buffers)
    joined = "".join(column).encode("utf-8", "replace")
    lengths = np.fromiter(map(len, column), dtype=np.int64, count=len(column))
    if len(joined) != lengths.sum():
        # Not ASCII: a letter may take several bytes.
        sizes = (len(word.encode("utf-8", "replace")) for word in column)
        lengths = np.fromiter(sizes, dtype=np.int64, count=len(column))
    offsets = np.zeros(len(column) + 1, dtype=np.int32)
    np.cumsum(lengths, out=offsets[1:])
    buffers = [None, pa.py_buffer(offsets), pa.py_buffer(joined)]
    return pa.Array.from_buffers(pa.string(), len(column), buffers)
