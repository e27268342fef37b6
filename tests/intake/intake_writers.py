"""The same models written in every format, orientation and grouping, each with its layout."""

import json

import h5py
import numpy as np
import pandas as pd
import scipy.io
import scipy.sparse

STATES = ["heave", "heave_rate", "pitch", "pitch_rate"]
INPUTS = ["fore", "aft"]
OUTPUTS = ["height", "pitch_gyro", "bow"]
AXES = {
    "A": (STATES, STATES),
    "B": (STATES, INPUTS),
    "C": (OUTPUTS, STATES),
    "D": (OUTPUTS, INPUTS),
}

NAMES = f"""
[names]
states = {STATES}
inputs = {INPUTS}
outputs = {OUTPUTS}
"""


class Models:
    """Models of 30 speeds and 10 masses, in two configurations."""

    def __init__(self, count=300, seed=7, entries=None):
        rng = np.random.default_rng(seed)
        self.count = count
        speed, mass = np.meshgrid(np.arange(30) * 0.5 + 5, 80.0 + np.arange(10), indexing="ij")
        self.speed, self.mass = speed.ravel()[:count], mass.ravel()[:count]
        self.gear = np.array(["in" if k % 2 else "out" for k in range(count)])
        self.ids = np.array([f"p{k:03d}" for k in range(count)])
        shapes = {name: (len(rows), len(columns)) for name, (rows, columns) in AXES.items()}
        self.matrices = {n: rng.standard_normal((count, *s)) for n, s in shapes.items()}
        self.matrices["A"][:, 0] = [0, 1, 0, 0]
        self.matrices["D"][:] = 0.0
        if entries:
            self.matrices = {n: entries(m) for n, m in self.matrices.items()}

    def rows(self):
        """Points one by one."""
        for k in range(self.count):
            yield k, {name: stack[k] for name, stack in self.matrices.items()}


def place(text, unit=None, tag=False):
    """Write a coordinate or tag of a layout."""
    return f'from = "{text}"' + (f'\nunit = "{unit}"' if unit else "")


def points_part(speed, mass, gear, ids=None):
    """Write the part of a layout that says where coordinates and tags lie."""
    head = f'ids = "{ids}"\n' if ids else ""
    return (
        head,
        f"""
[coordinates.speed]
{place(speed, "m/s")}
[coordinates.mass]
{place(mass, "t")}
[tags.gear]
{place(gear)}
""",
    )


def layout_text(format_, points, body="", tail="", speed="speed", mass="mass", gear="gear",
                ids="ids", names=NAMES):  # fmt: skip
    """Write a layout."""
    head, columns = points_part(speed, mass, gear, ids)
    return f'format = "{format_}"\npoints = "{points}"\n{head}{body}\n{tail}\n{names}\n{columns}'


def oriented(stack, last, column_major):
    """Turn a stack of matrices to how an export may hold it."""
    turned = stack.transpose(0, 2, 1) if column_major else stack
    return np.moveaxis(turned, 0, -1) if last else turned


def axis_arrays(models, last, column_major):
    """All arrays of an export whose points are counted by an axis."""
    arrays = {n: oriented(m, last, column_major) for n, m in models.matrices.items()}
    return arrays | {"speed": models.speed, "mass": models.mass, "gear": models.gear,
                     "ids": models.ids}  # fmt: skip


def axis_layout(format_, last, column_major):
    """Layout of `axis_arrays`."""
    order = 'order = "column-major"' if column_major else ""
    return layout_text(format_, "last axis" if last else "first axis", order)


def npz_axis(folder, models, last=False, column_major=False, compressed=False, fortran=False):
    arrays = axis_arrays(models, last, column_major)
    if fortran:
        arrays = {n: np.asfortranarray(a) for n, a in arrays.items()}
    (np.savez_compressed if compressed else np.savez)(folder / "a.npz", **arrays)
    return axis_layout("npz", last, column_major)


def hdf5_axis(folder, models, last=False, column_major=False, **options):
    with h5py.File(folder / "a.h5", "w") as file:
        for name, array in axis_arrays(models, last, column_major).items():
            if array.dtype.kind == "U":
                array = array.astype("S")
                file[name] = array
            else:
                file.create_dataset(name, data=array, **(options if array.ndim == 3 else {}))
    return axis_layout("hdf5", last, column_major)


