"""Write the crane export: a CSV table, a point a row, a column an entry, six digits.

A trolley of mass M carries a load of mass m on a rope of length l; force u on the trolley with
viscous friction c. Small swing s: M x'' = u - c x' + m g s, l s'' = -x'' - g s.
"""

from pathlib import Path

import numpy as np

TROLLEY, FRICTION, GRAVITY = 1200.0, 300.0, 9.81  # kg, N s/m, m/s^2


def main() -> None:
    """Write ``crane.csv``; one entry of one point is missing, as it happens."""
    header = ["point", "rope [m]", "load [kg]"]
    header += [f"A({i},{j})" for i in range(1, 5) for j in range(1, 5)]
    header += [f"B({i},1)" for i in range(1, 5)]
    rows = [";".join(header)]
    for rope in np.arange(2.0, 12.1, 1.0):
        for load in (0.0, 250.0, 500.0, 1000.0, 2000.0, 3000.0):
            x = np.array([0, -FRICTION / TROLLEY, load * GRAVITY / TROLLEY, 0])
            swing = (-x - np.array([0, 0, GRAVITY, 0])) / rope
            A = np.array([[0, 1, 0, 0], x, [0, 0, 0, 1], swing])
            B = np.array([0, 1 / TROLLEY, 0, -1 / (TROLLEY * rope)])
            cells = [f"{value:.6g}" for value in (rope, load, *A.ravel(), *B)]
            if (rope, load) == (7.0, 500.0):
                cells[8] = ""
            rows.append(";".join([f"R{rope:g}L{load:g}", *cells]))
    Path(__file__).with_name("crane.csv").write_text("\n".join(rows) + "\n")


if __name__ == "__main__":
    main()
