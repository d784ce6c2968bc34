"""Drawing as pure functions: the scale, the trail, the ribbon, the figures, the quiet lines."""

import itertools
import math
from types import SimpleNamespace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.tui.fakes import below, no_carrier, reading, snapshot, uncalibrated
from tui.alarm import AlarmState, KeyState, Limits
from tui.drawing.digits import large
from tui.drawing.edges import draw_alarm, draw_best, draw_remarks, draw_status
from tui.drawing.glyphs import ASCII, UTF8
from tui.drawing.head import draw_head
from tui.drawing.line import Line, fit, outside, text_of, width_of
from tui.drawing.ribbon import draw_ribbon, full_length_w
from tui.drawing.scale import draw_scale
from tui.drawing.thread import age_at, draw_trail, part_at
from tui.palette import ROLES
from tui.readout import NOTHING, read_out
from tui.trail import SPAN_S, Bin, Relation
from tui.widgets.key_bar import draw_keys
from tui.widgets.rows import changed_span

WIDTHS = (38, 78, 118)
#: Among them characters that join with their neighbours: marks, selectors, flags, skin tones, Hangul parts.
OUTSIDE_TEXTS = st.text(
    st.characters() | st.sampled_from("e\u0301\ufe0f\u200d\U0001f44d\U0001f3fb\U0001f1e6\u1100\u1161\u4e2d"),
    max_size=30,
).map(lambda text: outside(text, ascii_only=False))
ODD = (NOTHING, *(read_out(made) for made in (no_carrier(), below(), uncalibrated(), reading(1.02, "over-unity"))))


def at(rows):
    """Texts of rows."""
    return [text_of(row) for row in rows]


def thread(rhos, step_s=0.05, now_s=100.0):
    """Bins, newest first, of readings that came every `step_s` and end now; `rhos` oldest first."""
    return [Bin(now_s - n * step_s, now_s - n * step_s, rho, rho, rho) for n, rho in enumerate(reversed(rhos))]


# The scale


def test_draw_scale_at_78_cells_is_this_picture():
    """SWR 1.42 inside 1.35-1.50, the alarm limit at 2."""
    assert at(draw_scale(read_out(reading()).rho, 78, ASCII, limit_rho=1 / 3)) == [
        "1     1.2     1.5         2     2.5    3      4    5      7    10     20    oo",
        "|------+---[=#=]----------!------+-----+------+----+------+----+------+------|",
    ]


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize(("value", "share"), [(1.0, 0.0), (1.5, 0.2), (2.0, 1 / 3), (3.0, 0.5), (9.0, 0.8)])
def test_draw_scale_mark_stands_at_its_rho(width, value, share):
    """An SWR's mark stands at the share (S - 1)/(S + 1) of the width."""
    track = at(draw_scale(read_out(reading((value - 1) / (value + 1))).rho, width, ASCII))[1]
    assert abs(track.index("#") - share * (width - 1)) <= 0.5


@pytest.mark.parametrize("width", WIDTHS)
def test_draw_scale_labels_stand_at_their_rho(width):
    """Each label's middle is at most one cell from its SWR's place, and the least useful find no room first."""
    labels = at(draw_scale(NOTHING.rho, width, ASCII))[0]
    words = labels.split()
    assert set(words) >= {"1", "1.2", "1.5", "2", "3", "5", "10", "oo"}
    for word in words[1:-1]:
        middle = labels.index(f" {word} ") + 1 + (len(word) - 1) / 2
        assert abs(middle - (float(word) - 1) / (float(word) + 1) * (width - 1)) <= 1.0


@given(st.floats(0, 1.2), st.floats(0.001, 0.6), st.integers(20, 200))
def test_draw_scale_any_reading_is_drawn_inside_its_interval(rho, half, width):
    """The mark never stands alone outside its band, and the track keeps its width."""
    track = at(draw_scale(read_out(reading(rho, half=half)).rho, width, ASCII))[1]
    assert len(track) == width
    assert track.count("#") == 1
    left, right = track.find("["), max(track.find("]"), track.find(">"))
    assert left <= track.index("#")
    assert right == -1 or right >= track.index("#")


