"""Write the converter export: JSON lines, an object a point, matrices as nested lists.

A buck converter in continuous conduction, averaged over a switching period: inductor L with
resistance r, capacitor C with load R, duty cycle d as input at supply voltage E:
L i' = -r i - v + E d, C v' = i - v / R.
"""

import json
from pathlib import Path

import numpy as np

INDUCTANCE, CAPACITANCE, RESISTANCE = 47e-6, 220e-6, 0.03  # H, F, ohm


def main() -> None:
    """Write ``converter.jsonl``."""
    lines = []
    for supply in np.arange(9.0, 36.1, 3.0):
        for load in (0.5, 1.0, 2.0, 5.0, 10.0, 20.0):
            A = [
                [-RESISTANCE / INDUCTANCE, -1 / INDUCTANCE],
                [1 / CAPACITANCE, -1 / (load * CAPACITANCE)],
            ]
            record = {
                "id": f"E{supply:g}-R{load:g}",
                "at": {"supply [V]": supply, "load [ohm]": load},
                "cooling": "fan" if load < 2 else "still air",
                "states": ["current", "voltage"],
                "inputs": ["duty"],
                "outputs": ["voltage_measured"],
                "model": {"A": A, "B": [[supply / INDUCTANCE], [0.0]], "C": [[0.0, 1.0]],
                          "D": [[0.0]]},
            }  # fmt: skip
            lines.append(json.dumps(record) + "\n")
    Path(__file__).with_name("converter.jsonl").write_text("".join(lines))


if __name__ == "__main__":
    main()
