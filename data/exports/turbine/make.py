"""Write the turbine export: a Parquet table, an entry a row, rows and columns by name.

Drive train of a wind turbine: rotor J1, generator J2 (on the slow side), shaft k and c, blade pitch
with a lag T. The wind's torque falls by a with rotor speed and by b with pitch; both grow with the
wind. Above 14 m/s a second, faster pitch drive is on, with a state more.
"""

from pathlib import Path

import numpy as np
import pandas as pd

ROTOR, GENERATOR, SHAFT, DAMPING = 1.2e7, 2.6e6, 1.1e8, 1.4e6  # kg m^2, N m/rad, N m s/rad
STATES = ["rotor", "twist", "generator", "pitch"]


def model(wind: float, density: float) -> tuple[np.ndarray, np.ndarray]:
    """Matrices at a wind [m/s] and an air density [kg/m^3]."""
    a, b = 2.0e5 * density * wind, 3.2e6 * density * (wind - 8)
    A = np.array([
        [-(a + DAMPING) / ROTOR, -SHAFT / ROTOR, DAMPING / ROTOR, -b / ROTOR],
        [1, 0, -1, 0],
        [DAMPING / GENERATOR, SHAFT / GENERATOR, -DAMPING / GENERATOR, 0],
        [0, 0, 0, -1 / 0.3],
    ])  # fmt: skip
    return A, np.array([[0], [0], [0], [1 / 0.3]])


def main() -> None:
    """Write ``turbine.parquet``."""
    rows = []
    for wind in np.arange(10.0, 25.0, 1.0):
        for density in (1.0, 1.1, 1.225):
            A, B = model(wind, density)
            states = STATES
            if wind > 14:
                A = np.pad(A, (0, 1))
                A[3, 4], A[4, 4] = 1 / 0.3, -20.0
                B, states = np.array([[0.0], [0], [0], [0], [20.0]]), [*STATES, "drive"]
            for name, matrix, columns in (("A", A, states), ("B", B, ["pitch_command"])):
                rows += [
                    (f"W{wind:g}D{density:g}", wind, density, name, row, column, matrix[i, j])
                    for i, row in enumerate(states)
                    for j, column in enumerate(columns)
                ]
    names = ["case", "wind [m/s]", "density [kg/m3]", "matrix", "row", "column", "value"]
    frame = pd.DataFrame(rows, columns=names)
    frame.to_parquet(Path(__file__).with_name("turbine.parquet"), index=False)


if __name__ == "__main__":
    main()