def flat_axis(folder, models, column_major=False):
    arrays = axis_arrays(models, False, column_major)
    for name in models.matrices:
        arrays[name] = arrays[name].reshape(models.count, -1)
    np.savez(folder / "a.npz", **arrays)
    return axis_layout("npz", False, column_major)


def hdf5_group(folder, models, column_major=False):
    with h5py.File(folder / "a.h5", "w") as file:
        for k, matrices in models.rows():
            group = file.create_group(f"cases/{models.ids[k]}")
            for name, matrix in matrices.items():
                group[f"model/{name}"] = matrix.T if column_major else matrix
            group.attrs["V"] = models.speed[k]
            group["m"] = models.mass[k]
            group.attrs["gear"] = str(models.gear[k])
    order = 'order = "column-major"' if column_major else ""
    matrices = "[matrices]\n" + "\n".join(f'{n} = "model/{n}"' for n in "ABCD")
    return layout_text("hdf5", "group", f'groups = "cases/{{id}}"\n{order}', matrices, "@V", "m",
                       "@gear", ids="{id}")  # fmt: skip


def npz_group(folder, models):
    arrays = {}
    for k, matrices in models.rows():
        about = {"V": models.speed[k], "m": models.mass[k], "gear": models.gear[k]}
        arrays |= {f"{models.ids[k]}/{n}": v for n, v in {**matrices, **about}.items()}
    np.savez(folder / "a.npz", **arrays)
    return layout_text("npz", "group", 'groups = "{id}"', "", "V", "m", "gear", ids=None)


FILE_NAME = "{id}_V{speed}_M{mass}_{gear}"


def file_name(models, k):
    """Name of the file of a point, which `FILE_NAME` matches."""
    return f"{models.ids[k]}_V{models.speed[k]:g}_M{models.mass[k]:g}_{models.gear[k]}"


def hdf5_file(folder, models):
    for k, matrices in models.rows():
        with h5py.File(folder / f"{file_name(models, k)}.h5", "w") as file:
            for name, matrix in matrices.items():
                file[name] = matrix
    return layout_text("hdf5", "file", f'files = "{FILE_NAME}.h5"', "", "{speed}", "{mass}",
                       "{gear}", ids=None)  # fmt: skip


def npz_file(folder, models):
    for k, matrices in models.rows():
        np.savez(folder / f"{file_name(models, k)}.npz", **matrices)
    pattern = r"(?P<id>p\d+)_V(?P<speed>[0-9.]+)_M(?P<mass>[0-9.]+)_(?P<gear>in|out)\.npz"
    return layout_text("npz", "file", f"files_regex = '{pattern}'", "", "{speed}", "{mass}",
                       "{gear}", ids="{id}")  # fmt: skip


def row_frame(models, named=False, zero_based=False):
    columns = {"op": models.ids}
    for name, stack in models.matrices.items():
        rows, cols = AXES[name]
        for i in range(stack.shape[1]):
            for j in range(stack.shape[2]):
                first = 0 if zero_based else 1
                labels = (rows[i], cols[j]) if named else (i + first, j + first)
                columns[f"{name}[{labels[0]},{labels[1]}]"] = stack[:, i, j]
    columns |= {"V": models.speed, "m": models.mass, "gear": models.gear}
    return pd.DataFrame(columns)


ROW_MATRICES = "[matrices]\n" + "\n".join(f'{n} = "{n}[{{row}},{{column}}]"' for n in "ABCD")


def row_layout(format_, named, body=""):
    return layout_text(format_, "row", body, ROW_MATRICES, "V", "m", "gear", "op",
                       names="" if named else NAMES)  # fmt: skip


def csv_row(folder, models, named=False, zero_based=False, **options):
    frame = row_frame(models, named, zero_based)
    frame.to_csv(folder / "a.csv", index=False, **options)
    body = "".join(f'{k} = "{options[o]}"\n' for k, o in (("separator", "sep"),
                                                          ("decimal", "decimal"))
                   if o in options)  # fmt: skip
    return row_layout("csv", named, body)


