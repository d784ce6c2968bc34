"""The screen program: pictures at three sizes, keys, staleness, and what it costs."""

import asyncio
import contextlib
import random
import time
from types import SimpleNamespace

import pytest
from textual.screen import Screen
from textual.widgets import Input

from calibration.flags import FLAGS
from tests.tui.fakes import HandFeed, below, no_carrier, picture, reading, snapshot, together, uncalibrated, until
from tui.alarm import Limits
from tui.app import BridgewrightApp
from tui.screens.help import Help
from tui.widgets.rows import Rows

SIZES = [(120, 40), (80, 24), (40, 20)]
LIMITS = Limits(2.0, 120.0, 10.0)


@contextlib.asynccontextmanager
async def running(size=(80, 24), **options):
    """An app with a feed by hand, after its first paint."""
    feed = HandFeed()
    app = BridgewrightApp(feed, **{"limits": LIMITS, "ascii": True} | options)
    feed.look = lambda: "\n".join(picture(app))
    async with app.run_test(size=size) as pilot:
        await until(pilot, lambda: feed.post is not None)
        yield app, feed, pilot
    app.stop_feed()


async def shown(pilot, feed, words, *readings, **more):
    """Send readings, one after the other, until `words` are on the screen."""
    for each in readings:
        feed.post(snapshot(each, **more))
        await pilot.pause()
    await until(pilot, lambda: words in "\n".join(picture(pilot.app)))
    return picture(pilot.app)


def check(coroutine):
    """Run a test's coroutine with a time-out."""
    asyncio.run(asyncio.wait_for(coroutine, 20.0))


PICTURES = {
    (80, 24): """\
 garden shed bridge    14.100 MHz 20 m   20/s, nothing lost     key down 0/10 s
 simulated

                _
 SWR   |   |_|  _|           1.35-1.50                net 48 W
       | .   | |_                                         45-51 W

 1     1.2     1.5         2     2.5    3      4    5      7    10     20    oo
 |------+---[=#=]----------!------+-----+------+----+------+----+------+------|
              *                                                             now
              :
              :                                                            -5 s
              :
              :                                                           -15 s
              :
              :                                                           -30 s
              :
              :                                                           -60 s
              best 1.420                                            at the best

 forward 49 W           |###########].................................| 200 W
         47-52 W         delivered 48 W                 returned 1.5 W
 no alarm   limits SWR 2, 120 W forward, key down 10 s
 f frequency  b forget best  a alarm  d dark/light  s screens  ? help  q quit""",
    (40, 20): """\
 14.100 MHz 20 m        key down 0/10 s
 simulated; garden shed bridge
                _
 SWR   |   |_|  _|       1.35-1.50
       | .   | |_
 1 1.2 1.5   2      3     5    10    oo
 |--+-[#]----!------+-----+----+------|
       *
       :
       :
       :
       :
       :
       :
       :
       best 1.420           at the best
 forward |#####................| 200 W
 49 W                  net 48  back 1.5
 no alarm; SWR 2, 120 W, 10 s
 f freq b best s screen ? help q quit""",
}


@pytest.mark.parametrize("size", PICTURES, ids=str)
def test_tune_up_shows_this_picture(size):
    """The whole screen of one steady reading, cell by cell."""

    async def look():
        async with running(size) as (_, feed, pilot):
            lines = await shown(pilot, feed, "at the best", *[reading(0.1736, "simulated") for _ in range(2)])
            assert "\n".join(lines).rstrip("\n") == PICTURES[size]

    check(look())


@pytest.mark.parametrize("size", SIZES, ids=str)
@pytest.mark.parametrize(
    ("made", "words"),
    [
        (reading(), "1.35-1.50"),
        (no_carrier(), "no carrier"),
        (below(), "below what can be read"),
        (reading(1.02, "over-unity"), "beyond unity"),
        (uncalibrated(), "counts 1234 / 56"),
    ],
    ids=["sound", "no-carrier", "below-reading", "over-unity", "uncalibrated"],
)
def test_tune_up_any_reading_says_its_words_and_nothing_jumps(size, made, words):
    """At every size each reading is told in words, in ASCII, and the fixed parts stand in the same cells."""

    async def look():
        async with running(size) as (_, feed, pilot):
            before = await shown(pilot, feed, "no carrier", no_carrier())
            after = await shown(pilot, feed, words, made)
            assert "".join(after).isascii()
            assert max(len(line) for line in after) <= size[0]
            assert len(after) == size[1]
            for part in ("SWR", "1 ", "forward", "f fr"):
                assert [row.find(part) for row in after].count(1) >= 1, part
            labels = next(row for row in before if row.startswith(" 1 "))
            assert labels in after
            assert before.index(labels) == after.index(labels)

    check(look())


