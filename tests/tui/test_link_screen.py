"""The Link screen: facts that keep their place, at three sizes, in words, whatever the wire brings."""

import asyncio
import contextlib
import time
from dataclasses import replace
from types import SimpleNamespace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.account import Counters
from bridgeio.frames import Conditions, Nameplate, Remark
from bridgeio.journal import JournalState
from bridgeio.line_watch import CalibrationFacts, LineFacts
from bridgeio.recent import CountFacts
from tests.tui.fakes import OPEN, HandFeed, picture, reading, snapshot, until
from tui.alarm import AlarmState, KeyState, Limits
from tui.app import BridgewrightApp
from tui.drawing.count_words import count_facts, histogram
from tui.drawing.facts import Fact
from tui.drawing.glyphs import ASCII, UTF8
from tui.drawing.line import text_of, width_of
from tui.drawing.link import draw_link, wrapped
from tui.drawing.wire_words import bridge_facts, line_facts, remark_words, said_facts
from tui.messages import View
from tui.screens import SCREENS
from tui.screens.help import Help, guide_text
from tui.screens.link import KEYS, LinkScreen
from tui.screens.tune_up import TuneUp
from tui.trail import Trail

SIZES = [(120, 40), (80, 24), (40, 20)]
PLATE = Nameplate(0, 0, 0, 7, 0x1A2B3C4D, 10, 4, 16368, 2500, 3, 0x1518, 0x0102, "garden bridge")
COUNTS = CountFacts(100, 5000.0, 4990.0, 5010.0, 0.9, (1, 5, 20, 5, 1))
FILE = CalibrationFacts("garden shed", "/home/me/shed.bridge.toml", 0x1518, (20.0, 10.0), (20.4, 10.0), (0.8, 0.4))
EVIL = "\x1b]0;x\x07\u009b31m\u202e"
NOW_S = 1000.0


def facts(now_s=NOW_S, **more):
    """The facts of a line that is well."""
    known = {
        "port": "/dev/ttyUSB0",
        "baud": 115200,
        "simulated": False,
        "live": True,
        "heard_s": now_s - 0.02,
        "frames_hz": 101.4,
        "counters": Counters(),
        "clock_ppm": 12.4,
        "nameplate": PLATE,
        "conditions": Conditions(0, 0, 2510, 4980, 14_100_000),
        "remarks": (),
        "counts": (COUNTS, replace(COUNTS, mean=40.0, low=38.0, high=42.0)),
        "calibration": FILE,
    }
    return LineFacts(**known | more)


def view(now_s=NOW_S, lasting_s=0.25, silent=False, told=None, **more):
    """A view with these facts; `more` is of the snapshot."""
    shot = snapshot(reading(), facts=facts(now_s) if told is None else told, **more)
    return View(shot, now_s, 0.0, silent, silent, AlarmState(), Limits(), KeyState(), Trail(), lasting_s)


def texts(found):
    """Label -> text."""
    return {fact.label: fact.text for fact in found}


def test_line_that_is_well_is_told_so():
    """Port, rate, frames, nothing lost or damaged, and the clock."""
    told = texts(line_facts(view(), ASCII))
    assert told == {
        "port": "/dev/ttyUSB0",
        "state": "open, and frames come",
        "last frame": "less than 1 s ago",
        "frames": "101 a second",
        "lost": "none",
        "damaged": "none",
        "dropped": "none by the bridge",
        "came": "0 tallies, 0 others",
        "unknown": "none",
        "rate": "115200 baud",
        "clock": "12 ppm fast",
    }


def test_damage_is_told_by_kind():
    """Checksums, forms and lines apart; losses at least; the bridge's own drops; a newer wire."""
    counters = Counters(bad_crc=3, malformed=1, bad_lines=2, lost=12, dropped_flag=4, newer=1)
    told = texts(line_facts(view(told=facts(counters=counters)), ASCII))
    assert told["damaged"] == "3 checksums, 1 form, 2 lines"
    assert told["lost"] == "at least 12"
    assert told["dropped"] == "4 times by the bridge"
    assert told["unknown"] == "1 of a newer wire"


