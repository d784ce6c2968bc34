"""The list of a bench: what was taken, what is worth measuring and what it would gain, what is refused and why.

One rule: every line says in words why it stands where it stands.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

from calibration.bench import BenchStep
from calibration.candidates import Candidate, band_words
from calibration.next_step import Proposal

from .mind import Thought

__all__ = ["Entry", "choices", "forecast", "plan_words", "span_words", "taken"]

Mark = Literal["taken", "slip", "next", "no"]

#: More suggestions than a builder reads.
_MOST = 12


@dataclass(frozen=True, slots=True)
class Entry:
    """A line: its mark, the step in words, what is to be said of it, and the plan and proposal behind it."""

    mark: Mark
    text: str
    note: str
    plan: Candidate | None = None
    proposal: Proposal | None = None


def taken(steps: Sequence[BenchStep], thought: Thought | None) -> list[Entry]:
    """The steps of the file with their counts; those that the fit has set aside with its reason."""
    slips = {}
    if thought is not None and thought.fit is not None:
        slips = {at: slip.reason for slip in thought.fit.slips for at in slip.steps}
    return [_taken(number, step, slips.get(number - 1)) for number, step in enumerate(steps, 1)]


def choices(
    thought: Thought | None,
    own: Sequence[Candidate],
    done: Sequence[Candidate],
    why_not: Callable[[Candidate], str],
) -> list[Entry]:
    """What may be chosen: steps of one's own first, then the suggestions, each with its gain or why not now.

    done: what was taken since the suggestions were made, and is not suggested any more.
    """
    proposals = () if thought is None or thought.advice is None else thought.advice.proposals
    fresh = [one for one in proposals if one.candidate not in own and one.candidate not in done][:_MOST]
    return [_choice(plan, None, why_not) for plan in own] + [_choice(one.candidate, one, why_not) for one in fresh]


def plan_words(plan: Candidate) -> str:
    """A step in a few words with its band."""
    brief = plan.brief.replace(" degrees", " deg")
    return brief if plan.kind == "dark" else f"{band_words(plan.frequency_hz)}, {brief}"


def forecast(thought: Thought | None, chosen: Proposal | None) -> str:
    """What the calibration would give now, and after the chosen step."""
    if thought is None:
        return "working out what this bench gives"
    if thought.fit is None:
        return "no calibration yet: dark counts and three powers into the dummy are the least"
    proposals = thought.advice.proposals if thought.advice is not None else ()
    known = next((one for one in (chosen, *proposals) if one is not None and one.bands_hz), None)
    if known is None:
        from calibration.fit_notes import swr_span

        bands = thought.fit.bridge.bands
        return f"SWR 1.5 on {band_words(bands[0].frequency_hz)} reads {swr_span(bands[0])}"
    at = _band_of(known)
    where = f"at SWR {known.aim.swr:g}, {known.aim.power_w:g} W, {band_words(known.bands_hz[at])}"
    said = f"{where}: {span_words(known.now[at])}"
    return said if chosen is None or not chosen.bands_hz else f"{said}; after this step {span_words(known.after[at])}"


def span_words(span: tuple[float, float]) -> str:
    """An interval of SWR."""
    return f"{span[0]:.2f}-{span[1]:.2f}" if span[1] < 1e3 else f"at least {span[0]:.2f}"


def _band_of(proposal: Proposal) -> int:
    """Which of the proposal's bands to speak of: the step's own, else the first."""
    hz = proposal.candidate.frequency_hz
    return 0 if hz is None else min(range(len(proposal.bands_hz)), key=lambda n: abs(proposal.bands_hz[n] / hz - 1.0))


def _taken(number: int, step: BenchStep, slip: str | None) -> Entry:
    parts = [] if step.frequency_hz is None else [band_words(step.frequency_hz)]
    parts.append({"reversed": "turned"}.get(step.kind, step.kind) if step.load is None else f"load {step.load}")
    if step.line_deg:
        parts.append(f"+{step.line_deg:g} deg")
    if step.power_w is not None:
        parts.append(f"{step.power_w:.4g} W")
    elif step.volts is not None:
        parts.append(f"{step.volts:.4g} V {step.volts_kind}")
    counts = f"{step.forward:.1f} / {step.reflected:.1f}"
    return Entry("slip" if slip else "taken", f"{number:2} {' '.join(parts)}", slip or counts)


def _choice(plan: Candidate, proposal: Proposal | None, why_not: Callable[[Candidate], str]) -> Entry:
    why = why_not(plan)
    wait = re.search(r"wait \d+ s", why)
    if wait is not None:
        why = f"hot: {wait[0]}"
    return Entry("no" if why else "next", plan_words(plan), why or _gain(proposal), plan, proposal)


def _gain(proposal: Proposal | None) -> str:
    if proposal is None:
        return "your own"
    if not proposal.bands_hz:
        return "first fit"
    alone = f"{100.0 * proposal.narrowing:.0f} %"
    return f"{alone} ({100.0 * proposal.joint:.0f} %)" if proposal.worth > proposal.narrowing + 0.005 else alone