def test_draw_scale_below_reading_has_a_band_and_no_mark():
    """Only the bound is known, so only the bound is drawn."""
    track = at(draw_scale(read_out(below()).rho, 78, ASCII))[1]
    assert track.startswith("[==]---")
    assert "#" not in track


def test_draw_scale_without_upper_bound_runs_open_to_the_end():
    """An interval without an upper end reaches the end of the scale and is not closed there."""
    assert at(draw_scale(read_out(reading(0.9, half=0.2)).rho, 78, ASCII))[1].endswith("=>")


def test_draw_scale_stale_mark_has_another_shape():
    """An old reading's mark is told apart without colour."""
    track = at(draw_scale(read_out(reading(), stale=True).rho, 78, ASCII, stale=True))[1]
    assert "[=?=]" in track


# The trail


@given(st.floats(0, SPAN_S))
def test_part_at_is_the_inverse_of_age_at(age_s):
    """Age to place and back gives the age."""
    assert age_at(part_at(age_s)) == pytest.approx(age_s, abs=1e-9)


def test_age_at_gives_the_last_seconds_most_room():
    """The newest 15 s get nearly half the height, and the bottom is the full span."""
    assert 0.4 < part_at(15.0) < 0.5
    assert age_at(1.0) == SPAN_S


def test_draw_trail_is_this_picture():
    """A knob turned through a dip: the thread bends left and back, the rule of the best runs through all rows."""
    turned = [0.5 - 0.4 * n / 160 for n in range(160)] + [0.1 + 0.3 * n / 80 for n in range(80)]
    rows = draw_trail(thread(turned), 100.0, 50, 8, ASCII, best_rho=0.1)
    assert [row.rstrip() for row in at(rows)] == [
        "     :      ********                           now",
        "     ********",
        "     :   *************",
        "     :               *****                   -15 s",
        "     :",
        "     :                                       -30 s",
        "     :",
        "     :                                       -60 s",
    ]


@given(st.lists(st.floats(0, 1), min_size=2, max_size=200), st.integers(10, 120), st.integers(1, 40))
def test_draw_trail_without_gaps_is_one_unbroken_thread(rhos, width, height):
    """Every row from the newest to the oldest reading holds part of the thread, touching the one above."""
    for glyphs in (ASCII, UTF8):
        rows = at(draw_trail(thread(rhos), 100.0, width, height, glyphs))
        cells = [[x for x, char in enumerate(row) if char == "*" or 0x2800 < ord(char) < 0x2900] for row in rows]
        drawn = [found for found in cells if found]
        assert cells[0]
        assert cells[: len(drawn)] == drawn
        for upper, lower in itertools.pairwise(drawn):
            assert min(lower) <= max(upper) + 1
            assert max(lower) >= min(upper) - 1


def test_draw_trail_moves_its_old_part_in_steps():
    """Within a fifth of a second only the newest seconds move: rows that need no repaint cost nothing."""
    rhos = [0.5 + 0.4 * math.sin(n / 9) for n in range(1200)]
    pictures = [draw_trail(thread(rhos), 100.0 + late_s, 118, 26, UTF8) for late_s in (0.01, 0.15, 0.21)]
    assert pictures[0][:3] != pictures[1][:3]
    assert pictures[0][4:] == pictures[1][4:]
    assert pictures[1][4:] != pictures[2][4:]


def test_draw_trail_with_a_silence_has_a_gap():
    """Readings more than the gap apart are not joined: nothing is known of the time between."""
    bins = [Bin(100.0, 100.0, 0.5, 0.5, 0.5), Bin(80.0, 80.0, 0.5, 0.5, 0.5)]
    rows = at(draw_trail(bins, 100.0, 40, 10, ASCII, gap_s=0.35))
    assert sum("*" in row for row in rows) == 2
    joined = at(draw_trail(bins, 100.0, 40, 10, ASCII, gap_s=30.0))
    assert sum("*" in row for row in joined) > 2


