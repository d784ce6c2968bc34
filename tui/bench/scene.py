"""From the work at a bench to what its screen draws.

One rule: what the builder must do now is one sentence, and what endangers something goes before it.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

from calibration.candidates import Candidate
from calibration.cautions import cautions

from ..alarm import KeyState
from ..drawing.bench import Asking, Scene
from ..drawing.line import Piece
from .choices import Entry, forecast, plan_words, taken
from .ground import draft
from .law import LawPicture, law_picture
from .run import POWERED, BenchRun

if TYPE_CHECKING:
    from ..messages import Snapshot
    from .work import BenchWork

__all__ = ["asking_of", "reading_question", "scene_of", "status_of"]

_NOTHING = LawPicture("forward")
#: Drift below this part of the counts above dark a second is none to the eye.
_STILL = 0.0005
#: Net counts below which a drift is told in counts.
_FEW = 50.0


def scene_of(work: BenchWork) -> Scene:
    """The scene now."""
    run, listed = work.run, work.choices()
    cursor = max(0, min(work.cursor, len(listed) - 1))
    chosen = listed[cursor] if listed else None
    plan = run.plan if run is not None and run.plan is not None else chosen.plan if chosen else None
    proposal = next((entry.proposal for entry in listed if entry.plan == plan), None)
    words = forecast(work.thought, proposal)
    if work.sheet is not None and work.thinking and work.thought is not None:
        words += "; more is being worked out"
    return Scene(
        forecast=words if work.sheet is not None else "no sheet yet",
        first=_first(work),
        taken=tuple(taken(work.steps, work.thought)),
        choices=tuple(listed),
        cursor=cursor,
        instruction=_instruction(work, chosen),
        cautions=_cautions(run, plan),
        heeding=run is not None and run.phase == "heed",
        state=_state(work),
        progress=run.steadiness.progress if run is not None and run.phase == "take" else None,
        more=_more(work),
        law=_law(work, plan),
    )


def status_of(work: BenchWork, snapshot: Snapshot) -> tuple[Snapshot, KeyState]:
    """What the status line says: the sheet's name, the frequency of the step in hand, the key by the counts."""
    run, sheet = work.run, work.sheet
    if run is None or sheet is None:
        return snapshot, KeyState()
    told = snapshot.frequency_hz
    if told is None and run.plan is not None:
        told = run.plan.frequency_hz
    key = KeyState() if work.stale or run.carrier is None else KeyState(run.carrier, run.key_down_s)
    return replace(snapshot, bridge=sheet.file.name, frequency_hz=told), key


def asking_of(work: BenchWork) -> Asking | None:
    """The questions being asked."""
    if work.queries is None:
        return None
    question = work.queries.question
    said = tuple(work.queries.said)
    return Asking(work.queries.purpose, said, question.label, question.sentence, question.default)


def reading_question(run: BenchRun) -> tuple[str, str]:
    """How the wattmeter's reading is asked for, and what is proposed."""
    watts = run.plan.power_w if run.plan is not None and run.plan.power_w else 0.0
    if run.unit == "W":
        return "wattmeter reads [W]", f"{watts:g}"
    volts = math.sqrt(watts * run.ground.z0_ohm * (2.0 if run.unit == "V peak" else 1.0))
    return f"across the dummy [{run.unit}]", f"{volts:.3g}"


def _first(work: BenchWork) -> tuple[Piece, ...]:
    """Slips, then what bounds the whole, then what is still undetermined."""
    thought, said = work.thought, []
    if work.run is not None and work.run.strange:
        said.append((work.run.strange, "over"))
    if thought is None:
        return tuple(said)
    if thought.fit is not None:
        said += [(slip.words, "may") for slip in thought.fit.slips]
    if thought.trouble:
        said.append((thought.trouble, "word"))
    told = [] if thought.advice is None else list(thought.advice.lead)
    if thought.fit is not None:
        told += [f"open: {note}" for note in thought.fit.notes[len(thought.fit.slips) :]]
    # What no step can mend goes before what steps can.
    bounds = [words for words in told if "the dummy load" in words and "bounds" in words]
    said += [(words, "word") for words in bounds[:1]]
    said += [(words, "label") for words in told if words not in bounds]
    return tuple(said)


def _instruction(work: BenchWork, chosen: Entry | None) -> Piece:
    run = work.run
    if run is None:
        return _before_the_sheet(work)
    if run.must_lift:
        return "KEY UP NOW: the load is as hot as it may get", "over"
    if run.phase == "heed" and run.plan is not None:
        return _to_connect(run, run.plan, work.steps[-1].kind if work.steps else "dark")
    if run.phase == "take" and run.plan is not None:
        return _in_take(run, run.plan)
    if run.phase == "lift":
        return "Key up now.", "may"
    if run.carrier:
        return "The key is down and no step is in hand: key up.", "may"
    if chosen is None:
        return "What is worth measuring is being worked out; n: a step of your own.", "strong"
    if chosen.mark == "no":
        return f"Not now: {chosen.note}", "word"
    return "Choose a step with the arrows; Enter takes it in hand.", "strong"


