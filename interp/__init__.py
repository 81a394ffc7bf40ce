"""Onsets with errors to depths and velocities with intervals.

`interp.interpret(picks)` is the whole way; its parts are modules of one idea each.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from interp.interpretation import InterpretSettings, interpret
    from interp.section import DepthSection

__all__ = ["DepthSection", "InterpretSettings", "interpret"]

_HOME = {
    "DepthSection": "interp.section",
    "InterpretSettings": "interp.interpretation",
    "interpret": "interp.interpretation",
}


def __getattr__(name: str) -> object:
    """Load a name when it is first asked for, so that `rockhead --help` loads no numerical library."""
    if name not in _HOME:
        raise AttributeError(f"module 'interp' has no attribute {name!r}")
    import importlib

    return getattr(importlib.import_module(_HOME[name]), name)
