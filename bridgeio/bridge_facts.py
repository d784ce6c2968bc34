"""What a bridge file says of its bridge, as sections of words and tables, for a report in any form.

One rule: every figure comes from the file; nothing is fitted anew, and what the file cannot tell is not told. Text
from outside (names, notes) is handed on raw.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from calibration.bench import BenchStep, step_power_w
from calibration.bridge import Band, Bridge
from calibration.laws import DiodeLaw, Law, LogLaw, TableLaw
from calibration.meter import Meter
from calibration.readings import Readings
from calibration.reflection import rho_from_swr, swr_from_rho
from calibration.units import wave_db
from calibration.warmth import DIODES

from .fitted_file import FittedFile

__all__ = ["SWRS", "Section", "interval_grid", "middle_power_w", "power_sds_db", "sections", "show_powers_w"]

Array = npt.NDArray[np.float64]

#: The SWRs at which intervals are told.
SWRS = (1.1, 1.2, 1.5, 2.0, 3.0, 5.0)
#: Powers [W] at which they are told, where the bench has been.
_POWERS_W = (0.1, 1.0, 10.0, 100.0, 1000.0)
_MOST_POWERS = 3
#: Where sd of powers are told.
_MIDDLE_SWR = 2.0
#: d ln of a power to decibels.
_DB = 10.0 / math.log(10.0)


@dataclass(frozen=True, slots=True)
class Section:
    """A part of a report: title, sentences, a table (header may be empty), and the name of its picture, if any."""

    title: str
    words: tuple[str, ...] = ()
    header: tuple[str, ...] = ()
    rows: tuple[tuple[str, ...], ...] = ()
    picture: str | None = None


def sections(fitted: FittedFile) -> list[Section]:
    """All sections, in the order of a report."""
    return [make(fitted) for make in _SECTIONS]


def show_powers_w(fitted: FittedFile) -> list[float]:
    """The powers [W] at which intervals are told: up to three decades within those of the power steps."""
    known = [step_power_w(s, fitted.bridge.z0_ohm) or math.nan for s in fitted.file.steps if s.kind == "power"]
    if not known:
        return [10.0]
    least, most = min(known) / 1.3, max(known) * 1.3
    return [p for p in _POWERS_W if least <= p <= most][-_MOST_POWERS:] or [float(f"{max(known):.2g}")]


def middle_power_w(fitted: FittedFile) -> float:
    """The middle one of those powers [W]."""
    powers = show_powers_w(fitted)
    return powers[len(powers) // 2]


def interval_grid(meter: Meter, band: Band, power_w: float, swrs: npt.ArrayLike) -> Readings:
    """Readings [n] of single counts at `swrs` [n], where the leaks stand across the load: M is rho^2 itself."""
    bridge = meter.bridge
    rho = rho_from_swr(swrs)
    forward = bridge.forward_law.counts(np.full(rho.shape, power_w * band.gain_forward**2))
    reflected = bridge.reflected_law.counts(power_w * rho**2 * band.gain_reflected**2)
    return meter.read(forward, reflected, frequency_hz=band.frequency_hz)


def power_sds_db(bridge: Bridge, band: Band, power_w: float, swr: float) -> tuple[float, float, float]:
    """Sd [dB] of forward power, of reflected power and of their ratio at a power [W] and SWR, by the fit's covariance.

    What a gain and its law have in common cancels in the powers they give together.
    """
    laws = (bridge.forward_law, bridge.reflected_law)
    waves = (band.gain_forward, band.gain_reflected * float(rho_from_swr(swr)))
    sizes = [len(law.parameters) for law in laws]
    ways = np.zeros((2, 2 + sum(sizes)))  # d ln power by (ln gains, forward law, reflected law)
    for side, (law, wave) in enumerate(zip(laws, waves, strict=True)):
        square = power_w * wave**2
        at = 2 + side * sizes[0]
        ways[side, side] = -2.0
        ways[side, at : at + sizes[side]] = law.sensitivity(law.counts(square)) / square
    forward, reflected, ratio = (
        _DB * math.sqrt(max(float(way @ band.covariance @ way), 0.0)) for way in (*ways, ways[1] - ways[0])
    )
    return forward, reflected, ratio


def _bridge(fitted: FittedFile) -> Section:
    file, bridge, fit = fitted.file, fitted.bridge, fitted.fit
    rows = [("name", file.name), ("file", file.source), ("reference impedance", f"{bridge.z0_ohm:g} ohm")]
    rows += [("detectors", f"{file.detector}{_diode(fitted)}"), ("full scale", f"{bridge.full_scale} counts")]
    if file.device_id is not None:
        rows.append(("made for board", f"{file.device_id:08X}"))
    if file.max_w is not None:
        rows.append(("stands", f"{file.max_w:g} W"))
    spread = f" (the bench spans {bridge.temperature_span_c:.1f} K)" if bridge.temperature_span_c else ""
    rows += [("box temperature", f"{bridge.temperature_c:.1f} C{spread}")]
    rows += [("fitted", f"{fit.date}, by {fit.program}"), ("fit id", f"{file.fit_id or 0:04X}")]
    if file.outdated:
        words = [f"Caution: {file.outdated}."]
    elif file.fit_of is None:
        words = ["The fit does not tell which steps it was made from."]
    else:
        words = [f"The fit is that of the {len(file.steps)} steps of the file."]
    return Section("Bridge", tuple(words), rows=tuple(rows))


def _diode(fitted: FittedFile) -> str:
    """Behaviour of the diode as named in the file, or by its band gap where the builder knows better."""
    diode = fitted.bridge.diode
    if diode is None:
        return ""
    named = next((name for name, kind in DIODES.items() if kind == diode), f"refined, {diode.eg_ev:g} eV")
    return f", {named}"


def _laws(fitted: FittedFile) -> Section:
    rows: list[tuple[str, ...]] = []
    at = 2
    for side, law in (("forward", fitted.bridge.forward_law), ("reflected", fitted.bridge.reflected_law)):
        variances = np.diag(fitted.bridge.bands[0].covariance)[at : at + len(law.parameters)]
        rows += [(side, *row) for row in _law_rows(law, np.sqrt(np.maximum(variances, 0.0)))]
        at += len(law.parameters)
    words = (
        "What turns counts into powers. Scale and load term trade off: each alone is known less well than the powers "
        "they give together.",
    )
    header = ("detector", "parameter", "value", "sd")
    return Section("Detector laws", words if fitted.file.detector == "diode" else (), header, tuple(rows), "law")


def _law_rows(law: Law, sds: Array) -> Iterator[tuple[str, str, str]]:
    """Parameter, value and sd; the sd of a logarithm is a part of the value."""
    yield "dark count", f"{law.offset:.2f} counts", f"{sds[0]:.2f} counts"
    if isinstance(law, DiodeLaw):
        yield "scale", f"{law.scale:.3f} counts", f"{100.0 * sds[1]:.1f} %"
        yield "load term", f"{law.load_term:.3f}", f"{100.0 * sds[2]:.1f} %"
    elif isinstance(law, LogLaw):
        yield "slope", f"{law.slope_per_db:.4f} counts/dB", f"{100.0 * sds[1]:.2f} %"
        yield "correction", f"at {len(law.knots)} powers", f"{law.open_db:.2f} dB"
    elif isinstance(law, TableLaw):
        lowest, highest = law.knots[[0, -1]]
        yield "table", f"{len(law.knots)} powers, {lowest:.1f}-{highest:.1f} counts", ""


def _leakage(fitted: FittedFile) -> Section:
    rows = []
    for band in fitted.bridge.bands:
        seen = float(swr_from_rho(min(band.directivity_limit, 1.0)))
        rows.append(
            (
                _megahertz(band),
                _loss(band.directivity),
                _loss(band.directivity_limit),
                f"{seen:.3f}",
                _loss(band.forward_leak),
                _loss(band.forward_leak_limit),
                f"{band.angle_cosine:+.2f}" if band.angle_cosine > -1.0 else "any",
            )
        )
    dummy = fitted.file.ratings.dummy_return_loss_db
    words = (
        "Directivity is also the return loss that a perfect dummy load would show: best value, and 95 % limit. "
        f"The limit allows for the dummy load used (at least {dummy:g} dB) unless known loads bound it better.",
    )
    header = ("MHz", "directivity dB", "at least dB", "dummy reads to", "fwd leak dB", "at least dB", "angle")
    return Section("Directivity and leakage", words, header, tuple(rows), "leaks")


def _coupling(fitted: FittedFile) -> Section:
    bands = fitted.bridge.bands
    middle, power = bands[len(bands) // 2], middle_power_w(fitted)
    rows = []
    for band in bands:
        sds = [f"{sd:.3f}" for sd in power_sds_db(fitted.bridge, band, power, _MIDDLE_SWR)]
        balance = float(wave_db(band.gain_reflected / band.gain_forward))
        cells = [_megahertz(band)]
        pairs = ((band.gain_forward, middle.gain_forward), (band.gain_reflected, middle.gain_reflected))
        for sd, (own, there) in zip(sds[:2], pairs, strict=True):
            cells += [f"{own:.4g}", f"{float(wave_db(own / there)):+.2f}", sd]
        rows.append((*cells, f"{balance:+.2f}", sds[2]))
    words = (
        "Gain is the wave at the detector, in units of its law, per root watt; dB are against "
        f"{_megahertz(middle)} MHz. Balance is reflected against forward. As gain and law trade off, sd is that of the "
        f"powers they give together, and of their ratio, at {power:g} W and SWR {_MIDDLE_SWR:g}, without the "
        "wattmeter's own accuracy.",
    )
    header = ("MHz", "forward", "dB", "sd dB", "reflected", "dB", "sd dB", "balance dB", "sd dB")
    return Section("Coupling", words, header, tuple(rows), "gains")


def _intervals(fitted: FittedFile) -> Section:
    meter, rows = Meter(fitted.bridge), []
    for band in fitted.bridge.bands:
        for power in show_powers_w(fitted):
            found = interval_grid(meter, band, power, SWRS)
            pairs = zip(found.swr_low.tolist(), found.swr_high.tolist(), found.has("clipped").tolist(), strict=True)
            rows.append(
                (_megahertz(band), f"{power:g}", *("clipped" if c else _swrs(low, high) for low, high, c in pairs))
            )
    words = ("Where a single reading's 95 % interval lies when the ratio read is that of this SWR.",)
    header = ("MHz", "W", *(f"SWR {swr:g}" for swr in SWRS))
    return Section("SWR intervals", words, header, tuple(rows), "intervals")


def _steps(fitted: FittedFile) -> Section:
    told: dict[int, dict[str, float]] = {}
    for number, what, off in fitted.fit.residuals:
        told.setdefault(number, {})[what] = off
    rows = [
        (
            str(number),
            step.kind,
            "" if step.frequency_hz is None else f"{step.frequency_hz / 1e6:.3f}",
            _connected(step, fitted.bridge.z0_ohm),
            f"{step.forward:.1f}",
            f"{step.reflected:.1f}",
            *_offs(told.get(number, {})),
        )
        for number, step in enumerate(fitted.file.steps, 1)
    ]
    sigmas = [off for *_, off in fitted.fit.residuals]
    mean = float(np.mean(np.square(sigmas))) if sigmas else math.nan
    words = (
        "What was measured, and by how many sd it lies off the fit: forward or power (wattmeter), and reflected. "
        f"{mean:.2f} per residual in units of expected variance; 1 is right.",
    )
    header = ("step", "kind", "MHz", "connected", "forward", "reflected", "off", "off")
    return Section("Steps", words, header, tuple(rows), "residuals")


def _grounds(fitted: FittedFile) -> Section:
    ratings, fit = fitted.file.ratings, fitted.fit
    of = "of reading"
    if ratings.reference_full_scale_w is not None:
        of = f"of {ratings.reference_full_scale_w:g} W full scale"
    match = fitted.file.match_return_loss_db
    rows = [
        ("wattmeter, 95 %", f"{ratings.reference_pct:g} % {of}: in every power, in no SWR"),
        ("its scatter found", f"{fit.scatter_pct:.2f} % from step to step"),
        ("dummy load", f"return loss at least {ratings.dummy_return_loss_db:g} dB"),
        ("known loads", f"within {ratings.resistor_pct:g} % unless a step says otherwise"),
        ("bridge's own match", "not told" if match is None else f"return loss at least {match:g} dB"),
        ("steps", ", ".join(_counted(fitted.file.steps))),
    ]
    notes = tuple(f"The fit noted: {note}." for note in _gathered(fit.notes))
    return Section("What it rests on", notes, rows=tuple(rows))


def _gathered(notes: Sequence[str]) -> Iterator[str]:
    """The notes, one for all bands of which it is noted: "1.900 MHz, 7.150 MHz: ..."."""
    bands: dict[str, list[str]] = {}
    for note in notes:
        band, colon, rest = note.partition(" MHz: ")
        bands.setdefault(rest if colon else note, []).append(band if colon else "")
    for rest, where in bands.items():
        yield f"{', '.join(where)} MHz: {rest}" if where[0] else rest


def _counted(steps: Sequence[BenchStep]) -> Iterator[str]:
    kinds = [step.kind for step in steps]
    for kind in dict.fromkeys(kinds):
        yield f"{kinds.count(kind)} {kind}"


def _connected(step: BenchStep, z0_ohm: float) -> str:
    if step.kind == "load":
        return f"{step.load} {step.line_deg:g} deg" if step.line_deg else step.load or ""
    watts = step_power_w(step, z0_ohm) or math.nan
    return "" if math.isnan(watts) else f"{watts:.4g} W"


def _offs(told: dict[str, float]) -> tuple[str, ...]:
    first = told.get("power", told.get("forward"))
    second = told.get("reflected")
    # + 0.0 turns the -0.0 that rounding makes into 0.0.
    return tuple("" if off is None else f"{round(off, 1) + 0.0:+.1f}" for off in (first, second))


def _megahertz(band: Band) -> str:
    return f"{band.frequency_hz / 1e6:.3f}"


def _loss(wave: float) -> str:
    """A leak as decibels down; beyond 60 dB nobody can tell."""
    return f"{-float(wave_db(max(wave, 1e-3))):.1f}"


def _swrs(low: float, high: float) -> str:
    """An interval of SWR, short enough for a column."""
    if math.isnan(low):
        return "-"
    if not high < 1000.0:
        return f"over {low:.1f}"
    return f"{low:.2f}-{high:.2f}" if high < 10.0 else f"{low:.1f}-{high:.0f}"


_SECTIONS = (_bridge, _laws, _leakage, _coupling, _intervals, _steps, _grounds)
