"""What a bench left open, in sentences: which bound stands in, and what that costs at SWR 1.5.

One rule: the dummy load comes first, since it bounds what any step can say of the directivity; then what is missing,
then what does not agree.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from .bridge import Band, Bridge
from .directivity import NORMAL_DEVIATE, rho_interval
from .fit_model import BenchModel
from .fit_search import Solution
from .leak_limits import dummy_bound
from .reflection import rho_from_swr, swr_from_rho
from .units import wave_db

__all__ = ["check_words", "fit_notes", "pair_scale", "power_limit", "reversed_directivity_db", "swr_span"]

Array = npt.NDArray[np.float64]

_SWR = 1.5
#: Where what is missing is told in SWR [W].
_POWER_W = 10.0
#: A law is determined at a power where that is known to this [95 %, relative], the wattmeter's own accuracy aside.
_LAW_LIMIT = 0.04
#: It is the law, and not the gain, where the limit grows by this factor below the lowest step.
_WORSE = 1.3
#: Powers below the lowest step at which a law is asked, as parts of it.
_BELOW = np.array([0.5, 0.3, 0.2, 0.1])
#: A load term known no better than this [sd of its logarithm] is not determined by the steps.
_LOAD_TERM_SD = 0.5
#: The reversed product says no less than the seen directivity by more than this [dB] where wiring and laws are right.
_PRODUCT_DB = 4.0
#: The scale from a pair of resistors agrees with the fit's within this part, its resistors' tolerance aside.
_PAIR_PART = 0.03


def fit_notes(model: BenchModel, solution: Solution, bridge: Bridge, identified: list[bool]) -> tuple[str, ...]:
    """What the steps left open, as sentences."""
    said = _dummy_notes(model, solution, bridge)
    if not solution.settled:
        said.append("the fit did not come to rest: these steps do not determine all that it looks for")
    said += _missing_notes(model, bridge)
    said += _leak_notes(bridge, identified)
    said += _law_notes(model, solution, bridge)
    return tuple([*said, *_cross_checks(model, solution, bridge)])


def swr_span(
    band: Band, *, directivity: float | None = None, leak: float | None = None, ratio_part: float = 0.0
) -> str:
    """Between what an SWR of 1.5 lies on one look, as "1.36-1.66".

    directivity, leak: other limits of |d| and |c|. ratio_part: 95 % limit, relative, of reflected over forward power.
    """
    ratio = np.square(rho_from_swr(_SWR))
    d = band.directivity_limit if directivity is None else directivity
    c = band.forward_leak_limit if leak is None else leak
    ends = rho_interval(ratio * max(0.0, 1.0 - ratio_part), ratio * (1.0 + ratio_part), 0.0, d, c, band.angle_cosine)
    low, high = (float(swr_from_rho(rho)) for rho in ends)
    return f"{low:.2f}-{high:.2f}"


def _ratio_part(bridge: Bridge, band: Band, power_w: float) -> float:
    """95 % limit, relative, of reflected over forward power by laws and gains, at SWR 1.5 and a forward power [W]."""
    squares = band.gain_forward**2 * power_w, band.gain_reflected**2 * power_w * float(rho_from_swr(_SWR)) ** 2
    laws = bridge.forward_law, bridge.reflected_law
    forward, reflected = (
        np.ravel(law.sensitivity(law.counts(square))) / square for law, square in zip(laws, squares, strict=True)
    )
    # M = reflected/forward, and a power is the law's square over the gain squared.
    ways = np.concatenate([[2.0, -2.0], -forward, reflected])
    return NORMAL_DEVIATE * float(np.sqrt(max(ways @ band.covariance @ ways, 0.0)))


def _dummy_notes(model: BenchModel, solution: Solution, bridge: Bridge) -> list[str]:
    bounds = [dummy_bound(model, solution.vector, solution.covariance, n) for n in range(len(bridge.bands))]
    own = [n for n, band in enumerate(bridge.bands) if band.directivity_limit >= bounds[n][1] * (1.0 - 1e-9)]
    if not own:
        return []
    worst = max(own, key=lambda n: bounds[n][1])
    loss = model.ratings.dummy_return_loss_db
    better = "is no better than the bridge and " if model.dummy_limit >= bounds[worst][0] else ""
    return [
        f"the dummy load, {loss:g} dB of return loss, {better}bounds the directivity at {_named(bridge, own)}: "
        f"{_mhz(bridge.bands[worst])} reads SWR {_SWR} as {swr_span(bridge.bands[worst])} instead of "
        f"{swr_span(bridge.bands[worst], directivity=bounds[worst][0])} with a perfect one"
    ]


def _missing_notes(model: BenchModel, bridge: Bridge) -> list[str]:
    said = []
    balance, worst = max(((_ratio_part(bridge, band, _POWER_W), band) for band in bridge.bands), key=lambda one: one[0])
    cost = (
        f"at {_POWER_W:g} W reflected over forward power is known to {100.0 * balance:.0f} %, so that {_mhz(worst)} "
        f"reads SWR {_SWR} as {swr_span(worst, ratio_part=balance)} instead of {swr_span(worst)}"
    )
    if len(model.of_kind["reversed"]) == 0:
        said.append(f"no reversed step: the reflected detector's law and gain lean on the forward one's; {cost}")
    if len(model.of_kind["load"]) == 0:
        said.append(f"no load step: the balance of the two detectors rests on the wattmeter alone; {cost}")
    elif len({part.text for part in model.parts}) == 1:
        said.append(
            f"one load only, {model.parts[0].text}: it cannot tell the balance of the detectors from the leaks; "
            f"wanted one on either side of 50 ohm, like 25 and 100; {cost}"
        )
    powers = [model.steps[at].power_w or 0.0 for at in model.of_kind["power"] if model.weights[at] > 0.0]
    if max(powers) < 3.0 * min(powers):
        said.append(
            f"all power steps are near {max(powers):g} W: the laws are not determined at other powers and rest on what "
            "such detectors usually are"
        )
    return said


def _leak_notes(bridge: Bridge, identified: list[bool]) -> list[str]:
    open_bands = [n for n, known in enumerate(identified) if not known]
    return [
        f"{_mhz(bridge.bands[n])}: the loads do not identify the forward port's leak; a bound of "
        f"{-float(wave_db(bridge.bands[n].forward_leak_limit)):.0f} dB stands in: SWR {_SWR} reads "
        f"{swr_span(bridge.bands[n])} instead of {swr_span(bridge.bands[n], leak=0.0)} with none"
        for n in open_bands
    ]


def power_limit(bridge: Bridge, band: Band, side: int, power_w: float) -> float:
    """95 % limit, relative, of a power [W] at the forward (0) or reflected (1) port, by law and gain alone."""
    law = (bridge.forward_law, bridge.reflected_law)[side]
    gain = (band.gain_forward, band.gain_reflected)[side]
    counts = law.counts(gain**2 * power_w)
    slopes = law.sensitivity(counts) / (gain**2 * power_w)
    first = 2 + (0 if side == 0 else len(bridge.forward_law.parameters))
    own = [side, *range(first, first + len(law.parameters))]
    ways = np.concatenate([[-2.0], np.ravel(slopes)])
    return NORMAL_DEVIATE * float(np.sqrt(max(ways @ band.covariance[np.ix_(own, own)] @ ways, 0.0)))


def _law_notes(model: BenchModel, solution: Solution, bridge: Bridge) -> list[str]:
    said = []
    for side, (name, kind) in enumerate((("forward", "power"), ("reflected", "reversed"))):
        used = [at for at in model.of_kind[kind] if model.weights[at] > 0.0] or list(model.of_kind["power"])
        lowest = min(used, key=lambda at: model.steps[at].power_w or np.inf)
        watts, band = float(model.steps[lowest].power_w or 0.0), bridge.bands[int(model.band[lowest])]
        limits = np.array([power_limit(bridge, band, side, watts * part) for part in _BELOW])
        here = power_limit(bridge, band, side, watts)
        # Where a power is no better known at the step itself it is the gain that is open.
        if (limits > np.maximum(_LAW_LIMIT, _WORSE * here)).any():
            tenth = power_limit(bridge, band, side, watts / 10.0)
            said.append(
                f"the {name} detector's law is not determined below {watts:.2g} W: there at {watts / 10.0:.2g} W a "
                f"power is known to {100.0 * tenth:.0f} % instead of {100.0 * here:.1f} %, the wattmeter's own "
                f"accuracy aside, and SWR {_SWR} reads {_span_at(bridge, band, watts / 10.0)} instead of "
                f"{_span_at(bridge, band, watts)}"
            )
        said += _load_term_note(model, solution, side, name)
    return said


def _span_at(bridge: Bridge, band: Band, power_w: float) -> str:
    return swr_span(band, ratio_part=_ratio_part(bridge, band, power_w))


def _load_term_note(model: BenchModel, solution: Solution, side: int, name: str) -> list[str]:
    _, priors = model.priors
    places = np.arange(model.law_slice(side).start, model.law_slice(side).stop)
    held = [at for at in places if np.isfinite(priors[at])]
    sds = np.sqrt(np.diag(solution.covariance))
    return [
        f"the {name} detector's load term is known only within a factor of {np.exp(NORMAL_DEVIATE * sds[at]):.1f}: "
        "it rests on what such detectors usually are; lower powers would tell"
        for at in held
        if sds[at] > _LOAD_TERM_SD
    ]


def _cross_checks(model: BenchModel, solution: Solution, bridge: Bridge) -> list[str]:
    said = []
    for n, band in enumerate(bridge.bands):
        scale = pair_scale(model, solution.vector, n)
        if scale is not None and abs(scale[0] - 1.0) > _PAIR_PART + scale[1]:
            said.append(
                f"{_mhz(band)}: the balance of the detectors by the pair of resistors and the dummy alone is "
                f"{100.0 * (scale[0] - 1.0):+.1f} % off the fit's, more than the resistors' tolerance allows"
            )
        product = reversed_directivity_db(model, solution.vector, n)
        # A forward port that leaks less than the reflected one is no error: only a worse product is.
        if product is not None and product[1] - product[0] > _PRODUCT_DB:
            said.append(
                f"{_mhz(band)}: forward and reversed steps together say a directivity of {product[0]:.1f} dB, the "
                f"power steps alone {product[1]:.1f} dB: look for a wiring or law error, or a dummy that was moved"
            )
    return said


def check_words(model: BenchModel, solution: Solution, bridge: Bridge) -> tuple[str, ...]:
    """The closed forms beside the fit, a line a band that has them."""
    said = []
    for n, band in enumerate(bridge.bands):
        scale, product = (f(model, solution.vector, n) for f in (pair_scale, reversed_directivity_db))
        parts = [] if scale is None else [f"balance by 25 and 100 ohm {100.0 * (scale[0] - 1.0):+.1f} %"]
        if product is not None:
            parts.append(f"directivity both ways {product[0]:.1f} dB, forward {product[1]:.1f} dB")
        said += [f"{_mhz(band)}: {', '.join(parts)}"] if parts else []
    return tuple(said)


def pair_scale(model: BenchModel, vector: Array, band: int) -> tuple[float, float] | None:
    """a^2 by a pair of loads of reflection +-r and the dummy, [(M+ + M-)/2 - M0]/r^2, and its 95 % limit by tolerance.

    1 where it agrees with the fit's gains. None without such a pair. M are power ratios in the fit's own watts.
    """
    ratios = _ratios(model, vector, band, "load")
    found = {}
    for step, ratio in ratios.items():
        taken = model.steps[step]
        if not taken.line_deg and taken.load in ("25", "100") and model.z0_ohm == 50.0:
            found[taken.load] = ratio
    through = _pooled(model, vector, band, "power")
    if len(found) < 2 or through is None:
        return None
    scale = 9.0 * (sum(found.values()) / 2.0 - through)
    # 1 % of one resistor is 1.33 % of r, twice that of r^2, and each carries half of the sum.
    return float(scale), 1.33 * 2.0 * model.ratings.resistor_pct / 100.0


def reversed_directivity_db(model: BenchModel, vector: Array, band: int) -> tuple[float, float] | None:
    """Mean directivity [dB] by the product of the dummy's ratios both ways round, and that seen in power steps alone.

    R1/F1 . F2/R2 = d^2 l^2, whatever the powers and the balance of the detectors. None where a ratio is missing.
    """
    forward, turned = _pooled(model, vector, band, "power"), _pooled(model, vector, band, "reversed")
    if forward is None or turned is None or min(forward, turned) <= 0.0:
        return None
    return float(-5.0 * np.log10(forward / turned)), float(-10.0 * np.log10(forward))


def _waves(model: BenchModel, vector: Array, band: int, kind: str) -> list[tuple[int, float, float]]:
    """Step, forward and reflected power [W by the fit's gains] of the steps of a kind in a band that are used."""
    forward, reflected = model.laws(vector)
    gains = np.exp(2.0 * vector[model.band_slice(band)][:2])
    return [
        (
            int(at),
            float(forward.square(model.steps[at].forward)) / float(gains[0]),
            float(reflected.square(model.steps[at].reflected)) / float(gains[1]),
        )
        for at in model.of_kind[kind]
        if model.band[at] == band and model.weights[at] > 0.0
    ]


def _ratios(model: BenchModel, vector: Array, band: int, kind: str) -> dict[int, float]:
    return {at: back / out for at, out, back in _waves(model, vector, band, kind) if out > 0.0}


def _pooled(model: BenchModel, vector: Array, band: int, kind: str) -> float | None:
    """Ratio of summed powers: the strong steps, which have most to say, weigh most."""
    waves = _waves(model, vector, band, kind)
    out, back = sum(w[1] for w in waves), sum(w[2] for w in waves)
    return back / out if waves and out > 0.0 else None


def _named(bridge: Bridge, bands: list[int]) -> str:
    return ", ".join(f"{bridge.bands[n].frequency_hz / 1e6:.3f}" for n in bands) + " MHz"


def _mhz(band: Band) -> str:
    return f"{band.frequency_hz / 1e6:.3f} MHz"
