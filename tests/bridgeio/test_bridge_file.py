"""The bridge file: whatever is wrong with one is told in words, with its place, all of it at once."""

import tomllib
from contextlib import suppress

import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.bridge_file import load_bridge_file, parse_bridge_file
from bridgeio.errors import FileError
from bridgeio.fit_table import FitTable
from tests import fitted

HEAD = 'schema = 1\n[bridge]\nname = "x"\nfull_scale = 4095\ndetector = "diode"\n'
DARK = '[[step]]\nkind = "dark"\nforward = 5.0\nreflected = 4.0\n'
POWER = '[[step]]\nkind = "power"\nfrequency_hz = 14_100_000\npower_w = 5.0\nforward = 2714.2\nreflected = 11.9\n'
LOAD = '[[step]]\nkind = "load"\nfrequency_hz = 14.1e6\nload = "100"\nforward = 1000\nreflected = 500\n'
WHOLE = HEAD + DARK + POWER + LOAD


def faults(text, **options):
    """What is said about a text, without the file's name at the head of each line."""
    with pytest.raises(FileError) as caught:
        parse_bridge_file(text, "shed.toml", **options)
    lines = str(caught.value).split("\n")
    assert all(line.startswith("shed.toml: ") for line in lines)
    return [line.removeprefix("shed.toml: ") for line in lines]


def changed(before, after):
    """The whole sheet with one thing changed."""
    assert before in WHOLE
    return WHOLE.replace(before, after)