def test_feed_starts_after_the_first_paint():
    """The first picture stands before the feed is started."""

    async def look():
        async with running() as (_, feed, _pilot):
            assert "no reading yet" in feed.started_with
            assert "q quit" in feed.started_with

    check(look())


def test_first_picture_is_drawn_before_anything_is_laid_out():
    """The screen comes with its words when it is mounted: no blank picture first, no second one to wait for."""

    async def look():
        seen = []

        class Noted(BridgewrightApp):
            def on_ready(self):
                seen.append({rows.id: rows.text for rows in self.screen.query(Rows)})

        app = Noted(HandFeed(), ascii=True)
        async with app.run_test(size=(80, 24)) as pilot:
            await until(pilot, lambda: seen)
        assert "no reading yet" in seen[0]["head"]
        assert seen[0]["keys"].endswith("q quit")

    check(look())


def test_feed_that_cannot_start_ends_the_program_with_its_error():
    """What start raises comes out of run, for the command line to put into words."""

    class Broken(HandFeed):
        def start(self, post):
            raise OSError("no such port")

    app = BridgewrightApp(Broken(), ascii=True)
    with pytest.raises(OSError, match="no such port"):
        app.run(headless=True, size=(80, 24))


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_stale_is_shown_when_readings_stop(size):
    """Without a frame the number is called stale within a second, with no news from the feed at all."""

    async def look():
        async with running(size) as (_, feed, pilot):
            await shown(pilot, feed, "1.35-1.50", reading())
            last_s = time.monotonic()
            lines = await shown(pilot, feed, "stale")
            assert time.monotonic() - last_s < 1.0
            text = "\n".join(lines)
            assert "was 1.35-1.50" in text
            assert "key ?" in text
            assert "no alarm" not in text.replace("no alarm can be given", "")

    check(look())


def test_stale_shows_the_words_of_the_link_and_ends_with_the_next_reading():
    """The link's own words say why; a fresh reading is fresh at once."""

    async def look():
        async with running() as (_, feed, pilot):
            old = reading()
            await shown(pilot, feed, "1.35-1.50", old)
            gone = SimpleNamespace(phase="lost", words="/dev/ttyUSB0 is gone")
            await shown(pilot, feed, "stale: /dev/ttyUSB0 is gone", old, link=gone)
            lines = await shown(pilot, feed, "1.46-1.62", reading(0.2104))
            assert "stale" not in "\n".join(lines)

    check(look())


def test_stale_flag_of_a_reading_is_believed():
    """A reading that is flagged stale is stale however recently it came."""

    async def look():
        async with running() as (_, feed, pilot):
            lines = await shown(pilot, feed, "stale:", reading(0.1736, "stale"))
            assert "was 1.35-1.50" in "\n".join(lines)

    check(look())


def test_trail_gets_every_reading_though_few_are_painted():
    """Readings between two paints are in the trail: none of a burst is lost."""

    async def look():
        async with running() as (app, feed, pilot):
            rhos = [0.1 + 0.001 * n for n in range(300)]
            for rho in rhos:
                feed.post(snapshot(reading(rho)))
            await until(pilot, lambda: any(each.last == rhos[-1] for each in app._trail.bins()))
            bins = list(app._trail.bins())
            assert min(each.low for each in bins) == pytest.approx(0.1)
            assert sum(each.high - each.low for each in bins) > 0.28

    check(look())


def test_alarm_rings_once_for_two_frames_over_the_limit(monkeypatch):
    """One frame over the limit is silent; the second rings the bell, further ones do not."""

    async def look():
        bells = []
        async with running() as (app, feed, pilot):
            monkeypatch.setattr(app, "bell", lambda: bells.append(1))
            text = "\n".join(await shown(pilot, feed, "2.1-2.6", reading(0.4, half=0.045)))
            assert "OVER" not in text
            assert bells == []
            await shown(pilot, feed, "!! OVER THE LIMIT: SWR 2 !!", reading(0.4), reading(0.4), reading(0.41))
            assert bells == [1]

    check(look())


def test_alarm_sees_readings_of_a_batch_that_are_never_shown(monkeypatch):
    """Two frames over the limit ring, though they came in one batch whose last reading alone is shown."""

    async def look():
        bells, well, bad = [], reading(), reading(0.5)
        async with running() as (app, feed, pilot):
            monkeypatch.setattr(app, "bell", lambda: bells.append(1))
            lines = await shown(pilot, feed, "!! OVER", well, batch=together(well, bad, bad, well))
            assert "1.35-1.50" in "\n".join(lines)
            assert bells == [1]

    check(look())


