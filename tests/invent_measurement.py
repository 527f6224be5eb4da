"""Make an INVENTED measurement of a predicted breadboard, to try `scanward compare` on.

    python tests/invent_measurement.py RESULT FOLDER

RESULT is the folder of a run with [breadboard] and [[tolerance]] tables, such as `strip_panel_breadboard`. Planted:
every toleranced parameter off by two thirds of its tolerance, a cable of its own at each port (40 to 200 ps, 0.1 to 0.5
dB), the cables of the first two ports exchanged, noise as stated. What is planted is printed, as is the command that
looks for it.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from scanward.cases.bench_store import prediction_of
from scanward.cases.invented_measurement import Plant, write_invented, write_invented_pattern
from scanward.cases.uncertainty import Uncertainty

STATED = ("0.1 dB", "0.7 deg", "-75 dB")  # magnitude, phase, noise floor


def plant_for(prediction, *, seed: int = 4) -> Plant:
    """What is planted in the invented data of a prediction."""
    random = np.random.default_rng(seed)
    count = len(prediction.ports)
    moves = {one.name: 2 / 3 * one.tolerance for one in prediction.sensitivities}
    return Plant(
        moves, None, random.uniform(40e-12, 200e-12, count), random.uniform(0.1, 0.5, count), ((0, 1),), None, seed
    )


def write_demo(result: Path, folder: Path) -> tuple[Plant, list[str]]:
    """Write the invented files; what is planted, and the arguments of the comparison."""
    prediction = prediction_of(Path(result))
    plant = plant_for(prediction)
    uncertainty = Uncertainty.from_decibel(0.1, np.radians(0.7), -75.0)
    files, port_map = write_invented(Path(folder), prediction, uncertainty, plant)
    pattern = write_invented_pattern(Path(folder) / "invented-pattern.csv", prediction, 0.2, -45.0)
    measured = [part for file in files for part in ("--measured", str(file))]
    names = ("--magnitude-uncertainty", "--phase-uncertainty", "--noise-floor")
    stated = [part for pair in zip(names, STATED, strict=True) for part in pair]
    patterns = ["--pattern", str(pattern), "--pattern-uncertainty", "0.3 dB", "--stray-level", "-45 dB"]
    return plant, ["compare", str(result), *measured, "--map", str(port_map), *stated, *patterns]


if __name__ == "__main__":
    if len(sys.argv) != 3:
        sys.exit(__doc__)
    planted, arguments = write_demo(Path(sys.argv[1]), Path(sys.argv[2]))
    print("planted:", dict(planted.moves), "exchanged ports:", planted.swapped)
    print("scanward", " ".join(f'"{a}"' if " " in a else a for a in arguments))