def test_draw_trail_older_than_a_minute_is_not_drawn():
    """What is older than the span is gone from the picture."""
    assert not any("*" in row for row in at(draw_trail(thread([0.5]), 100.0 + SPAN_S + 1, 40, 10, ASCII)))


def test_draw_trail_narrow_leaves_the_times_out():
    """Forty columns belong to the thread."""
    assert not any("s" in row for row in at(draw_trail(thread([0.5]), 100.0, 38, 10, ASCII)))


# The ribbon


@pytest.mark.parametrize(
    ("crest_w", "full_w"), [(0.0, 1), (1.0, 1), (1.2, 2), (2.0, 2), (4.9, 5), (49.4, 50), (50.1, 100), (1400, 2000)]
)
def test_full_length_is_the_next_step_of_1_2_5(crest_w, full_w):
    """The ribbon's length is a round number at or above the power."""
    assert full_length_w(crest_w) == full_w


def test_draw_ribbon_is_split_where_the_returned_part_begins():
    """At SWR 3 a quarter comes back; forward is half of the length."""
    readout = read_out(reading(0.5, forward=50.0, power_pct=0.001))
    ribbon = at(draw_ribbon(readout, 100.0, 78, ASCII))[0]
    inside = ribbon[ribbon.index("|") + 1 : ribbon.rindex("|")]
    assert inside.count("#") + inside.count("%") == pytest.approx(len(inside) / 2, abs=1)
    assert inside.count("%") == pytest.approx(len(inside) / 8, abs=1)
    assert inside.startswith("#" * inside.count("#") + "%")


def test_draw_ribbon_draws_how_much_higher_forward_may_be():
    """The upper half of forward's interval stands beyond the tip."""
    ribbon = at(draw_ribbon(read_out(reading(0.0, forward=50.0, power_pct=20.0)), 100.0, 78, ASCII))[0]
    assert "#==" in ribbon.replace("%", "#")
    assert "=]." in ribbon


def test_draw_ribbon_says_delivered_and_returned():
    """The words beneath the ribbon carry the values."""
    words = at(draw_ribbon(read_out(reading(0.5, forward=50.0)), 100.0, 78, ASCII))[1]
    assert "delivered 38 W" in words
    assert "returned 12.5 W" in words or "returned 13 W" in words or "returned 12 W" in words


# The figures


@given(st.text("0123456789.", min_size=1, max_size=6))
def test_large_any_number_is_three_even_rows(text):
    """All rows of a number are equally wide, in both alphabets, fresh and stale; ASCII stays ASCII."""
    for ascii_only in (False, True):
        for stale in (False, True):
            rows = large(text, ascii_only, stale)
            assert len({len(row) for row in rows}) == 1
            assert not ascii_only or "".join(rows).isascii()


@pytest.mark.parametrize("ascii_only", [False, True])
def test_large_figures_differ_and_are_equally_wide(ascii_only):
    """No two figures look alike and none moves its neighbours; a stale one shares no stroke with a fresh one."""
    shapes = {large(figure, ascii_only) for figure in "0123456789"}
    assert len(shapes) == 10
    assert len({len(shape[0]) for shape in shapes}) == 1
    for figure in "0123456789":
        fresh = set("".join(large(figure, ascii_only))) - {" "}
        assert not fresh & set("".join(large(figure, ascii_only, stale=True)))


# The head and the quiet lines


def test_draw_head_is_this_picture():
    """Figures, interval beside them, direction below it, net power to the right."""
    assert [row.rstrip() for row in at(draw_head(read_out(reading()), "", -1, 78, ASCII))] == [
        "               _",
        "SWR   |   |_|  _|           1.35-1.50                net 48 W",
        "      | .   | |_            << better                    45-51 W",
    ]


def test_draw_head_stale_says_why_and_was():
    """An old value is told as old, with the link's words."""
    rows = at(draw_head(read_out(reading(), stale=True), "stale: open but silent for 4 s", None, 78, ASCII))
    assert "stale: open but silent for 4 s" in rows[0]
    assert "was 1.35-1.50" in rows[1]
    assert "net was 48 W" in rows[1]


