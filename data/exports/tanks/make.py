"""Write the tanks export: Matrix Market files, one a matrix, coordinates in their names.

Three tanks in a row, each draining into the next through a hole: area S, hole a, level h; near the
steady levels that a flow q gives, h_k' = (q_k-1 - q_k) / S with dq/dh = a sqrt(g / (2 h)).
"""

from pathlib import Path

import numpy as np
from scipy.io import mmwrite
from scipy.sparse import coo_array

GRAVITY = 9.81  # m/s^2


def main() -> None:
    """Write the files below ``files/``."""
    folder = Path(__file__).with_name("files")
    folder.mkdir(exist_ok=True)
    for flow in (20, 40, 60, 80, 100):  # l/s
        for area in (0.8, 1.2, 1.6, 2.0):  # m^2
            q, hole = flow * 1e-3, 0.012
            level = (q / hole) ** 2 / (2 * GRAVITY)
            rate = hole * np.sqrt(GRAVITY / (2 * level)) / area
            A = np.array([[-rate, 0, 0], [rate, -rate, 0], [0, rate, -rate]])
            for name, matrix in (("A", A), ("B", np.array([[1 / area], [0], [0]])),
                                 ("C", np.array([[0.0, 0, 1]]))):  # fmt: skip
                path = folder / f"{name}_flow{flow}_area{area:g}.mtx"
                mmwrite(path, coo_array(matrix), precision=8, symmetry="general")


if __name__ == "__main__":
    main()
