"""The work at a bench: sheet, run, list and what is thought of them, joined for whoever shows and keys it.

One rule: a step is in the file before it is called taken, and what the file says is what the bench goes on from.
"""

from __future__ import annotations

import queue
import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from bridgeio.bench_sheet import BenchSheet
from bridgeio.errors import FileError
from bridgeio.frames import Conditions, Nameplate, Tallies
from calibration.bench import BenchStep
from calibration.candidates import Candidate

from .answers import head_from, head_questions, step_from, step_questions
from .choices import Entry, choices
from .ground import Ground, another_board
from .meter_reading import UNITS
from .mind import BenchMind, Thought
from .put import put_fit
from .queries import Queries
from .run import BenchRun
from .tap import BenchSetting, Drop, device_times_s

__all__ = ["BenchWork"]

#: A bridge that has talked this long without a nameplate sends none [s].
_NAMELESS_S = 4.5
#: Counts older than this are stale, and older than that no step is taken any more [s].
_STALE_S, _LOST_S = 1.0, 2.0


class BenchWork:
    """One sitting with one file. Not for several threads at once; the mind's thread is its own."""

    def __init__(self, setting: BenchSetting, clock: Callable[[], float] = time.monotonic) -> None:
        """`clock` [s] must be steady. FileError where the file is there and wrong."""
        self.setting, self._clock = setting, clock
        self.sheet: BenchSheet | None = None
        self.run: BenchRun | None = None
        self.thought: Thought | None = None
        self.queries: Queries | None = None
        self.plate: Nameplate | None = None
        self.counts: tuple[float, float] | None = None
        self.cursor = 0
        self._own: list[Candidate] = []
        self._done: list[Candidate] = []
        self._wanted_hz: tuple[float, ...] = ()
        self._thoughts: queue.SimpleQueue[Thought] = queue.SimpleQueue()
        self._mind: BenchMind | None = None
        self._first_s: float | None = None
        self._heard_s = clock()
        self._write_wanted = False
        self._head_left = False
        self._notice = ""
        if setting.path.exists() or setting.path.is_symlink():
            self._begin(BenchSheet(setting.path))

    @property
    def steps(self) -> tuple[BenchStep, ...]:
        """The steps in the file."""
        return () if self.sheet is None else self.sheet.file.steps

    @property
    def silent_s(self) -> float:
        """How long no counts have come [s]."""
        return self._clock() - self._heard_s

    @property
    def stale(self) -> bool:
        """Whether the newest counts are old."""
        return self.counts is not None and self.silent_s > _STALE_S

    @property
    def thinking(self) -> bool:
        """Whether what is thought is not yet of the steps as they are now."""
        return self.thought is None or self.thought.steps != self.steps or not self.thought.whole

    @property
    def news(self) -> str:
        """What happened last, in a sentence."""
        return self._notice if self.run is None else self.run.news

    def choices(self) -> list[Entry]:
        """What may be chosen now."""
        return [] if self.run is None else choices(self.thought, self._own, self._done, self.run.why_not)

    def tick(self, link_words: str, link_open: bool = True) -> None:
        """Take in what has come; `link_words` say how the link is, for when nothing comes or can come."""
        for drop in self.setting.tap.take():
            self._take(drop)
        if self.run is not None:
            self.run.pass_time(self._clock())
            if not link_open or self.silent_s > _LOST_S:
                self.run.lose(link_words if not link_open else "no counts come")
            self._write_due(self.run)
        elif self.queries is None and self._knows_board and not self._head_left:
            self.ask_head()
        while not self._thoughts.empty():
            self._hear(self._thoughts.get())

    def _take(self, drop: Drop) -> None:
        for item in drop.items:
            if isinstance(item, Tallies) and len(item):
                self._heard_s, self._first_s = drop.at_s, drop.at_s if self._first_s is None else self._first_s
                self.counts = float(item.forward.mean()), float(item.reflected.mean())
                if self.run is not None:
                    self.run.pass_time(max(drop.at_s, self.run.at_s))
                    times = device_times_s(item, drop.at_s)
                    self.run.push(
                        item.forward, item.reflected, times, wire_flags=item.flags, temperature_c=drop.temperature_c
                    )
            elif isinstance(item, Nameplate):
                self.plate = item
                self._compare()
            elif isinstance(item, Conditions) and item.frequency_hz and self.run is not None:
                self.run.hear_frequency(float(item.frequency_hz), drop.at_s)

    @property
    def _knows_board(self) -> bool:
        """Whether the board has named itself, or talks and never will."""
        nameless = self._first_s is not None and self._clock() - self._first_s > _NAMELESS_S
        return self.plate is not None or nameless

    def _compare(self) -> None:
        """Another board than the sheet's gets no step."""
        if self.run is not None and self.sheet is not None and self.plate is not None:
            self.run.strange = another_board(self.sheet.file, self.plate)

    def ask_head(self) -> None:
        """Ask, or ask on, what a new sheet needs to know."""
        purpose = f"A new bench sheet, {self.setting.path}. It can be edited by hand later."
        self.queries = Queries(purpose, head_questions(self.plate), self._create)

    def move(self, rows: int) -> None:
        """The cursor goes on by so many rows."""
        self.cursor = max(0, min(self.cursor + rows, len(self.choices()) - 1))

    def go_on(self) -> None:
        """Enter: the chosen step in hand, or ready. ValueError in words where it may not be."""
        run, listed = self.run, self.choices()
        if run is None:
            if self._knows_board:
                self.ask_head()
            return
        if run.phase == "heed":
            self._connect(run.ready())
        elif run.phase == "choose" and listed:
            entry = listed[min(self.cursor, len(listed) - 1)]
            if entry.plan is not None:
                self._choose(entry.plan)
        elif run.phase == "lift":
            raise ValueError("key up first")

    def leave_queries(self) -> None:
        """Nothing is asked any more; a new sheet's questions come again with Enter."""
        self.queries = None
        self._head_left = self.run is None

    def own_step(self) -> None:
        """Ask for a step of one's own. ValueError while another is in hand."""
        if self.run is None or self.run.phase != "choose":
            raise ValueError("first finish this step, or leave it with Escape")
        listed = self.choices()
        like = listed[min(self.cursor, len(listed) - 1)].plan if listed else None
        self.queries = Queries(
            "A step of your own.", step_questions(None, like), lambda a: self._add(step_from(a, None))
        )

    def next_unit(self) -> None:
        """Watts, volts rms, volts peak: what the builder reads."""
        if self.run is not None:
            self.run.unit = UNITS[(UNITS.index(self.run.unit) + 1) % len(UNITS)]
            self.say(
                f"you read {'the wattmeter' if self.run.unit == 'W' else f'{self.run.unit} across the dummy load'}"
            )

    def undo(self) -> None:
        """Take the last step of this sitting out of the file. ValueError in words where it cannot be."""
        if self.sheet is None or self.run is None or self.run.phase not in ("choose", "lift"):
            raise ValueError("first finish this step, or leave it with Escape")
        number = len(self.steps)
        try:
            self.sheet.undo()
        except FileError as error:
            raise ValueError(str(error)) from error
        self._done = self._done[:-1]
        self.run.news = f"step {number} is taken back, and out of the file"
        self._changed()

    def write(self) -> None:
        """Write the fit into the file, now or as soon as it is there. ValueError where there can be none."""
        if self.sheet is None:
            raise ValueError("there is no sheet yet")
        self._write_wanted = True
        self.say("the fit is being worked out and will be written")
        self._write_fit()

    def stop(self) -> None:
        """The sitting is over."""
        if self._mind is not None:
            self._mind.stop()

    def _create(self, answers: dict[str, Any]) -> None:
        try:
            sheet = BenchSheet.create(self.setting.path, head_from(answers, self.plate))
        except FileError as error:
            raise ValueError(str(error)) from error
        self._wanted_hz, self.queries = answers["bands_hz"], None
        self._begin(sheet)
        assert self.run is not None
        self.run.unit = next(unit for unit in UNITS if unit.lower() == answers["unit"])
        self.say(f"{self.setting.path} is begun")

    def _begin(self, sheet: BenchSheet) -> None:
        self.sheet = sheet
        self.run = BenchRun(self._ground(sheet), self._clock())
        self._mind = BenchMind(self._thoughts.put)
        self._compare()
        if sheet.fit_is_behind:
            self.say("the fit in the file has not seen its newest steps: w writes it anew")
        self._changed()

    def _ground(self, sheet: BenchSheet) -> Ground:
        file = sheet.file
        return Ground(float(file.full_scale), file.z0_ohm, sheet.limits).with_dark_of(file.steps)

    def _changed(self) -> None:
        """The file holds other steps than before."""
        assert self.sheet is not None
        assert self.run is not None
        assert self._mind is not None
        self.run.stand_on(self._ground(self.sheet))
        self._mind.consider(self.sheet.file, self._wanted_hz)

    def _choose(self, plan: Candidate) -> None:
        assert self.run is not None
        lacking = step_questions(plan, None)
        if plan.kind != "dark" and lacking:
            self.queries = Queries("What this step lacks.", lacking, lambda a: self._complete(step_from(a, plan)))
        else:
            self.run.choose(plan)

    def _complete(self, plan: Candidate) -> None:
        assert self.run is not None
        self.queries = None
        self.run.choose(plan)

    def _add(self, plan: Candidate) -> None:
        self.queries, self.cursor = None, 0
        self._own = [plan, *(other for other in self._own if other != plan)]

    def _connect(self, plan: Candidate) -> None:
        """On the simulated bench the builder's hands are ours."""
        if self.setting.tap.hands is not None:
            self.setting.tap.hands.set_up(plan.kind, plan.frequency_hz, plan.power_w, plan.load, plan.line_deg)

    def _write_due(self, run: BenchRun) -> None:
        step, plan = run.due, run.plan
        if step is None or self.sheet is None:
            return
        try:
            file = self.sheet.append(step)
        except FileError as error:
            run.not_written(str(error))
            return
        run.written(len(file.steps))
        if self.sheet.fit_is_behind:
            run.news += "; the fit in it has not seen it: w writes it anew"
        self._done += [] if plan is None else [plan]
        self._own = [other for other in self._own if other != plan]
        self.cursor = 0
        self._changed()

    def _hear(self, thought: Thought) -> None:
        if not thought.whole and self.thought is not None:
            thought = replace(thought, advice=self.thought.advice)
        self.thought = thought
        if not self.thinking:
            self._done = []
        if self._write_wanted:
            self._write_fit()

    def _write_fit(self) -> None:
        """Write where what is thought is of the very steps in the file."""
        thought = self.thought
        if self.sheet is not None and thought is not None and thought.steps == self.steps:
            self._write_wanted = False
            self.say(put_fit(self.sheet.path, thought))

    def say(self, words: str) -> None:
        """Let this be the news."""
        self._notice = words
        if self.run is not None:
            self.run.news = words