def test_draw_head_keeps_the_places_of_its_fields():
    """The interval, or what stands for it, and net power begin in the same cells whatever is missing."""
    for readout in ODD:
        row = at(draw_head(readout, "", 0, 78, ASCII))[1]
        assert row[53:57] == "net "
        assert row[:3] == "SWR"
        assert row[27] == " "
        assert row[52] == " "


def test_draw_status_at_78_and_38_cells():
    """The narrow line leaves the name out, never the frequency or the key-down clock."""
    key, limits = KeyState(True, 4.2), Limits(2, 120, 10)
    wide = text_of(draw_status(snapshot(), key, limits, 78, ASCII))
    narrow = text_of(draw_status(snapshot(), key, limits, 38, ASCII))
    assert wide == "garden shed bridge    14.100 MHz 20 m   20/s, nothing lost     key down 4/10 s"
    assert narrow == "14.100 MHz 20 m        key down 4/10 s"


def test_draw_status_tells_losses_and_damage():
    """Losses and damage replace `nothing lost`."""
    text = text_of(draw_status(snapshot(lost=3, damaged=2), KeyState(), Limits(), 118, ASCII))
    assert "20/s, 3 lost, 2 damaged" in text


def test_draw_remarks_lists_flags_and_note():
    """Flags and the note, in words; a narrow line says that it was cut."""
    readout, news = read_out(reading(0.2, "interpolated", "unchecked")), snapshot(note="full scale 1023 and 4095")
    text = text_of(draw_remarks(readout, news, 118, ASCII)).rstrip()
    assert text == "unchecked lines; between calibrated bands; full scale 1023 and 4095"
    assert text_of(draw_remarks(readout, news, 38, ASCII)).rstrip().endswith("..")


@pytest.mark.parametrize("ascii_only", [False, True])
def test_outside_text_is_made_visible_wherever_it_is_drawn(ascii_only):
    """Names, words and notes that would drive the terminal are drawn as escapes."""
    evil = "\x1b]0;x\x07\u009b31m\u202e"
    glyphs = ASCII if ascii_only else UTF8
    news = snapshot(bridge=evil, note=evil, link=SimpleNamespace(phase="lost", words=evil))
    rows = [draw_status(news, KeyState(), Limits(), 118, glyphs), draw_remarks(NOTHING, news, 118, glyphs)]
    rows += draw_head(read_out(reading(), stale=True), f"stale: {evil}", None, 118, glyphs)
    text = "".join(at(rows))
    assert text.count("\\x1b]0;x\\x07") == 4
    assert text.isprintable()


def test_draw_alarm_over_may_blind_and_quiet():
    """Each state has its own words; symbols tell what colour would."""
    limits = Limits(2.0, 120.0, 10.0)
    lines = [AlarmState(("SWR",)), AlarmState((), ("power",)), AlarmState(blind=True), AlarmState()]
    assert [text_of(draw_alarm(state, limits, 78)).rstrip() for state in lines] == [
        "!! OVER THE LIMIT: SWR 2 !!",
        "! may exceed 120 W forward",
        "no alarm can be given   limits SWR 2, 120 W forward, key down 10 s",
        "no alarm   limits SWR 2, 120 W forward, key down 10 s",
    ]
    assert text_of(draw_alarm(AlarmState(), Limits(), 78)).startswith("no limits set: press a")


def test_draw_best_stands_under_its_rule_and_tells_the_distance():
    """The label begins at the best point's cell; the distance is in SWR, with the digits that the noise supports."""
    text = text_of(draw_best(Relation(0.1342, 0.0394, 0.001, 1), False, 78, ASCII))
    assert text.index("best 1.310") == round(0.1342 * 77)
    assert text.endswith(" 0.110 away from the best")


def test_draw_best_stale_compares_nothing():
    """While stale there is no distance to tell."""
    assert "away" not in text_of(draw_best(Relation(0.1, 0.1, 0.001, 1), True, 78, ASCII))


