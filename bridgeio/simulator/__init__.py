"""The simulated bridge: a real source (`sim:`) for demonstration, documentation and tests.

One rule: it is modelled as physics (complex waves, diode current, converter), and shares no formula with the
correction it exercises. Nothing of it is imported here, so that the table of options stays cheap to read.
"""

from pathlib import Path

__all__ = ["BRIDGE_FILE"]

#: By this `sim:` is read: fitted from its own simulated bench (`python -m bridgeio.simulator`), not from its truth.
BRIDGE_FILE = Path(__file__).with_name("sim.bridge.toml")