def parquet_row(folder, models, named=False):
    row_frame(models, named).to_parquet(folder / "a.parquet", index=False, row_group_size=70)
    return row_layout("parquet", named)


def parquet_lists(folder, models, flat=True, column_major=False):
    frame = pd.DataFrame({"op": models.ids, "V": models.speed, "m": models.mass,
                          "gear": models.gear})  # fmt: skip
    for name, stack in models.matrices.items():
        turned = oriented(stack, False, column_major)
        frame[name] = [m.ravel().tolist() if flat else m.tolist() for m in turned]
    frame.to_parquet(folder / "a.parquet", index=False)
    order = 'order = "column-major"' if column_major else ""
    return layout_text("parquet", "row", order, "", "V", "m", "gear", "op")


def long_frame(models, named=False):
    parts = []
    for name, stack in models.matrices.items():
        rows, cols = AXES[name]
        k, i, j = (a.ravel() for a in np.indices(stack.shape))
        parts.append(pd.DataFrame({
            "op": models.ids[k], "V": models.speed[k], "m": models.mass[k],
            "gear": models.gear[k], "matrix": name,
            "row": np.array(rows)[i] if named else i + 1,
            "column": np.array(cols)[j] if named else j + 1,
            "value": stack.ravel(),
        }))  # fmt: skip
    return pd.concat(parts, ignore_index=True)


LONG = """[long]
point = "op"
matrix = "matrix"
row = "row"
column = "column"
value = "value"
"""


def long_layout(format_, named):
    return layout_text(format_, "long rows", "", LONG, "V", "m", "gear", ids=None,
                       names="" if named else NAMES)  # fmt: skip


def parquet_long(folder, models, named=False, shuffled=False):
    frame = long_frame(models, named)
    if shuffled:
        frame = frame.sample(frac=1.0, random_state=1)
        # Points come in their order; their rows lie all over the file.
        first = frame.drop_duplicates("op").index
        heads = frame.loc[first].sort_values("op")
        frame = pd.concat([heads, frame.drop(index=first)])
    frame.to_parquet(folder / "a.parquet", index=False, row_group_size=2000)
    return long_layout("parquet", named)


def csv_long(folder, models, named=False):
    long_frame(models, named).to_csv(folder / "a.csv", index=False)
    return long_layout("csv", named)


def json_lines(folder, models, flat=False, column_major=False):
    with open(folder / "a.jsonl", "w") as file:
        for k, matrices in models.rows():
            turned = {n: m.T if column_major else m for n, m in matrices.items()}
            file.write(json.dumps({
                "op": models.ids[k],
                "at": {"V": models.speed[k], "m": models.mass[k]},
                "gear": models.gear[k],
                "model": {n: m.ravel().tolist() if flat else m.tolist()
                          for n, m in turned.items()},
            }) + "\n")  # fmt: skip
    order = 'order = "column-major"' if column_major else ""
    matrices = "[matrices]\n" + "\n".join(f'{n} = "model/{n}"' for n in "ABCD")
    return layout_text("json-lines", "row", order, matrices, "at/V", "at/m", "gear", "op")


def matrix_market(folder, models, sparse=False, precision=17):
    for k, matrices in models.rows():
        for name, matrix in matrices.items():
            content = scipy.sparse.coo_array(matrix) if sparse else matrix
            scipy.io.mmwrite(folder / f"{name}_{file_name(models, k)}.mtx", content,
                             precision=precision, symmetry="general")  # fmt: skip
    return layout_text("matrix-market", "file", f'files = "{{matrix}}_{FILE_NAME}.mtx"', "",
                       "{speed}", "{mass}", "{gear}", ids=None)  # fmt: skip


def plain_matrices(folder, models, delimiter=" "):
    for k, matrices in models.rows():
        inner = folder / file_name(models, k)
        inner.mkdir()
        for name, matrix in matrices.items():
            np.savetxt(inner / f"{name}.txt", matrix, fmt="%.17g", delimiter=delimiter)
    return layout_text("csv", "file", f'files = "{FILE_NAME}/{{matrix}}.txt"', "", "{speed}",
                       "{mass}", "{gear}", ids=None)  # fmt: skip