def test_silence_is_counted_on_by_our_own_clock():
    """No news for four seconds: the same facts say so, and the counts say `was`."""
    old = view(told=facts(heard_s=NOW_S - 4.2), silent=True)
    told = texts(line_facts(old, ASCII))
    assert told["state"] == "open but silent for 4 s"
    assert told["last frame"] == "4 s ago"
    assert told["frames"] == "none now"
    assert count_facts(old, ASCII, 0)[0].text.startswith("was 5000.0")


def test_slow_bridge_is_not_called_silent_between_its_frames():
    """One frame in two seconds is how this one talks."""
    slow = view(told=facts(heard_s=NOW_S - 1.9), lasting_s=6.0)
    assert texts(line_facts(slow, ASCII))["state"] == "open, and frames come"
    assert count_facts(slow, ASCII, 0)[0].text.startswith("5000.0")


@pytest.mark.parametrize(
    ("told", "file", "words"),
    [
        (0x1518, FILE, "1518, matches the file"),
        (0xBEEF, FILE, "BEEF differs, file 1518"),
        (0xBEEF, None, "BEEF, no file in use"),
        (0, FILE, "not told"),
    ],
)
def test_fit_of_the_board_is_compared_with_the_file(told, file, words):
    """Matches, differs, or not told."""
    made = facts(nameplate=replace(PLATE, bridge_file_id=told), calibration=file)
    assert texts(bridge_facts(view(told=made), ASCII))["fit"] == words


def test_nameplate_is_told_in_words():
    """Everything the board says of itself."""
    told = texts(bridge_facts(view(), ASCII))
    assert told["name"] == "garden bridge"
    assert told["device"] == "1A2B3C4D"
    assert told["start"] == "number 7, not restarted"
    assert told["period"] == "10 ms"
    assert told["full scale"] == "16368, of 4 summed"
    assert told["reference"] == "2500 mV"
    assert told["firmware"] == "0102 hex"
    assert told["tells"] == "crests, box"
    assert told["box"] == "25.1 C, supply 4980 mV"


def test_fields_keep_their_place_without_a_value():
    """Before anything came, without a nameplate, and with all: the same labels in as many rows, none empty."""
    nothing = facts(heard_s=None, nameplate=None, conditions=None, counts=None, calibration=None, clock_ppm=None)
    shot = view()
    blank = replace(shot, snapshot=replace(shot.snapshot, facts=None))
    for made in (line_facts, bridge_facts, lambda v, g: count_facts(v, g, 0)):
        groups = [made(each, ASCII) for each in (shot, view(told=nothing), blank)]
        assert {len(group) for group in groups} == {len(groups[0])}
        assert {frozenset(texts(group)) for group in groups} == {frozenset(texts(groups[0]))}
        assert all(fact.text for group in groups for fact in group)


@pytest.mark.parametrize(
    ("counts", "file", "words"),
    [
        (COUNTS, FILE, "0.9, the file says 0.8"),
        (replace(COUNTS, noise=4.0), FILE, "4: 5 times the file's 0.8"),
        (COUNTS, None, "0.9, a step gives 0.58"),
        (replace(COUNTS, noise=6.0), None, "6: 10 times a step's 0.58"),
        (replace(COUNTS, low=100.0, noise=900.0), FILE, "not told: counts move"),
        (replace(COUNTS, low=100.0, noise=1.0), FILE, "1, the file says 0.8"),
        (replace(COUNTS, noise=float("nan")), FILE, "one reading tells none"),
    ],
)
def test_noise_is_told_beside_what_it_should_be(counts, file, words):
    """By the bridge file, else by the converter's step (four summed: sqrt(4/12)); or the word for why it is not."""
    made = view(told=facts(counts=(counts, counts), calibration=file))
    assert texts(count_facts(made, ASCII, 0))["noise"] == words


