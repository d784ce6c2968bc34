"""The Bench screen without a terminal: its pictures at three sizes, its questions, its list, its law and its words."""

import asyncio
import functools
import time
from dataclasses import replace

import numpy as np
import pytest

from bridgeio.bench_sheet import BenchSheet, SheetHead
from bridgeio.bridge_file import BridgeFile, load_bridge_file
from bridgeio.frames import Nameplate, Tallies
from bridgeio.simulator.bench import bench_steps
from calibration.bench import BenchRatings, BenchStep
from calibration.candidates import Candidate, Limits
from calibration.slip_names import Slip
from tests.terminal import HOSTILE
from tests.tui.fakes import HandFeed, picture, snapshot, uncalibrated, until
from tui.app import BridgewrightApp
from tui.bench.answers import head_from, head_questions, step_from, step_questions
from tui.bench.choices import Entry, choices, taken
from tui.bench.law import LawPicture, law_picture
from tui.bench.mind import Thought, think
from tui.bench.queries import Queries
from tui.bench.scene import scene_of
from tui.bench.tap import BenchSetting
from tui.bench.work import BenchWork
from tui.drawing.bench import Scene, draw_bench
from tui.drawing.glyphs import ASCII, UTF8
from tui.drawing.law_plot import draw_law
from tui.drawing.line import text_of, width_of
from tui.screens.bench import KEYS, SIMULATED_KEY
from tui.screens.help import guide_text

SIZES = [(120, 40), (80, 24), (40, 20)]
MAIN_HZ = 14.1e6
DARK = BenchStep("dark", 117.0, 70.0, forward_sd=3.2, reflected_sd=3.2, samples=200)
PLATE = Nameplate(
    **dict.fromkeys(Nameplate.__dataclass_fields__, 0) | {"full_scale": 65520, "device_id": 0xAB, "name": "shed board"}
)


def some_steps():
    """Dark, powers, reversed and two loads of the simulated bench on 20 m."""
    kinds = {"dark": 1, "power": 4, "reversed": 1, "load": 2}
    steps = [s for s in bench_steps() if s.kind == "dark" or s.frequency_hz == MAIN_HZ]
    return [s for kind, most in kinds.items() for s in [s for s in steps if s.kind == kind][:most]]


@functools.cache
def thought():
    """What is thought of a small bench, once for all tests."""
    limits = Limits(power_min_w=1, power_max_w=50)
    made = BridgeFile("", "shed", 65520, 50.0, "diode", BenchRatings(), tuple(some_steps()), None, limits=limits)
    told = []
    think(made, (), told.append)
    assert [each.whole for each in told] == [False, True]
    return told[-1]


@pytest.fixture
def path(tmp_path):
    """Where a sheet is to be."""
    return tmp_path / "shed.toml"


def sheet(path, *steps, **head):
    """A sheet in the file, with steps."""
    made = BenchSheet.create(
        path, replace(SheetHead("shed", 65520, limits=Limits(power_min_w=1, power_max_w=50)), **head)
    )
    for step in steps:
        made.append(step)
    return made


class Sitting:
    """Work at a bench by hand: a clock, and counts as they are wanted."""

    def __init__(self, path):
        self.now_s = 100.0
        self.setting = BenchSetting(path)
        self.setting.tap._clock = lambda: self.now_s
        self.work = BenchWork(self.setting, lambda: self.now_s)
        self.ms = 0

    def counts(self, forward, reflected, seconds, items=()):
        chance = np.random.default_rng(1)
        for _ in range(round(seconds * 10)):
            self.now_s += 0.1
            ms = self.ms + np.arange(10, 101, 10)
            self.ms = int(ms[-1])
            noise = chance.normal(0.0, 3.0, (2, 10))
            self.setting.tap.put([*items, Tallies.of(np.zeros(10), ms, forward + noise[0], reflected + noise[1])], 25.0)
            self.work.tick("open")
        return self

    def words(self):
        scene = scene_of(self.work)
        return " ".join([scene.instruction[0], scene.state[0], *(text for text, _ in (*scene.first, *scene.more))])