def test_whole_sheet_is_taken_as_it_stands():
    """Numbers, defaults, hexadecimal device id and steps arrive as the program's own dataclasses."""
    found = parse_bridge_file(HEAD + 'device_id = "1a2B3C4d"\nmax_w = 150\n' + DARK + POWER + LOAD, "shed.toml")
    assert (found.name, found.full_scale, found.z0_ohm, found.detector) == ("x", 4095, 50.0, "diode")
    assert (found.device_id, found.max_w, found.bridge, found.fit_id) == (0x1A2B3C4D, 150.0, None, None)
    assert [step.kind for step in found.steps] == ["dark", "power", "load"]
    assert (found.steps[1].power_w, found.steps[1].frequency_hz) == (5.0, 14.1e6)
    assert (found.steps[2].load, found.steps[2].samples, found.steps[2].temperature_c) == ("100", 1, 25.0)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        # A unit in the value, a number as text, text as a number.
        (changed("5.0\nforward", '"5 W"\nforward'), "step[2].power_w: found '5 W'; wanted a number (watts)"),
        (changed('"100"', "100"), "step[3].load: found 100; wanted text in quotes (ohms, like \"100\")"),
        (changed("4095", "4095.0"), "bridge.full_scale: found 4095.0; wanted a whole number "
         "(the largest count a tally can hold)"),
        (changed("5.0\nforward", "true\nforward"), "step[2].power_w: found True; wanted a number (watts)"),
        (changed("5.0\nforward", "1979-05-27\nforward"), "step[2].power_w: found datetime.date(1979, 5, 27); wanted a "
         "number (watts)"),
        # The wrong unit.
        (changed("14_100_000", "14.1"), "step[2].frequency_hz: found 14.1; wanted hertz, from 100000 to 10000000000; "
         "did you mean 14100000 (14.1 MHz)?"),
        (changed("14_100_000", "14100"), "step[2].frequency_hz: found 14100; wanted hertz, from 100000 to "
         "10000000000; did you mean 14100000 (14100 kHz)?"),
        (changed("14_100_000", "0"), "step[2].frequency_hz: found 0; wanted hertz, from 100000 to 10000000000"),
        (changed("14_100_000", "-7"), "step[2].frequency_hz: found -7; wanted hertz, from 100000 to 10000000000"),
        # Out of range.
        (changed("4095", "12"), "bridge.full_scale: found 12; wanted at least 255 "
         "(the largest count a tally can hold)"),
        (changed("4095", "9999999999"), "bridge.full_scale: found 9999999999; wanted at most 4294967295 "
         "(the largest count a tally can hold)"),
        (changed("5.0\nforward", "0.0\nforward"), "step[2].power_w: found 0.0; wanted more than 0 (watts)"),
        (changed("11.9", "-3"), "step[2].reflected: found -3; wanted at least 0 (mean counts)"),
        (changed("2714.2", "5000"), "step[2].forward: found 5000; wanted at most full_scale, 4095 (mean counts)"),
        (WHOLE + "temperature_c = 451\n", "step[3].temperature_c: found 451; wanted at most 150 (degrees Celsius)"),
        (WHOLE + "samples = 0\n", "step[3].samples: found 0; wanted at least 1"),
        (changed('"x"', '""'), "bridge.name: found ''; wanted at least 1 character"),
        (changed('"x"', f'"{"x" * 201}"'), f"bridge.name: found '{'x' * 27}...{'x' * 28}'; wanted at most 200 "
         "characters"),
        # Not finite.
        (changed("5.0\nforward", "nan\nforward"), "step[2].power_w: found nan; wanted a finite number (watts)"),
        (changed("2714.2", "inf"), "step[2].forward: found inf; wanted a finite number (mean counts)"),
        # A word that is none of those allowed, a key that is unknown, a key that is missing.
        (changed('"power"', '"powr"'), "step[2].kind: found 'powr'; wanted dark or power or reversed or load; did you "
         "mean power?"),
        (changed('"power"', '"x"'), "step[2].kind: found 'x'; wanted dark or power or reversed or load"),
        (changed("full_scale", "fullscale"), "bridge.fullscale: no such key; did you mean full_scale?"),
        (HEAD + "[bench]\nwatts = 3\n", "bench.watts: no such key; known here: reference_pct, reference_full_scale_w, "
         "dummy_return_loss_db, resistor_pct, dummy_w, dummy_j, resistor_w, power_min_w, power_max_w"),
        ("bench = 3\n" + HEAD, "bench: found 3; wanted a table"),
        ("steps = 3\n" + HEAD, "steps: no such key; did you mean step?"),
        ("step = 3\n" + HEAD, "step: found 3; wanted [[step]] tables"),
        ("step = [3]\n" + HEAD, "step[1]: found 3; wanted a table"),
        (changed("forward = 5.0\n", ""), "step[1].forward: is missing; wanted mean counts"),
        (changed('detector = "diode"\n', ""), "bridge.detector: is missing"),
        (changed("schema = 1\n", ""), "schema: is missing"),
        (changed("schema = 1", "schema = 0"), "schema: found 0; wanted at least 1"),
        # Steps that contradict themselves.
        (changed("power_w = 5.0\n", ""), "step[2]: a power step also needs power_w (watts, the wattmeter's reading) or "
         "volts across the dummy load"),
        (changed("frequency_hz = 14_100_000\n", ""), "step[2]: a power step also needs frequency_hz (hertz)"),
        (changed('load = "100"\n', ""), 'step[3]: a load step also needs load (ohms, like "100", "open" or "short")'),
        (changed("power_w = 5.0", "volts = 15.8"), 'step[2]: volts also need volts_kind, "rms" or "peak"'),
        (changed("power_w = 5.0", 'power_w = 5.0\nvolts = 15.8\nvolts_kind = "rms"'),
         "step[2]: has power_w and volts; wanted one of them"),
        (changed("forward = 5.0", "frequency_hz = 7e6\nforward = 5.0"),
         "step[1].frequency_hz: a dark step has none, as the transmitter is off"),
        (changed("power_w = 5.0", 'power_w = 5.0\nload = "100"'),
         "step[2].load: a power step has none, as it is taken into the dummy load"),
        # Loads and ids.
        (changed('"100"', '"100 ohm"'), "step[3].load: found '100 ohm'; wanted ohms like 100 or 24.87, R+Xj like "
         "25+3.5j, open or short"),
        (HEAD + 'device_id = "1A2B3C4D5"\n', "bridge.device_id: found '1A2B3C4D5'; wanted 1 to 8 hexadecimal digits, "
         "not all 0, as the board's nameplate has them"),
        (HEAD + 'device_id = "0"\n', "bridge.device_id: found '0'; wanted 1 to 8 hexadecimal digits, "
         "not all 0, as the board's nameplate has them"),
    ],
)  # fmt: skip
def test_one_fault_is_told_with_place_value_and_what_is_wanted(text, words):
    """The fault's line names the path, what was found, what is allowed, its unit, and a near miss if there is one."""
    assert words in faults(text)