def test_alarm_far_end_beyond_the_limit_is_silent(monkeypatch):
    """Only the far end of the interval beyond the limit may exceed, without sound."""

    async def look():
        bells = []
        async with running() as (app, feed, pilot):
            monkeypatch.setattr(app, "bell", lambda: bells.append(1))
            await shown(pilot, feed, "! may exceed SWR 2", *[reading(0.32) for _ in range(4)])
            assert bells == []

    check(look())


def test_key_f_sets_the_frequency_and_refuses_nonsense():
    """A frequency reaches the feed; nonsense is refused in words, Escape leaves all as it was."""

    async def look():
        async with running() as (app, feed, pilot):
            await pilot.press("f", *"7.1M", "enter")
            assert feed.frequencies == [7.1e6]
            await pilot.press("f", *"quick", "enter")
            await until(pilot, lambda: "'quick' is no frequency" in "\n".join(picture(app)))
            await pilot.press("escape")
            await until(pilot, lambda: "f frequency" in picture(app)[-1])
            assert feed.frequencies == [7.1e6]

    check(look())


def test_key_a_sets_the_limits():
    """Limits typed are limits used; a hyphen is none."""

    async def look():
        async with running() as (app, feed, pilot):
            await shown(pilot, feed, "limits SWR 2, 120 W forward, key down 10 s")
            await pilot.press("a")
            app.screen.query_one(Input).value = ""
            await pilot.press(*"3", "space", "minus", "space", *"5", "enter")
            assert app.limits == Limits(3.0, None, 5.0)
            await until(pilot, lambda: "limits SWR 3, key down 5 s" in "\n".join(picture(app)))

    check(look())


@pytest.mark.parametrize(
    ("text", "reason"),
    [("0.9", "wanted above 1"), ("2 x", "no number"), ("1 2 3 4", "4 numbers"), ("2,120,10", "no number")],
)
def test_key_a_refuses_what_is_no_limit(text, reason):
    """What cannot be a limit is refused with the reason and changes nothing."""

    async def look():
        async with running((120, 40)) as (app, _feed, pilot):
            await pilot.press("a")
            app.screen.query_one(Input).value = text
            await pilot.press("enter")
            await until(pilot, lambda: reason in "\n".join(picture(app)))
            assert app.limits == LIMITS

    check(look())


def test_key_b_forgets_the_best_and_so_does_another_frequency():
    """Both begin a new tune-up."""

    async def look():
        async with running() as (app, feed, pilot):
            await shown(pilot, feed, "best 1.42", *[reading() for _ in range(3)])
            await pilot.press("b")
            await until(pilot, lambda: "no best point yet" in "\n".join(picture(app)))
            await shown(pilot, feed, "best 1.42", *[reading() for _ in range(3)])
            await shown(pilot, feed, "no best point yet", reading(), frequency_hz=7.1e6)

    check(look())


def test_reading_stays_alive_while_a_question_is_asked():
    """The prompt takes only the bottom line; readings go on above it."""

    async def look():
        async with running() as (app, feed, pilot):
            await pilot.press("f")
            lines = await shown(pilot, feed, "1.35-1.50", reading())
            assert lines[-1].startswith(" frequency (")
            assert app.screen.query_one(Input).has_focus

    check(look())


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_key_question_mark_shows_the_guide_and_goes_back(size):
    """Help covers the screen, scrolls, and Escape returns to the reading."""

    async def look():
        async with running(size) as (app, _feed, pilot):
            await pilot.press("question_mark")
            await until(pilot, lambda: isinstance(app.screen, Help) and "no safety interlock" in "".join(picture(app)))
            assert "".join(picture(app)).isascii()
            await pilot.press("escape")
            await until(pilot, lambda: "no reading yet" in "\n".join(picture(app)))

    check(look())


def test_key_d_goes_from_dark_to_light_and_back():
    """The ground and the text change, the words do not."""

    async def look():
        async with running(ascii=False) as (app, _feed, pilot):
            dark, text = app.screen.styles.background, picture(app)
            await pilot.press("d")
            await until(pilot, lambda: app.screen.styles.background != dark)
            assert picture(app) == text
            await pilot.press("d")
            await until(pilot, lambda: app.screen.styles.background == dark)

    check(look())


