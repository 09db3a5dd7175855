"""What all tests share: markers for outside programs, hypothesis, a private kernel cache."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

REQUIRE_ALL = os.environ.get("SWEEPSET_REQUIRE_ALL") == "1"
PROGRAMS = {"ngspice": ("ngspice", "ngspice"), "browser": ("chromium", "chromium")}

settings.register_profile(
    "sweepset", deadline=None, suppress_health_check=[HealthCheck.too_slow], max_examples=60
)
settings.register_profile("ci", settings.get_profile("sweepset"), derandomize=True, print_blob=True)
settings.load_profile("ci" if os.environ.get("CI") else "sweepset")

SAMPLES = Path(__file__).resolve().parents[1] / "samples"


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Skip tests whose outside program is missing, naming the package; never where all count."""
    for item in items:
        for marker, (program, package) in PROGRAMS.items():
            if item.get_closest_marker(marker) and shutil.which(program) is None:
                reason = f"needs {program}: install the Debian package {package}"
                item.add_marker(pytest.mark.skip(reason=reason))


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(item: pytest.Item):
    """Turn any skip into a failure where every test must run."""
    return _no_skip((yield))


@pytest.hookimpl(wrapper=True)
def pytest_make_collect_report(collector: pytest.Collector):
    """Turn the skip of a whole file into a failure where every test must run."""
    return _no_skip((yield))


def _no_skip(report):
    if REQUIRE_ALL and report.skipped and not hasattr(report, "wasxfail"):
        report.outcome = "failed"
        report.longrepr = f"skipped where every test must run: {report.longrepr}"
    return report
