"""Known loads for a bridge to be judged by, made from the circuit-simulated bench with its truth."""

import numpy as np

from bridgeio.sheet import sheet_of
from calibration.bench import BenchRatings, BenchStep
from tests import shed


def load_steps(bits: int = 12, rows: slice = slice(None)) -> list[BenchStep]:
    """The random loads as load steps with their true impedance and no tolerance."""
    loads = shed.table("shed_loads")
    gamma = loads["rho"] * np.exp(1j * np.radians(loads["gamma_deg"]))
    ohm = 50.0 * (1.0 + gamma) / (1.0 - gamma)
    return [
        BenchStep(
            "load",
            forward=float(loads[f"forward_{bits}"][at]),
            reflected=float(loads[f"reflected_{bits}"][at]),
            frequency_hz=float(loads["frequency_hz"][at]),
            load=f"{ohm[at].real:.6f}{ohm[at].imag:+.6f}j",
            load_pct=0.0,
            load_nh=0.0,
            load_pf=0.0,
            samples=50,
        )
        for at in range(len(ohm))[rows]
    ]


def power_steps() -> list[BenchStep]:
    """Power steps of the 12-bit bridge that no fit has seen: the other converter's sums of sixteen, as means."""
    return [
        BenchStep(
            "power",
            forward=step.forward / 16.0,
            reflected=step.reflected / 16.0,
            frequency_hz=step.frequency_hz,
            power_w=step.power_w,
            samples=step.samples,
        )
        for step in shed.sheet(16).steps
        if step.kind == "power"
    ]


def sheet_text(steps: list[BenchStep], full_scale: int = 4095, resistor_pct: float = 1.0) -> str:
    """A bench sheet of `steps`."""
    return sheet_of(
        name="second look",
        full_scale=full_scale,
        diode=None,
        ratings=BenchRatings(resistor_pct=resistor_pct),
        steps=steps,
        comment="Known loads measured after the fit.",
    )