def test_several_faults_are_told_at_once():
    """Faults in the head, within one step and across steps come together, and none hides another."""
    text = (
        HEAD.replace("4095", "1")
        + DARK.replace("5.0", "nan")
        + POWER.replace("power_w", "powr_w").replace("11.9", "-3")
        + LOAD.replace('"load"', '"lod"')
        + "[fit]\n"
    )
    said = faults(text)
    for words in (
        "bridge.full_scale: found 1;",
        "step[1].forward: found nan;",
        "step[2].powr_w: no such key; did you mean power_w?",
        "step[2].reflected: found -3;",
        "step[2]: a power step also needs power_w",
        "step[3].kind: found 'lod'; wanted dark or power or reversed or load; did you mean load?",
        "fit: is not whole",
    ):
        assert [line for line in said if line.startswith(words)], words


def test_faults_without_end_are_cut():
    """A file with thousands of faults tells the first fifty and how many more there are."""
    said = faults(HEAD + "".join(f"key{n} = 1\n" for n in range(2000)))
    assert len(said) == 51
    assert said[-1] == "and 1950 more faults"


def test_newer_schema_is_refused_before_anything_else():
    """A file of a later schema is not judged by this one's rules."""
    assert faults("schema = 2\n[bridge]\nquantum = 3\n") == [
        "schema: found 2; this program reads 1: a newer one wrote it; update to read it"
    ]


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"\x89PNG\r\n\x1a\n\0\0", "byte 0 is not UTF-8 text; wanted a TOML bridge file; is this another kind of file"),
        (bytes(range(256)), "byte 128 is not UTF-8 text"),
        (b"\0\1\2", "is not TOML: Invalid statement"),
        (b"14.1 MHz, 5 W\n", "is not TOML: .*; wanted a bridge file, which starts with schema = 1"),
        (b"", r"has neither schema nor \[bridge\]; wanted a bridge file, which starts with schema = 1"),
        (b'[project]\nname = "x"\n', r"has neither schema nor \[bridge\]"),
        (b"schema = " + b"9" * 5000, "is not TOML: it has a number or a nesting without end"),
        (b"schema = " + b"[" * 50000, "is not TOML: it has a number or a nesting without end"),
        (b"#" * 16_000_001, "is larger than 16000000 bytes; wanted a TOML bridge file of some kilobytes"),
    ],
    ids=["png", "binary", "control", "prose", "empty", "other-toml", "long-number", "deep", "huge"],
)
def test_another_kind_of_file_is_told(tmp_path, content, words):
    """A file that is no bridge file is named with what was found and what is wanted."""
    path = tmp_path / "what.toml"
    path.write_bytes(content)
    with pytest.raises(FileError, match=f"^{path}: {words}"):
        load_bridge_file(path)


def test_file_that_cannot_be_read_is_told(tmp_path):
    """A file that is absent, and a folder, are told as such."""
    with pytest.raises(FileError, match="cannot be read: No such file or directory; wanted a TOML bridge file"):
        load_bridge_file(tmp_path / "absent.toml")
    with pytest.raises(FileError, match="cannot be read: Is a directory"):
        load_bridge_file(tmp_path)


def test_device_without_end_is_not_read_for_ever():
    """What is read has an end even where the file has none."""
    with pytest.raises(FileError, match="is larger than"):
        load_bridge_file("/dev/zero")


@pytest.mark.parametrize("value", ["0x" + "f" * 5000, "9" * 400, "1e400", "[" * 50 + "]" * 50])
@pytest.mark.parametrize("key", ["full_scale", "max_w", "name", "z0_ohm"])
def test_value_of_any_size_is_told_in_short(key, value):
    """Numbers of thousands of digits and nested lists become a fault of one short line."""
    said = faults(f'schema = 1\n[bridge]\ndetector = "diode"\n{key} = {value}\n')
    assert [line for line in said if line.startswith(f"bridge.{key}: found ")]
    assert max(map(len, said)) < 300


def test_tables_nested_by_the_thousand_are_told_in_short():
    """A dotted key of thousands of parts is a fault like any other."""
    (said, *_) = faults("schema = 1\nbridge.name" + ".a" * 5000 + " = 1\n")
    assert said.startswith("bridge.name: found {'a': {'a':")
    assert len(said) < 200


def test_key_that_is_no_word_stands_in_quotes():
    """A key with line ends or control characters cannot forge a line of its own."""
    (said,) = faults(HEAD + '"a\\nshed.toml: all is well\\u001b" = 1\n')
    assert said.startswith("bridge.'a\\nshed.toml: all is well\\x1b': no such key; known here: name, ")


