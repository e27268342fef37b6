"""Write the bearing export: HDF5, a group a point, matrices as a column-major program leaves them.

One axis of a magnetic bearing. At bias current i0 and gap g a pair of magnets of constant k pulls
with stiffnesses ks = 4 k i0^2 / g^3 (against the centre) and ki = 4 k i0 / g^2; the coil has
inductance L and resistance R: m x'' = ks x + ki i, L i' = -R i + u.
"""

from pathlib import Path

import h5py
import numpy as np

MASS, MAGNET, INDUCTANCE, RESISTANCE = 2.4, 6.0e-6, 4.0e-3, 0.8  # kg, N m^2/A^2, H, ohm


def main() -> None:
    """Write ``bearing.h5``."""
    with h5py.File(Path(__file__).with_name("bearing.h5"), "w") as file:
        file.attrs["states"] = ["position", "position_rate", "current"]
        file.attrs["inputs"] = ["voltage"]
        file.attrs["outputs"] = ["position_measured"]
        biases, gaps = np.arange(1.0, 3.1, 0.25), np.arange(0.3, 0.71, 0.1)  # A, mm
        cases = [(bias, gap) for bias in biases for gap in gaps]
        for number, (bias, gap) in enumerate(cases, start=1):
            g = gap * 1e-3
            stiffness, per_ampere = 4 * MAGNET * bias**2 / g**3, 4 * MAGNET * bias / g**2
            force = [stiffness / MASS, 0, per_ampere / MASS]
            A = [[0, 1, 0], force, [0, 0, -RESISTANCE / INDUCTANCE]]
            group = file.create_group(f"cases/case{number:03d}")
            group["A"] = np.array(A).T
            group["B"] = np.array([[0], [0], [1 / INDUCTANCE]]).T
            group["C"] = np.array([[1, 0, 0]]).T
            group["D"] = np.array([[0.0]]).T
            group.attrs["bias_current"], group.attrs["gap"] = bias, gap


if __name__ == "__main__":
    main()
