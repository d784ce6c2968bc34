"""The fit against the circuit-simulated bench, whose truth is known, and its refusals."""

from dataclasses import replace

import numpy as np
import pytest

from calibration.bench import BenchStep
from calibration.errors import SheetError
from calibration.fit import fit
from tests import shed

BITS = [12, 16]


@pytest.mark.parametrize("bits", BITS)
def test_fit_finds_the_detectors(bits):
    """Scale and load term come near the simulated diodes' (s 20.5 and 20.3 counts at 12 bit, b 2.09 and 2.66)."""
    bridge = shed.fitted(bits).bridge
    unit = 1.0 if bits == 12 else 16.0
    assert bridge.forward_law.scale / unit == pytest.approx(20.5, rel=0.06)
    assert bridge.reflected_law.scale / unit == pytest.approx(20.3, rel=0.06)
    assert bridge.forward_law.load_term == pytest.approx(2.09, rel=0.15)
    assert bridge.reflected_law.load_term == pytest.approx(2.66, rel=0.15)


@pytest.mark.parametrize("bits", BITS)
def test_fit_leakage_limits_hold_the_truth(bits):
    """In every band the limits of |d| and |c| lie above the truth, and |d| itself within 2 dB where loads were used."""
    truth = shed.table("shed_bridge_truth")
    bands = shed.fitted(bits).bridge.bands
    assert [band.frequency_hz for band in bands] == pytest.approx(truth["frequency_hz"])
    for place, band in enumerate(bands):
        assert band.directivity_limit > truth["d"][place]
        assert band.forward_leak_limit > truth["c"][place]
        if place in (1, 3, 5):
            assert abs(20 * np.log10(band.directivity / truth["d"][place])) < 2.0


@pytest.mark.parametrize("bits", BITS)
def test_fit_balance_of_the_detectors(bits):
    """Forward over reflected coupling comes out within 0.05 dB of the simulated circuit's in bands with loads."""
    truth = shed.table("shed_bridge_truth")
    true_db = truth["forward_coupling_db"] - truth["reflected_coupling_db"]
    bridge = shed.fitted(bits).bridge
    nvt = bridge.forward_law.scale / bridge.reflected_law.scale  # laws count in their own nVt
    for place in (1, 3, 5):
        band = bridge.bands[place]
        found = 20 * np.log10(band.gain_forward / band.gain_reflected * nvt)
        # 0.2 dB: the divider's 1 % parts scale counts per volt of each side apart.
        assert found == pytest.approx(true_db[place], abs=0.2)


@pytest.mark.parametrize("bits", BITS)
def test_fit_residuals_are_noise(bits):
    """No step is off by more than 4 sd, and the wattmeter's scatter of 0.7 % is found within 0.4 to 1.2 %."""
    found = shed.fitted(bits)
    assert max(abs(residual.sigmas) for residual in found.residuals) < 4.0
    assert found.chi_square_per_residual < 1.5
    assert 0.004 < found.reference_scatter < 0.012


def test_fit_does_not_depend_on_the_order_of_steps():
    """The same steps in reverse give the same bridge."""
    sheet = shed.sheet(12)
    turned = fit(list(sheet.steps)[::-1], name="x", full_scale=4095, ratings=sheet.ratings).bridge
    for one, other in zip(turned.bands, shed.fitted(12).bridge.bands, strict=True):
        assert one.gain_reflected == pytest.approx(other.gain_reflected, rel=1e-4)
        assert one.directivity == pytest.approx(other.directivity, rel=1e-2)


def test_fit_takes_volts_across_the_dummy_for_watts():
    """A sheet with volts rms in place of watts gives the same gains."""
    sheet = shed.sheet(12)
    steps = [
        replace(step, power_w=None, volts=float(np.sqrt(step.power_w * 50.0)), volts_kind="rms")
        if step.power_w
        else step
        for step in sheet.steps
    ]
    found = fit(steps, name="x", full_scale=4095, ratings=sheet.ratings).bridge
    assert found.bands[3].gain_forward == pytest.approx(shed.fitted(12).bridge.bands[3].gain_forward, rel=1e-6)


def _kinds(*kinds):
    return [step for step in shed.sheet(12).steps if step.kind in kinds]


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        (lambda: _kinds("power", "load"), "no dark step"),
        (lambda: _kinds("dark", "load"), "0 power steps; wanted at least 3"),
        (lambda: [*_kinds("dark", "power"), BenchStep("power", 500.0, 9.0, 14.2e6)], "step 25 .power. has no power_w"),
        (lambda: [*_kinds("dark", "power"), BenchStep("power", 500.0, 9.0, power_w=1.0)], "step 25 .* no frequency_hz"),
        (
            lambda: [*_kinds("dark", "power"), BenchStep("load", 500.0, 99.0, 50e6, load="100")],
            "at 50.000 MHz but no power",
        ),
        (lambda: [*_kinds("dark", "power"), BenchStep("load", 4.0, 9.0, 14.2e6, load="100")], "was the transmitter on"),
    ],
)
def test_fit_refuses_in_words(steps, words):
    """A sheet that cannot carry a fit is refused, naming the step and what was wanted."""
    with pytest.raises(SheetError, match=words):
        fit(steps(), name="x", full_scale=4095)


def test_fit_says_what_the_steps_left_open():
    """Without load steps the notes say that nothing bounds the balance and the forward leak."""
    notes = fit(_kinds("dark", "power"), name="x", full_scale=4095, ratings=shed.sheet(12).ratings).notes
    assert any("no load step" in note for note in notes)
    assert any("no reversed step" in note for note in notes)