@pytest.mark.parametrize("change", [lambda text: "\ufeff" + text, lambda text: text.replace("\n", "\r\n")])
def test_file_as_other_editors_write_it_is_read(tmp_path, change):
    """A byte order mark and line ends with CR make no difference."""
    path = tmp_path / "sheet.toml"
    path.write_bytes(change(WHOLE).encode())
    assert load_bridge_file(path).steps == parse_bridge_file(WHOLE, "x").steps


def test_bench_sheet_is_no_calibration():
    """A sheet without [fit] says that it is one, and the command that makes it a bridge file, quoted for the shell."""
    sheet = parse_bridge_file(WHOLE, "my shed.toml")
    with pytest.raises(
        FileError, match=r"is a bench sheet without \[fit\].*fit 'my shed.toml' -o 'my shed.toml'` first"
    ):
        sheet.calibrated()


def test_wrong_fit_is_passed_over_where_it_is_made_anew():
    """The remedy for a changed fit works: read for its steps only, the file is whole."""
    text = WHOLE + '[fit]\nid = "1234"\n'
    assert "fit: is not whole" in faults(text)[0]
    assert "bridgewright fit shed.toml -o shed.toml" in faults(text)[0]
    assert len(parse_bridge_file(text, "shed.toml", steps_only=True).steps) == 3


def test_shed_sheet_and_bridge_file_agree():
    """The bridge file has the steps of the sheet it was fitted from."""
    sheet, bridge = load_bridge_file(fitted.SHEET), parse_bridge_file(fitted.bridge_text(12), "x")
    assert bridge.steps == sheet.steps
    assert bridge.bridge is not None


TOKENS = st.sampled_from([
    "=", ".", "[", "]", "[[", "]]", "{", "}", "\n", '"', "'", '"""', ",", "#", "nan", "-inf", "true", "1979-05-27",
    "07:32:00", "0x1f", "1_0", "-1", "1e999", "9" * 400, "0x" + "f" * 5000, "[[step]]", "[fit]", "[bridge]", "kind",
    "schema", "id", "forward", "[1, 2]", "{}", "\\u0000", "\x1b", "\x00", "\u202e", "é", "\r", "a.b.c",
])  # fmt: skip
SHORT_FIT = fitted.bridge_text(12)[fitted.bridge_text(12).index("# Written by") :]


@given(st.lists(st.tuples(st.integers(0, 10**6), st.integers(0, 12), TOKENS), min_size=1, max_size=6))
def test_mutated_file_loads_or_is_a_file_error(mutations):
    """Whatever happens to a file's text, loading it gives a bridge file or a FileError, and nothing else."""
    text = WHOLE + SHORT_FIT
    for at, cut, token in mutations:
        place = at % (len(text) + 1)
        text = text[:place] + token + text[place + cut :]
    with suppress(FileError):
        parse_bridge_file(text, "x")


@given(
    st.recursive(
        st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=5)),
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=6), inner, max_size=3),
        max_leaves=6,
    ),
    st.sampled_from(["id", "forward", "reflected", "band", "reference_pct", "forward.law", "forward.sd", "band.0",
                     "band.0.covariance", "band.0.gain_forward"]),
)  # fmt: skip
def test_fit_of_any_shape_is_a_file_error(value, path):
    """A [fit] with anything in the place of one of its parts is told as not whole or changed."""
    content = tomllib.loads(SHORT_FIT)["fit"]
    at = content
    *way, last = [int(part) if part.isdigit() else part for part in path.split(".")]
    for part in way:
        at = at[part]
    if at[last] == value:
        return
    at[last] = value
    with pytest.raises(FileError, match=r"fit: is not whole|fit\.id: found"):
        FitTable.read(content, "x")


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("power_w = 48.28", "power_w = 44.28"),
        ("forward = 894.89", "forward = 984.89"),
        ("resistor_pct = 1.0", "resistor_pct = 2.0"),
        ('diode = "germanium"', 'diode = "silicon"'),
    ],
)
def test_what_is_changed_after_the_fit_is_noticed(old, new):
    """Any step, reference or property that a fit is made from: the file says that the fit is not of them."""
    text = fitted.bridge_text(12)
    assert parse_bridge_file(text, "b.toml").outdated is None
    assert old in text
    assert "changed after its fit: run" in (parse_bridge_file(text.replace(old, new, 1), "b.toml").outdated or "")