def test_whole_step_is_in_the_file_at_once(path):
    """Chosen, ready, keyed, read: the step is the file's last before the key is up, and undo takes it out again."""
    sheet(path, DARK)
    sitting = Sitting(path).counts(117.0, 70.0, 0.3)
    work = sitting.work
    work.own_step()
    for text in ("power", "20m", "5"):
        work.queries.answer(text)
    work.go_on()
    work.go_on()
    sitting.counts(117.0, 70.0, 0.2).counts(20000.0, 400.0, 2.6)
    work.run.answer("5.1")
    sitting.counts(20000.0, 400.0, 0.1)
    assert [step.power_w for step in load_bridge_file(path).steps] == [None, 5.1]
    assert "step 2 is in the file" in sitting.words()
    assert "Key up now" in sitting.words()
    sitting.counts(117.0, 70.0, 0.2)
    work.undo()
    assert len(load_bridge_file(path).steps) == 1
    assert "step 2 is taken back" in sitting.words()
    with pytest.raises(ValueError, match="no step was taken in this sitting"):
        work.undo()
    work.stop()


def test_step_that_cannot_be_written_is_told(path):
    """The file was broken by hand meanwhile: the step is not called taken, and the reason is said."""
    sheet(path, DARK)
    sitting = Sitting(path).counts(117.0, 70.0, 0.3)
    path.write_text("schema = 1\n[bridge\n", encoding="utf-8")
    sitting.work.run.choose(Candidate("load", MAIN_HZ, 0.2, "100"))
    sitting.work.go_on()
    sitting.counts(117.0, 70.0, 0.2).counts(9000.0, 1200.0, 2.6)
    assert "shed.toml" in sitting.words()
    assert sitting.work.run.phase == "heed"
    sitting.work.stop()


def test_stale_counts_are_said_as_stale(path):
    """A bridge that falls silent: its counts say was and stale, and the step in hand is not taken."""
    sheet(path, DARK)
    sitting = Sitting(path).counts(117.0, 70.0, 0.3)
    sitting.work.run.choose(Candidate("load", MAIN_HZ, 0.2, "100"))
    sitting.work.go_on()
    sitting.counts(9000.0, 1200.0, 1.0)
    sitting.now_s += 3.0
    sitting.work.tick("open, but silent")
    assert "was forward" in sitting.words()
    assert "stale for 3 s" in sitting.words()
    assert "no counts come: this step was not taken" in sitting.words()
    sitting.work.stop()


def test_pulled_plug_is_said_in_the_links_words(path):
    """The link is gone: the step in hand is not taken, for the link's own reason, at once."""
    sheet(path, DARK)
    sitting = Sitting(path).counts(117.0, 70.0, 0.3)
    sitting.work.run.choose(Candidate("dark"))
    sitting.work.go_on()
    sitting.work.tick("/dev/x is gone: it was unplugged", link_open=False)
    assert "/dev/x is gone: it was unplugged: this step was not taken" in sitting.words()
    sitting.work.stop()


def test_another_board_gets_no_step(path):
    """A board with another id, or another full scale, than the sheet's: no step is taken, in words."""
    for head, words in (({"device_id": 0xCD}, "this is board 000000AB"), ({"full_scale": 4095}, "full scale is 65520")):
        path.unlink(missing_ok=True)
        sheet(path, DARK, **head)
        sitting = Sitting(path).counts(117.0, 70.0, 0.2, [PLATE])
        assert words in sitting.words()
        with pytest.raises(ValueError, match="no step is taken"):
            sitting.work.run.choose(Candidate("dark"))
        sitting.work.stop()


def test_new_sheet_is_asked_for_and_written(path):
    """The board has named itself: its questions come, every default is taken, and the sheet holds board and answers."""
    sitting = Sitting(path).counts(117.0, 70.0, 0.2, [PLATE])
    work = sitting.work
    while work.queries is not None:
        work.queries.answer("")
    file = load_bridge_file(path)
    assert (file.name, file.full_scale, file.device_id) == ("shed board", 65520, 0xAB)
    assert (work.sheet.limits.dummy_w, work.sheet.limits.resistor_w, work.sheet.limits.max_w) == (5.0, 0.25, None)
    assert work.run.unit == "W"
    work.stop()


