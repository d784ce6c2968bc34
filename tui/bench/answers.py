"""The questions that begin a bench sheet, and those of a step of one's own: one at a time, each with unit and example.

One rule: Enter takes what is proposed, and what is proposed for a rating is the careful value or none.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from calibration.bench import STEP_KINDS, BenchRatings
from calibration.candidates import Candidate, Limits
from calibration.laws import LAWS
from calibration.loads import load_impedance_ohm
from calibration.units import frequency_hz
from calibration.warmth import DIODES

from .meter_reading import UNITS

if TYPE_CHECKING:
    from bridgeio.bench_sheet import SheetHead
    from bridgeio.frames import Nameplate

__all__ = ["Question", "head_from", "head_questions", "step_from", "step_questions"]

Answers = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Question:
    """What is asked, as the label of an answer and in a sentence; `default` as typed; `parse` raises ValueError.

    asked: whether it makes sense after the answers so far.
    """

    key: str
    label: str
    sentence: str
    default: str
    parse: Callable[[str], Any]
    asked: Callable[[Answers], bool] = lambda answers: True


def head_questions(plate: Nameplate | None) -> tuple[Question, ...]:
    """All that a new sheet wants to know, less what the board says of itself."""
    name = plate.name.strip() if plate is not None and plate.name.strip() else "my bridge"
    asked = [Question("name", "name", "What is this bridge called?", name, _name)]
    if plate is None:
        sentence = "The largest count a reading can hold: 4095 for a plain 12-bit converter."
        asked.append(Question("full_scale", "full scale", sentence, "4095", _whole))
    return (*asked, *_HEAD)


def head_from(answers: Answers, plate: Nameplate | None) -> SheetHead:
    """The head of the sheet that the answers describe."""
    from bridgeio.bench_sheet import SheetHead

    limits = Limits(
        **{key: answers.get(key) for key in ("dummy_w", "resistor_w", "power_min_w", "power_max_w", "max_w")}
    )
    ratings = BenchRatings(
        reference_pct=answers["reference_pct"],
        dummy_return_loss_db=answers["dummy_return_loss_db"],
        resistor_pct=answers["resistor_pct"],
    )
    head = SheetHead(
        name=answers["name"],
        full_scale=answers.get("full_scale", 0),
        z0_ohm=answers["z0_ohm"],
        detector=answers["detector"],
        diode=answers.get("diode"),
        ratings=ratings,
        limits=limits,
    )
    return head if plate is None else head.of_board(plate)


def step_questions(plan: Candidate | None, proposed: Candidate | None, unit_hint: str = "") -> tuple[Question, ...]:
    """What a step of one's own needs; with `plan` only what that one lacks. `proposed` gives the defaults."""
    kind = Question(
        "kind", "kind", "dark, power, reversed (bridge turned end for end) or load?", "power", _one_of(STEP_KINDS)
    )
    hz = proposed.frequency_hz if proposed and proposed.frequency_hz else 14.1e6
    watts = proposed.power_w if proposed and proposed.power_w else 1.0
    frequency = Question(
        "frequency_hz", "frequency", "14.1M, 14100k or a band, 20m", f"{hz / 1e6:g}M", frequency_hz, _not_dark
    )
    power = Question(
        "power_w", "power [W]", f"Watts into a matched load, like 5{unit_hint}", f"{watts:g}", _above_zero, _not_dark
    )
    load = Question("load", "load", "ohms, 24.87 or 30+20j; open, short", "100", _load, _is_load)
    line = Question("line_deg", "line [deg]", "Degrees of 50 ohm line before the load", "0", _not_below_zero, _is_load)
    if plan is None:
        return kind, frequency, load, line, power
    lacking = [frequency] if plan.frequency_hz is None else []
    return (*lacking, power) if plan.power_w is None else tuple(lacking)


def step_from(answers: Answers, plan: Candidate | None) -> Candidate:
    """The step that the answers describe, or `plan` with what it lacked."""
    base = plan or Candidate(answers["kind"], load=answers.get("load"), line_deg=answers.get("line_deg", 0.0))
    return Candidate(
        base.kind,
        answers.get("frequency_hz", base.frequency_hz),
        answers.get("power_w", base.power_w),
        base.load,
        base.line_deg,
    )


def _not_dark(answers: Answers) -> bool:
    return answers.get("kind") != "dark"