def test_dark_count_is_told_beside_the_files():
    """The running one where it is known."""
    assert texts(count_facts(view(), ASCII, 0))["dark"] == "20.4 now, file 20.0"
    assert texts(count_facts(view(), ASCII, 1))["dark"] == "10.0 by the file"


def test_histogram_is_one_row_between_its_ends():
    """Lowest count, bars from few to many, highest count; nothing where nothing lies."""
    assert histogram(COUNTS, ASCII) == "4990 |.-#-.| 5010"
    assert histogram(replace(COUNTS, bars=(4, 0, 8)), UTF8) == "4990 |▅ █| 5010"
    assert histogram(replace(COUNTS, low=16_000_000, high=16_000_012), ASCII) == "|.-#-.| over 12"


def test_remark_is_told_with_code_argument_and_text():
    """Known codes in words, the builder's own by number."""
    assert remark_words(Remark(0, 0, 5, 0, "")) == "started by the watchdog (code 05)"
    assert remark_words(Remark(0, 0, 0x91, 7, "hot")) == "the builder's own remark (code 91, argument 7): hot"


def test_said_tells_the_journal_the_caution_and_remarks():
    """Whole sentences; a note goes before a caution."""
    remarks = ((NOW_S - 2.0, Remark(0, 0, 5, 0, "")),)
    stopped = JournalState("stopped", "the journal has stopped: disk full")
    said = said_facts(view(told=facts(remarks=remarks), caution="fits differ", journal=stopped), ASCII)
    assert texts(said) == {
        "reading": "fits differ",
        "link": "open",
        "journal": "the journal has stopped: disk full",
        "remark": "2 s ago: started by the watchdog (code 05)",
    }
    assert texts(said_facts(view(caution="a", note="b"), ASCII))["reading"] == "b"
    assert texts(said_facts(view(), ASCII))["reading"] == "by bridge file shed.bridge.toml, fit 1518"


@pytest.mark.parametrize("glyphs", [ASCII, UTF8], ids=["ascii", "utf8"])
def test_outside_text_is_escaped_wherever_it_stands(glyphs):
    """Port, names, file, remark, link, note, journal: none drives the terminal."""
    gone = SimpleNamespace(phase="lost", words=EVIL)
    plate, file = replace(PLATE, name=EVIL), replace(FILE, name=EVIL, source=EVIL)
    made = facts(port=EVIL, nameplate=plate, calibration=file, remarks=((0.0, Remark(0, 0, 0, 0, EVIL)),))
    for note in (EVIL, None):
        evil = view(told=made, link=gone, note=note, journal=JournalState("moved", EVIL))
        for width in (118, 78, 38):
            rows = [text_of(row) for row in draw_link(evil, width, 37, glyphs)]
            assert "".join(rows).isprintable()
            assert sum("\\x1b]0;x" in row for row in rows) >= 5


@given(st.integers(20, 160), st.integers(1, 60), st.booleans(), st.text(max_size=60))
def test_every_row_is_as_wide_as_asked(width, height, known, words):
    """Whatever is told, every row fills its width in cells."""
    made = view(told=facts(port=words), note=words) if known else replace(view(), snapshot=snapshot(None))
    assert {width_of(text_of(row)) for row in draw_link(made, width, height, UTF8)} == {width}


@given(st.text("ab \u4e2d", max_size=80), st.integers(1, 4), st.integers(13, 40))
def test_wrapped_loses_nothing_that_fits(words, most, width):
    """Rows together hold the words in order, or end with dots that say there was more."""
    rows = [text_of(row)[11:] for row in wrapped(Fact("x", words), width, most)]
    joined = "".join("".join(rows).split())
    assert len(rows) <= most
    assert joined == "".join(words.split()) or rows[-1].rstrip().endswith(".")


def test_two_columns_of_a_usual_terminal_hold_everything():
    """At 80x24 all groups and sentences fit the 21 rows between status and alarm."""
    assert len(draw_link(view(), 78, 21, ASCII)) == 21
    assert len(draw_link(view(), 118, 37, ASCII)) < 37


