"""Write the suspension export: NPZ, the point axis last, one C for all points.

A quarter of a car: body M on spring k and damper c, wheel m on the tyre kt, force u between them.
M x'' = -k (x - w) - c (x' - w') + u, m w'' = k (x - w) + c (x' - w') - kt w - u.
"""

from pathlib import Path

import numpy as np

SPRING, DAMPER, WHEEL = 18e3, 900.0, 42.0  # N/m, N s/m, kg


def main() -> None:
    """Write ``suspension.npz``."""
    body, tyre = (a.ravel() for a in np.meshgrid(np.arange(280.0, 521.0, 20.0),
                                                 np.arange(140e3, 221e3, 20e3)))  # fmt: skip
    A, B = np.zeros((4, 4, body.size)), np.zeros((4, 1, body.size))
    A[0, 1] = A[2, 3] = 1.0
    A[1, 0], A[1, 1] = -SPRING / body, -DAMPER / body
    A[1, 2], A[1, 3] = SPRING / body, DAMPER / body
    A[3, 0], A[3, 1] = SPRING / WHEEL, DAMPER / WHEEL
    A[3, 2], A[3, 3] = -(SPRING + tyre) / WHEEL, -DAMPER / WHEEL
    B[1, 0], B[3, 0] = 1 / body, -1 / WHEEL
    np.savez_compressed(
        Path(__file__).with_name("suspension.npz"),
        A_matrix=A,
        B_matrix=B,
        C_matrix=np.array([[1.0, 0, -1, 0], [0, 1, 0, 0]]),
        body_mass=body,
        units_body_mass="kg",
        tyre_stiffness=tyre,
        units_tyre_stiffness="N/m",
        state_names=np.array(["body", "body_rate", "wheel", "wheel_rate"]),
        input_names=np.array(["force"]),
        output_names=np.array(["travel", "body_velocity"]),
    )


if __name__ == "__main__":
    main()