def test_sheet_of_a_nameless_board_asks_for_its_full_scale():
    """Without a nameplate the full scale is asked for too; with one it is not."""
    assert "full_scale" in [question.key for question in head_questions(None)]
    assert "full_scale" not in [question.key for question in head_questions(PLATE)]
    answers = {question.key: question.parse(question.default) for question in head_questions(None)}
    assert head_from(answers, None).full_scale == 4095


@pytest.mark.parametrize("question", head_questions(None), ids=lambda question: question.key)
def test_every_question_takes_its_default_and_refuses_nonsense(question):
    """What is proposed is usable, and a text that makes no sense is refused in words; a name may be anything."""
    question.parse(question.default)
    with pytest.raises(ValueError, match=r"wanted|frequency"):
        question.parse("" if question.key == "name" else "no such thing")


def test_answer_that_cannot_be_used_changes_nothing():
    """The same question is asked again, and the answers before it stay."""
    found = []
    queries = Queries("x", step_questions(None, None), lambda answers: found.append(step_from(answers, None)))
    queries.answer("load")
    queries.answer("20m")
    with pytest.raises(ValueError, match="'cat'"):
        queries.answer("cat")
    assert queries.question.key == "load"
    for text in ("24.87", "45", "0.2"):
        queries.answer(text)
    assert found == [Candidate("load", 14.175e6, 0.2, "24.87", 45.0)]


def test_dark_step_of_ones_own_asks_for_nothing_more():
    """A dark step has neither frequency nor power."""
    found = []
    queries = Queries("x", step_questions(None, None), lambda answers: found.append(step_from(answers, None)))
    queries.answer("dark")
    assert found == [Candidate("dark")]


def test_fit_and_slips_are_shown(path):
    """Thoughts of a bench with a mistyped power: the slip stands in words with its number, the law is drawn."""
    sheet(path, *some_steps())
    sitting = Sitting(path)
    slip = Slip((3,), "power_w 10 looks mistyped")
    sitting.work.thought = replace(thought(), fit=replace(thought().fit, slips=(slip,)))
    assert "step 4: power_w 10 looks mistyped" in sitting.words()
    scene = scene_of(sitting.work)
    assert scene.taken[3].mark == "slip"
    assert scene.law.curve
    assert any(aside for _, _, aside in scene.law.points)
    assert len(scene.law.residuals) == 4
    assert "at SWR 1.5, 10 W, 20 m: 1." in scene.forecast
    assert "after this step" in scene.forecast
    sitting.work.stop()


def test_fit_is_written_as_the_command_does(path):
    """`w`: the file holds a fit with the id that is told, and its steps are as they were."""
    sheet(path, *some_steps())
    sitting = Sitting(path)
    work = sitting.work
    work.write()
    end_s = time.monotonic() + 60.0
    while "fit id" not in work.news:
        assert time.monotonic() < end_s, work.news
        work.tick("open")
        time.sleep(0.05)
    file = load_bridge_file(path)
    assert f"fit id {file.fit_id:04X}" in work.news
    assert len(file.steps) == len(some_steps())
    work.stop()


def test_choices_leave_out_what_was_just_taken_and_say_why_not():
    """A step taken since the suggestions were made is not suggested again; a refused one carries its reason."""
    plan = Candidate("power", MAIN_HZ, 5.0)
    listed = choices(None, [plan], [], lambda _: "too hot")
    assert (listed[0].mark, listed[0].note) == ("no", "too hot")
    assert taken([DARK], Thought((DARK,)))[0].text == " 1 dark"


def scene(**more):
    """A scene with everything in it."""
    law = LawPicture("forward", ((0.0, 3.0, False), (1.0, 4.0, True)), ((0.0, 3.0), (1.0, 4.0)), ((0.0, 9.0, False),))
    entry = Entry("next", "20 m, 5 W into the dummy", "5 %", Candidate("power", MAIN_HZ, 5.0))
    made = Scene(
        forecast="at SWR 1.5, 10 W, 20 m: 1.36-1.66; after this step 1.42-1.59",
        first=(("the dummy load bounds this", "word"),),
        taken=tuple(taken([DARK] * 30, None)),
        choices=(entry, replace(entry, mark="no", note="hot: wait 12 s before it goes on")),
        cursor=0,
        instruction=("Choose a step with the arrows; Enter takes it in hand.", "strong"),
        cautions=("Key up, and seen to be up, before a load is changed.", "Close the box before you key."),
        heeding=False,
        state=("forward 117.0  reflected 70.0  key up", ""),
        progress=0.5,
        more=(("step 30 is in the file", "strong"), ("the dummy load holds 0 of 3000 J", "label")),
        law=law,
    )
    return replace(made, **more)


