"""Where a take came from, told in the sidecar and, shorter, in the file itself.

No times and no folders, so that equal takes are equal bytes.
"""

from __future__ import annotations

import json
import platform
from functools import cache
from importlib.metadata import version
from typing import Any

from .engine import RunReport
from .plan import EnginePlan
from .setup import Setup

LIBRARIES = ("numba", "numpy", "scipy", "soundfile", "soxr")


@cache
def library_versions() -> dict[str, str]:
    """Return the versions of the libraries that decide a take's samples, and Python's."""
    found = {name: version(name) for name in LIBRARIES}
    return found | {"python": platform.python_version()}


def take_record(
    source: dict[str, Any],
    setup: Setup | None,
    plan: EnginePlan | None,
    report: RunReport | None,
) -> dict[str, Any]:
    """Return a take's provenance: no times, no folders, so that equal takes are equal bytes."""
    return {
        "sweepset": version("sweepset"),
        "libraries": library_versions(),
        "input": source,
        "dry": setup is None,
        "take": None if setup is None else setup.as_record(),
        "engine": None if plan is None else plan.as_record(),
        "report": None if report is None else report.as_record(),
    }


def short_record(record: dict[str, Any]) -> str:
    """Return the short form of a record for the file's own metadata; the sidecar has the rest."""
    take = record["take"]
    short: dict[str, Any] = {
        "input": record["input"]["name"],
        "input_sha256": record["input"]["sha256"],
        "gain_db": record["output"]["gain_db"],
        "dry": record["dry"],
    }
    if take is not None:
        short |= {
            "circuit": take["circuit"]["name"],
            "circuit_sha256": take["circuit_sha256"],
            "parts": [part["label"] for part in take["parts"]],
            "celsius": take["celsius"],
            "full_scale_v": take["full_scale_v"],
            "trimmer": take["trimmer"]["position"],
            "rate_hz": take["rate"]["rate_hz"],
        }
    return json.dumps(short, separators=(",", ":"))