def _before_the_sheet(work: BenchWork) -> Piece:
    if work.counts is None:
        return "Waiting for the bridge: it says its full scale and its name.", "strong"
    return "Enter: the questions for the new sheet.", "strong"


def _to_connect(run: BenchRun, plan: Candidate, before: str) -> Piece:
    if run.carrier and plan.kind != "dark":
        return "The key is down: key up before anything is connected.", "may"
    if hot := run.hot(plan):
        return f"Wait: {hot}", "may"
    words = f"{plan.words[:1].upper()}{plan.words[1:]}"
    if plan.kind == "dark":
        return f"{words}. Enter begins.", "strong"
    if before == "reversed" and plan.kind != "reversed":
        words = f"Turn the bridge back the right way round. {words}"
    return f"{words}. Connected, and the cautions read: Enter. Escape leaves it.", "strong"


def _in_take(run: BenchRun, plan: Candidate) -> Piece:
    if plan.kind == "dark":
        return "Leave the transmitter off while the counts settle.", "strong"
    if run.steadiness.phase == "taken":
        return "The counts are taken. Type what the wattmeter read; Enter opens the line.", "strong"
    if not run.carrier:
        return f"Key down now: {plan_words(plan)}.", "strong"
    if plan.kind in POWERED and run.reading is None:
        return "Keep the key down, read the wattmeter, and type what it says.", "strong"
    return "Keep the key down until the counts are taken.", "strong"


def _cautions(run: BenchRun | None, plan: Candidate | None) -> tuple[str, ...]:
    if run is None or plan is None:
        return ()
    return tuple(cautions(draft(plan), run.ground.limits, z0_ohm=run.ground.z0_ohm))


def _state(work: BenchWork) -> Piece:
    """The counts, and how they are."""
    if work.counts is None:
        return "no counts yet", "quiet"
    forward, reflected = work.counts
    shown = f"forward {forward:.1f}  reflected {reflected:.1f}"
    if work.stale:
        return f"was {shown}  stale for {work.silent_s:.0f} s", "over"
    if work.run is None:
        return shown, ""
    steadiness = work.run.steadiness
    if work.run.phase != "take":
        key = {True: "key down", False: "key up", None: "no dark counts yet"}[work.run.carrier]
        return f"{shown}  {key}", ""
    why = steadiness.why.removeprefix(steadiness.phase).lstrip("; ")
    words = f"{steadiness.phase}: {why}" if why and not why.startswith("for ") else steadiness.why
    return f"{shown}  {words}{_drift(work.run, work.counts)}", "strong" if steadiness.phase in (
        "steady",
        "taken",
    ) else ""


def _drift(run: BenchRun, counts: tuple[float, float]) -> str:
    """The forward detector's drift, or the reflected one's in a reversed step, in words."""
    side = 1 if run.plan is not None and run.plan.kind == "reversed" else 0
    drift, dark = run.steadiness.drift[side], run.ground.dark
    if math.isnan(drift):
        return ""
    net = 0.0 if dark is None else counts[side] - dark[side]
    if net < _FEW:
        return f", drift {drift:+.1f} counts/s"
    part = drift / net
    return ", still" if abs(part) < _STILL else f", drift {100.0 * part:+.2f} %/s"


def _more(work: BenchWork) -> tuple[Piece, ...]:
    run, said = work.run, list[Piece]()
    if work.news:
        said.append((work.news, "strong"))
    hands = work.setting.tap.hands
    if hands is not None:
        watts = hands.wattmeter_w
        shows = "shows nothing" if watts is None else f"shows {watts:.4g} W ({math.sqrt(50.0 * watts):.4g} V rms)"
        said.append((f"simulated wattmeter {shows}; key {'down' if hands.down else 'up'} (k)", "label"))
    if run is not None:
        reading = "" if run.reading is None else f"{run.reading.value:g} {run.reading.unit} noted; "
        said.append((f"{reading}{run.heat_words}", "label"))
    return tuple(said)


def _law(work: BenchWork, plan: Candidate | None) -> LawPicture:
    run, thought = work.run, work.thought
    if run is None:
        return _NOTHING
    side = 1 if plan is not None and plan.kind == "reversed" else 0
    dark = 0.0 if run.ground.dark is None else run.ground.dark[side]
    fit = None if thought is None else thought.fit
    if fit is not None and thought is not None and thought.steps != work.steps[: len(thought.steps)]:
        fit = None
    return law_picture(work.steps, fit, plan, side=side, dark=dark, z0_ohm=run.ground.z0_ohm)