def _is_load(answers: Answers) -> bool:
    return answers.get("kind") == "load"


def _name(text: str) -> str:
    if not text.strip():
        raise ValueError("a name is wanted, like shed bridge")
    return text.strip()


def _number(text: str) -> float:
    words = text.replace(",", ".").split()
    try:
        value = float(words[0])
    except (IndexError, ValueError):
        value = math.nan
    if not math.isfinite(value):
        raise ValueError(f"{text.strip()[:20]!r} is no number; wanted like 5 or 0.5")
    return value


def _above_zero(text: str) -> float:
    value = _number(text)
    if value <= 0.0:
        raise ValueError(f"{value:g} came; wanted above 0")
    return value


def _not_below_zero(text: str) -> float:
    value = _number(text)
    if value < 0.0:
        raise ValueError(f"{value:g} came; wanted 0 or more")
    return value


def _or_unknown(text: str) -> float | None:
    return None if text.strip() in ("", "-") else _above_zero(text)


def _whole(text: str) -> int:
    value = _above_zero(text)
    if value != int(value):
        raise ValueError(f"{value:g} came; wanted a whole number, like 4095")
    return int(value)


def _one_of(words: tuple[str, ...]) -> Callable[[str], str]:
    """One of the words, or its beginning where that is only its own."""

    def parse(text: str) -> str:
        found = [word for word in words if text.strip() and word.startswith(text.strip().lower())]
        if len(found) != 1:
            raise ValueError(f"{text.strip()[:20]!r} came; wanted {', '.join(words)}")
        return found[0]

    return parse


def _bands(text: str) -> tuple[float, ...]:
    found = tuple(frequency_hz(word) for word in text.replace(",", " ").split())
    if not found:
        raise ValueError("at least one band is wanted, like 20m")
    return found


def _load(text: str) -> str:
    load_impedance_ohm(text.strip())
    return text.strip()


#: After the name. The last two are of this sitting only and not in the sheet.
_HEAD = (
    Question("z0_ohm", "Z0 [ohm]", "What line is the bridge made for, in ohms, like 50?", "50", _above_zero),
    Question(
        "detector",
        "detector",
        "The detectors: diode, log (a logarithmic amplifier), or table (anything that rises)?",
        "diode",
        _one_of(tuple(LAWS)),
    ),
    Question(
        "diode",
        "diode",
        "schottky, germanium or silicon? It decides how they behave in a warm box.",
        "schottky",
        _one_of(tuple(DIODES)),
        lambda answers: answers["detector"] == "diode",
    ),
    Question(
        "max_w",
        "bridge [W]",
        "The most that coupler and diodes stand, in watts, like 100; - where you do not know.",
        "-",
        _or_unknown,
    ),
    Question(
        "power_min_w", "least [W]", "The least power your transmitter can be set to, like 0.5.", "0.5", _above_zero
    ),
    Question("power_max_w", "most [W]", "The most you want to use on this bench, like 5 or 100.", "5", _above_zero),
    Question(
        "dummy_w",
        "dummy [W]",
        "What your dummy load stands for ever, like 5 or 50; 30 s of it are taken to be what it stands at once.",
        "5",
        _above_zero,
    ),
    Question(
        "dummy_return_loss_db",
        "dummy [dB]",
        "Its return loss at worst: 30 is SWR 1.065, 36 is 1.03.",
        "30",
        _above_zero,
    ),
    Question(
        "resistor_w", "loads [W]", "What each of your known resistors stands, like 0.25 or 2.", "0.25", _above_zero
    ),
    Question("resistor_pct", "loads [%]", "Their tolerance, like 1; 0.3 where you measured them.", "1", _above_zero),
    Question(
        "reference_pct",
        "meter [%]",
        "How far your wattmeter can be believed in 95 of 100 cases, of its reading, like 5.",
        "5",
        _above_zero,
    ),
    Question(
        "unit",
        "it reads",
        "W; or V rms or V peak across the dummy load, where you have no wattmeter.",
        "W",
        _one_of(tuple(unit.lower() for unit in UNITS)),
    ),
    Question(
        "bands_hz",
        "bands",
        "The bands to calibrate, the one you use most first, like 20m 40m 80m or 14.2M.",
        "20m",
        _bands,
    ),
)
