"""What holds for all tests: in CI a skip is a failure, so that nothing is left out unseen."""

import os

# Matrices are small here: more than one thread only makes them wait for each other.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import pytest


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(item, call):
    """Turn a skip into a failure where CI is set; elsewhere the reason is printed by -ra."""
    report = yield
    if os.environ.get("CI") and report.skipped and not hasattr(report, "wasxfail"):
        report.outcome = "failed"
        report.longrepr = f"skipped in CI, where everything must run: {report.longrepr}"
    return report