@given(
    st.floats(0, 1.3),
    st.floats(1e-4, 1.0),
    st.floats(0.0, 2e5),
    st.integers(30, 160),
    st.sampled_from(["", "no-carrier", "below-reading", "over-unity", "uncalibrated", "clipped", "stale"]),
)
def test_every_row_is_as_wide_as_asked(rho, half, forward_w, width, flag):
    """Whatever is read, every drawing fills exactly its width with known roles, in ASCII where asked."""
    readout = read_out(reading(rho, *filter(None, [flag]), forward=forward_w, half=half))
    relation = Relation(min(rho, 1.0), half, half / 10, 0)
    state, limits, news = AlarmState(("SWR",), ("power",)), Limits(2, 100, 5), snapshot(note="n" * 200)
    rows = [
        *draw_head(readout, "stale for 3 s", 1, width, ASCII),
        *draw_scale(readout.rho, width, ASCII, stale=readout.stale, limit_rho=0.5),
        *draw_ribbon(readout, full_length_w(forward_w), width, ASCII),
        draw_status(news, KeyState(True, 3.0), limits, width, ASCII),
        draw_remarks(readout, news, width, ASCII),
        draw_best(relation, False, width, ASCII),
        draw_alarm(state, limits, width),
        draw_keys((("f", "frequency", "freq", ""), ("q", "quit", "quit", "")), width)[0],
    ]
    assert {len(text) for text in at(rows)} == {width}
    assert "".join(at(rows)).isascii()
    assert {role for row in rows for _, role in row} <= set(ROLES)


# Lines, keys, changes


@given(OUTSIDE_TEXTS, st.integers(-5, 40), st.integers(0, 40))
def test_line_any_text_keeps_the_width_in_cells(text, place, width):
    """Wide and combining characters never make a row wider or narrower than asked."""
    assert width_of(text_of(Line(width).put(place, text).row())) == width


@given(OUTSIDE_TEXTS, st.integers(0, 40))
def test_fit_any_text_fits_and_says_when_cut(text, width):
    """The result is at most as wide as asked; dots stand where something was cut."""
    cut = fit(text, width)
    assert width_of(cut) <= width
    assert cut == text or cut.endswith("."[:width])


@given(st.lists(st.tuples(st.integers(-5, 14), st.text("ab\u2500\u4e2d", max_size=8), st.sampled_from("xy"))))
def test_put_any_texts_keeps_the_width_and_shows_the_last(puts):
    """Whatever is put where, the row keeps its cells; a text that fits stands there as one piece of its role."""
    line = Line(12)
    for at, text, role in puts:
        row = line.put(at, text, role).row()
        assert width_of(text_of(row)) == 12
        if at >= 0 and text and at + width_of(text) <= 12:
            assert any(text in piece and its_role == role for piece, its_role in row)


def test_changed_span_is_as_small_as_the_change():
    """Only the differing cells are repainted, whether text or role changed."""
    old = (("SWR 1.42 ", "strong"), ("net 48", ""))
    assert changed_span(old, (("SWR 1.43 ", "strong"), ("net 48", ""))) == (7, 8)
    assert changed_span(old, (("SWR 1.42 ", "stale"), ("net 48", ""))) == (0, 9)
    assert changed_span(old, old) == (0, 0)


@given(st.text("ab", min_size=8, max_size=8), st.text("ab", min_size=8, max_size=8))
def test_changed_span_any_two_rows_are_equal_outside_it(one, other):
    """Nothing outside the span differs."""
    first, end = changed_span(((one, ""),), ((other, ""),))
    assert one[:first] == other[:first]
    assert one[end:] == other[end:]


def test_draw_keys_narrow_keeps_the_keys():
    """A narrow line has shorter words and tells where each key is for the mouse."""
    keys = (("f", "frequency", "freq", "f"), ("d", "dark/light", "", "d"), ("q", "quit", "quit", "q"))
    assert text_of(draw_keys(keys, 40)[0]).rstrip() == "f frequency   d dark/light   q quit"
    row, places = draw_keys(keys, 20)
    assert text_of(row).rstrip() == "f freq  q quit"
    assert places == [(0, 6, "f"), (8, 14, "q")]
