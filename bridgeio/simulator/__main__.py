"""`python -m bridgeio.simulator`: the simulated bridge's bench sheet on standard output.

`bridgewright fit` of it gives `sim.bridge.toml`, by which `sim:` is read; a test holds the two together.
"""

import sys

from bridgeio.sheet import sheet_of
from bridgeio.simulator.bench import RATINGS, bench_steps
from bridgeio.simulator.board import DEVICE_ID, FULL_SCALE, NAME

if __name__ == "__main__":
    sys.stdout.write(
        sheet_of(
            name=NAME,
            full_scale=FULL_SCALE,
            diode="schottky",
            ratings=RATINGS,
            steps=bench_steps(),
            comment="Bench sheet of the simulated bridge (sim:), made by `python -m bridgeio.simulator`, not measured.",
            device_id=DEVICE_ID,
        )
    )
