"""What the temperature of the box does to a diode detector.

One rule: only the diode changes. Scale goes with T, the wave per root watt in units of n Vt with 1/T, the load
term with Is(T)/T, and Is(T) = Is0 (T/T0)^(XTI/n) exp[(T/T0 - 1) Eg/(n Vt(T))].
Source: the SPICE diode model (Eg and XTI of Schottky parts: Hewlett-Packard's RF diode SPICE page; the others from
memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .detector import thermal_v
from .laws import DiodeLaw, Law

__all__ = ["DIODES", "DiodeKind", "saturation_ratio", "warmed"]

_ZERO_C = 273.15


@dataclass(frozen=True, slots=True)
class DiodeKind:
    """Band gap [eV], temperature exponent and ideality of a kind of diode."""

    eg_ev: float
    xti: float
    n: float


#: name in the bridge file -> temperature behaviour.
DIODES: dict[str, DiodeKind] = {
    "schottky": DiodeKind(0.69, 2.0, 1.07),
    "germanium": DiodeKind(0.67, 3.0, 1.3),
    "silicon": DiodeKind(1.11, 3.0, 1.75),
}


def saturation_ratio(kind: DiodeKind, from_c: float, to_c: float) -> float:
    """Saturation current at `to_c` over that at `from_c` [degrees Celsius]."""
    t0, t = from_c + _ZERO_C, to_c + _ZERO_C
    power = (t / t0) ** (kind.xti / kind.n)
    return float(power * np.exp((t / t0 - 1.0) * kind.eg_ev / (kind.n * thermal_v(t))))


def warmed(law: Law, kind: DiodeKind, from_c: float, to_c: float) -> tuple[Law, float]:
    """The law at another temperature [degrees Celsius], and the factor on the gain; laws of no diode do not change."""
    if not isinstance(law, DiodeLaw):
        return law, 1.0
    warm = (to_c + _ZERO_C) / (from_c + _ZERO_C)
    load_term = law.load_term * saturation_ratio(kind, from_c, to_c) / warm
    return replace(law, scale=law.scale * warm, load_term=load_term), 1.0 / warm