def test_trouble_is_told_whole_where_the_rest_is_cut():
    """At 80x24 a journal that has stopped says all of why."""
    words = "the journal has stopped: /home/me/contest.journal: database or disk is full; the reading goes on"
    rows = [text_of(row) for row in draw_link(view(journal=JournalState("stopped", words)), 78, 21, ASCII)]
    assert words.replace(" ", "") in "".join(row[11:] for row in rows[18:]).replace(" ", "")


# On the screen


@contextlib.asynccontextmanager
async def running(size=(80, 24), **options):
    """An app on Link with a feed by hand."""
    feed = HandFeed()
    app = BridgewrightApp(feed, **{"ascii": True, "screen": "link"} | options)
    async with app.run_test(size=size) as pilot:
        await until(pilot, lambda: feed.post is not None)
        yield app, feed, pilot
    app.stop_feed()


def check(coroutine):
    """Run a test's coroutine with a time-out."""
    asyncio.run(asyncio.wait_for(coroutine, 20.0))


async def sees(pilot, *words):
    """Wait until all words are on the screen."""
    await until(pilot, lambda: all(each in "\n".join(picture(pilot.app)) for each in words))


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_link_shows_the_most_important_at_every_size(size):
    """State, losses, damage, both counts and their noise, and the reading's calibration need no scrolling."""

    async def look():
        async with running(size) as (_, feed, pilot):
            feed.post(snapshot(reading(), facts=facts(time.monotonic(), counters=Counters(lost=3, bad_crc=1))))
            await sees(
                pilot, "open, and frames come", "at least 3", "1 checksum", "forward    5000.0", "reflected  40.0"
            )
            await sees(pilot, "0.9, the file says 0.8", "reading    by bridge file", "q quit")
            lines = picture(pilot.app)
            assert "".join(lines).isascii()
            assert max(map(len, lines)) <= size[0]

    check(look())


def test_link_scrolls_where_not_all_fits():
    """The arrows reach the last fact and come back, no further."""

    async def look():
        async with running((40, 20)) as (_, feed, pilot):
            feed.post(snapshot(reading(), facts=facts(time.monotonic())))
            await sees(pilot, "port       /dev/ttyUSB0")
            await pilot.press(*["pagedown"] * 9)
            await sees(pilot, "clock      12 ppm fast")
            await pilot.press("up")
            await until(pilot, lambda: "clock" not in "\n".join(picture(pilot.app)))
            await pilot.press(*["pageup"] * 9)
            await sees(pilot, "port       /dev/ttyUSB0")

    check(look())


def test_key_s_goes_round_the_screens_and_each_is_alive():
    """Tune-up, Link, Tune-up: the newest reading stands on whichever is up, in the colours in force."""

    async def look():
        async with running(screen="tune-up", ascii=False) as (app, feed, pilot):
            for _ in range(2):
                feed.post(snapshot(reading(), facts=facts(time.monotonic())))
                await sees(pilot, "1.35-1.50")
                await pilot.press("d", "s")
                await until(pilot, lambda: isinstance(app.screen, LinkScreen))
                await sees(pilot, "open, and frames come")
                light = app.screen.styles.background
                await pilot.press("s")
                await until(pilot, lambda: isinstance(app.screen, TuneUp))
                await sees(pilot, "1.35-1.50")
                assert app.screen.styles.background == light

    check(look())


def test_key_s_is_a_letter_where_something_is_typed_and_nothing_in_the_help():
    """No screen is changed from under a question or the guide."""

    async def look():
        async with running(screen="tune-up") as (app, _feed, pilot):
            await pilot.press("f", "s")
            assert isinstance(app.screen, TuneUp)
            await pilot.press("escape", "question_mark")
            await until(pilot, lambda: isinstance(app.screen, Help))
            await pilot.press("s")
            await pilot.pause()
            assert isinstance(app.screen, Help)

    check(look())


