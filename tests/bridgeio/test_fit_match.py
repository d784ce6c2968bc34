"""A fit that is older than the steps beside it is noticed where the file can tell, and one that fits is not blamed."""

import pytest

from bridgeio.fit_match import disagreements
from bridgeio.fitted_file import load_fitted
from bridgeio.simulator import BRIDGE_FILE
from tests import fitted

ADDED = '[[step]]\nkind = "dark"\nforward = 5.1\nreflected = 2.5\n\n'


def test_fit_of_its_own_steps_is_not_blamed(tmp_path):
    """The shed's file and the simulated bridge's agree with their steps."""
    path = tmp_path / "shed.toml"
    path.write_text(fitted.bridge_text(12), encoding="utf-8")
    assert disagreements(load_fitted(path)) == []
    assert disagreements(load_fitted(BRIDGE_FILE)) == []


def edited(text, old, new):
    """The text with the last of its `old` before the fit as `new`."""
    steps, mark, fit = text.partition("# Written by")
    head, found, tail = steps.rpartition(old)
    assert found
    return head + new + tail + mark + fit


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('[[step]]\nkind = "load"', ADDED + '[[step]]\nkind = "load"', "the fit is of other steps: they part at step"),
        ("frequency_hz = 14_200_000\npower_w", "frequency_hz = 10_100_000\npower_w", "other frequencies"),
        ("temperature_c = 25.0", "temperature_c = 60.0", "box temperature of the steps is"),
        ("power_w = 48.28", "power_w = 44.28", "its power of 44.28 W do not go together"),
        ("forward = 894.89", "forward = 984.89", "step 6: its count and its power"),
    ],
)
def test_edited_steps_are_noticed(tmp_path, old, new, words):
    """An added step, another frequency, temperature, power or count: each is told in a sentence."""
    path = tmp_path / "b.toml"
    path.write_text(edited(fitted.bridge_text(12), old, new), encoding="utf-8")
    assert any(words in told for told in disagreements(load_fitted(path)))