@pytest.mark.parametrize("key", ["q", "ctrl+c"])
def test_key_q_quits_and_stops_the_feed_once(key):
    """The program ends and the feed is stopped."""

    async def look():
        feed = HandFeed()
        app = BridgewrightApp(feed, ascii=True)
        async with app.run_test() as pilot:
            await until(pilot, lambda: feed.post is not None)
            await pilot.press(key)
            await until(pilot, lambda: not app.is_running)
        app.stop_feed()
        app.stop_feed()
        assert feed.stops == 1

    check(look())


def test_mouse_on_the_bottom_line_does_what_the_key_does():
    """A click on a key runs it."""

    async def look():
        async with running() as (app, _feed, pilot):
            column = picture(app)[-1].index("? help")
            await pilot.click(offset=(column, 23))
            await until(pilot, lambda: isinstance(app.screen, Help))

    check(look())


def test_without_color_nothing_has_a_color():
    """With color off every cell is in the terminal's own colours, also beneath the library's widgets."""

    async def look():
        async with running(color=False) as (app, feed, pilot):
            await shown(pilot, feed, "!! OVER", *[reading(0.5) for _ in range(3)])
            for strip in app.screen._compositor.render_strips():
                for segment in strip:
                    for color in (segment.style.color, segment.style.bgcolor) if segment.style else ():
                        assert color is None or color.is_default, (segment.text, color)

    check(look())


def test_hostile_names_reach_the_screen_as_escapes():
    """No control, C1 or bidi character of outside text is on the screen."""

    async def look():
        evil = "\x1b]0;x\x07\u009b31m\u202e"
        lost = SimpleNamespace(phase="lost", words=evil)
        async with running((120, 40), ascii=False) as (_, feed, pilot):
            old = reading()
            await shown(pilot, feed, "1.35-1.50", old)
            lines = await shown(pilot, feed, "stale: \\x1b]0", old, bridge=evil, note=evil, link=lost)
            assert "".join(lines).isprintable()

    check(look())


def test_tick_needs_no_layout_and_unchanged_text_no_repaint(monkeypatch):
    """Readings never cause a new layout, and the same reading again repaints next to nothing."""

    async def look():
        layouts, dirty = [], []
        async with running((120, 40)) as (_app, feed, pilot):
            await shown(pilot, feed, "at the best", *[reading() for _ in range(3)])
            refresh_layout, refresh = Screen._refresh_layout, Rows.refresh
            monkeypatch.setattr(Screen, "_refresh_layout", lambda *a, **k: layouts.append(1) or refresh_layout(*a, **k))
            monkeypatch.setattr(
                Rows, "refresh", lambda self, *r, **k: dirty.append((self.id, r)) or refresh(self, *r, **k)
            )
            for seed in range(20):
                await shown(pilot, feed, "SWR", reading(0.2 + random.Random(seed).uniform(-0.05, 0.05)))
            assert layouts == []
            assert all(regions for _, regions in dirty), "a whole widget was repainted"
            await shown(pilot, feed, "1.4-1.7", reading(0.2, half=0.05))
            dirty.clear()
            for _ in range(10):
                await shown(pilot, feed, "SWR", reading(0.2, half=0.05))
            assert {name for name, _ in dirty} <= {"status", "head", "trail", "best"}

    check(look())


def test_resize_draws_for_the_new_size():
    """From wide to narrow and back, the picture fits."""

    async def look():
        async with running((120, 40)) as (app, feed, pilot):
            await shown(pilot, feed, "1.35-1.50", reading())
            await pilot.resize_terminal(40, 20)
            await until(pilot, lambda: "f freq b best" in picture(app)[-2] + picture(app)[-1])
            assert max(len(line) for line in picture(app)) <= 40
            await pilot.resize_terminal(80, 24)
            await until(pilot, lambda: "f frequency  b forget" in "\n".join(picture(app)))

    check(look())


def test_all_flags_at_once_are_survived():
    """Any mixture of flags is drawn."""

    async def look():
        async with running() as (_, feed, pilot):
            for seed in range(30):
                spread = random.Random(seed)
                flags = [name for name in FLAGS if spread.random() < 0.4]
                await shown(pilot, feed, "SWR", reading(spread.uniform(0, 1.3), *flags, half=spread.uniform(0, 0.5)))

    check(look())


def test_z_takes_the_new_zero_and_gives_it_back():
    """The remark offers the key; the first press asks the feed for the running dark count, the next for the old one."""

    async def run():
        async with running() as (_, feed, pilot):
            await shown(pilot, feed, "zero has moved: z takes", reading(0.2, "dark-moved"))
            await pilot.press("z")
            await until(pilot, lambda: feed.zeros == [True])
            await pilot.press("z")
            await until(pilot, lambda: feed.zeros == [True, False])

    check(run())
