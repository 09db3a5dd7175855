"""sweepset: choose, bias and hear JFET sets for phase shifters before soldering.

The public names are loaded when first used, so that importing the package
costs nothing.
"""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "Jfet": "sweepset.models.jfet",
    "load_circuit": "sweepset.models.circuit",
    "load_tray": "sweepset.models.tray",
    "render_take": "sweepset.render.take",
}

__all__ = ["Jfet", "__version__", "load_circuit", "load_tray", "render_take"]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'sweepset' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