def test_alarm_rings_on_whichever_screen_is_up(monkeypatch):
    """The bell and its words do not need Tune-up."""

    async def look():
        bells = []
        async with running(limits=Limits(2.0)) as (app, feed, pilot):
            monkeypatch.setattr(app, "bell", lambda: bells.append(1))
            for _ in range(3):
                feed.post(snapshot(reading(0.5)))
                await pilot.pause()
            await sees(pilot, "!! OVER THE LIMIT: SWR 2 !!")
            assert bells == [1]

    check(look())


@pytest.mark.parametrize("screen", ["tune-up", "link"])
def test_journal_in_trouble_is_told_and_rings_once(monkeypatch, screen):
    """Recording is quiet; stopped is told and rings once; recording again and stopped again rings again."""
    well, ill = JournalState("recording", "recording to x"), JournalState("stopped", "the journal has stopped: full")
    words = {"tune-up": ("journal", "journal stopped"), "link": ("recording to x", "the journal has stopped: full")}[
        screen
    ]

    async def look():
        bells = []
        async with running(screen=screen) as (app, feed, pilot):
            monkeypatch.setattr(app, "bell", lambda: bells.append(1))
            for expected in (1, 2):
                feed.post(snapshot(reading(), journal=well))
                await until(pilot, lambda: any(line.endswith(words[0]) for line in picture(app)))
                assert len(bells) == expected - 1
                for _ in range(3):
                    feed.post(snapshot(reading(), journal=ill))
                    await pilot.pause()
                await sees(pilot, words[1])
                assert len(bells) == expected

    check(look())


def test_caution_stands_on_tune_up_where_there_is_no_note():
    """What the board says against its file; a note goes before it."""

    async def look():
        async with running((120, 40), screen="tune-up") as (_, feed, pilot):
            feed.post(snapshot(reading(), caution="the board was given fit 1"))
            await sees(pilot, "the board was given fit 1")
            feed.post(snapshot(reading(), caution="the board was given fit 1", note="counts only"))
            await until(
                pilot, lambda: "counts only" in (text := "\n".join(picture(pilot.app))) and "given fit" not in text
            )

    check(look())


def test_link_is_drawn_a_few_times_a_second(monkeypatch):
    """Sixty snapshots in a row are drawn hardly more often than the time they took allows."""

    async def look():
        drawn = []
        async with running() as (_, feed, pilot):
            draw = LinkScreen.draw
            monkeypatch.setattr(LinkScreen, "draw", lambda self, view: drawn.append(1) or draw(self, view))
            began_s = time.monotonic()
            for _ in range(60):
                feed.post(snapshot(reading(), facts=facts(time.monotonic())))
                await pilot.pause()
            assert len(drawn) <= 4.0 * (time.monotonic() - began_s) + 3

    check(look())


def test_silent_feed_is_told_on_link_with_no_news_at_all():
    """The same snapshot, a second later, says how long nothing has come."""

    async def look():
        async with running() as (_, feed, pilot):
            feed.post(snapshot(reading(), facts=facts(time.monotonic()), link=OPEN))
            await sees(pilot, "open, and frames come")
            await sees(pilot, "open but silent for 1 s", "was 5000.0")

    check(look())


@pytest.mark.parametrize("name", SCREENS)
@pytest.mark.parametrize("size", SIZES, ids=str)
def test_every_screen_is_named_alive_and_has_its_keys(name, size):
    """Each screen of the table starts, shows the way to the next one, help and the end, and fits."""

    async def look():
        async with running(size, screen=name) as (app, feed, pilot):
            feed.post(snapshot(reading()))
            await sees(pilot, "s screen", "? help", "q quit")
            assert isinstance(app.screen, SCREENS[name])
            assert max(map(len, picture(app))) <= size[0]

    check(look())


@pytest.mark.parametrize("key", [key for key, *_ in KEYS])
def test_guide_lists_every_key_of_link(key):
    """The guide tells each key of the bottom line."""
    lines = guide_text(False).splitlines()
    assert any(line.startswith((f"- {key} ", f"{key} ")) for line in lines)