@pytest.mark.parametrize("glyphs", [ASCII, UTF8], ids=["ascii", "utf-8"])
@pytest.mark.parametrize("size", SIZES, ids=str)
def test_body_fits_and_says_what_matters(size, glyphs):
    """At every size: as many rows as asked for, none too wide; forecast, instruction, caution, counts and heat."""
    width, height = size[0] - 2, size[1] - 2
    rows = draw_bench(scene(), width, height, glyphs)
    text = " ".join(" ".join(text_of(row) for row in rows).split())
    assert len(rows) == height
    assert all(width_of(text_of(row)) == width for row in rows)
    for words in (
        "1.36-1.66",
        "dummy load bounds",
        "Enter takes it in hand",
        "Key up, and seen",
        "forward 117.0",
        "3000 J",
    ):
        assert words in text, words
    assert ("counts above dark" in text) == (width > 60)
    assert glyphs is UTF8 or text.isascii()


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_cautions_stand_in_the_laws_place_before_a_key_down(size):
    """With a step in hand the cautions are there to be read, and the first of them whole."""
    rows = draw_bench(scene(heeding=True), size[0] - 2, size[1] - 2, UTF8)
    text = " ".join(" ".join(text_of(row) for row in rows).split())
    assert "before you key" in text
    assert "Close the box" in text or size[0] == 40


@pytest.mark.parametrize("evil", HOSTILE[:40])
def test_outside_text_is_made_visible(evil):
    """News, slips and list may quote files and errors: nothing of them drives a terminal."""
    entry = Entry("slip", evil, evil)
    made = scene(forecast=evil, first=((evil, "over"),), taken=(entry,), instruction=(evil, ""), more=((evil, ""),))
    for row in draw_bench(made, 118, 38, UTF8):
        assert text_of(row).isprintable()


def test_law_shows_points_of_all_bands_on_one_axis():
    """Without a fit points lie where they were measured; beyond the strip a point is marked at its edge."""
    steps = [replace(DARK, kind="power", forward=1117.0, frequency_hz=MAIN_HZ, power_w=10.0)]
    made = law_picture(steps, None, None, side=0, dark=117.0, z0_ohm=50.0)
    assert made.points == ((1.0, 3.0, False),)
    rows = [text_of(row) for row in draw_law(scene().law, 60, 16, ASCII)]
    assert rows[-5].rstrip().endswith("!") or "!" in rows[-5]
    assert "1 W" in rows[-6]


@pytest.mark.parametrize("key", [key for key, *_ in (*KEYS, SIMULATED_KEY)])
def test_guide_lists_every_key_of_bench(key):
    """The guide tells each key of the bottom line."""
    assert f"{key} " in guide_text(False)


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_screen_opens_a_sheet_and_shows_it(size, path):
    """The app with a bench of three steps shows them and the key's state within the size; a question comes and goes."""
    sheet(path, *some_steps()[:3])

    async def look():
        feed = HandFeed()
        setting = BenchSetting(path)
        app = BridgewrightApp(feed, screen="bench", ascii=True, bench=setting)
        async with app.run_test(size=size) as pilot:
            await until(pilot, lambda: feed.post is not None)
            feed.post(snapshot(uncalibrated()))
            setting.tap.put([Tallies.of([0], [10], [117.0], [70.0])], None)
            await until(pilot, lambda: "117.0" in "\n".join(picture(app)))
            shown = "\n".join(picture(app))
            assert "dark" in shown
            assert "power" in shown
            assert "key up" in shown
            assert max(map(len, picture(app))) <= size[0]
            await pilot.press("n")
            await until(pilot, lambda: "A step of your own" in "\n".join(picture(app)))
            await pilot.press("escape")
            await until(pilot, lambda: "A step of your own" not in "\n".join(picture(app)))
        app.stop_feed()

    asyncio.run(asyncio.wait_for(look(), 20.0))
