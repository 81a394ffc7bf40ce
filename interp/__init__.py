"""Onsets with errors to depths and velocities with intervals.

`interp.interpret(picks)` is the whole way; `interp.depth_columns(section)` is the result as a table that
`interp.to_csv` writes out. The parts are modules of one idea each.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from interp.interpretation import InterpretSettings, interpret
    from interp.section import DepthSection
    from interp.section_json import read_section_json, section_to_json
    from interp.section_tables import bound_columns, depth_columns, to_csv, velocity_columns

__all__ = [
    "DepthSection",
    "InterpretSettings",
    "bound_columns",
    "depth_columns",
    "interpret",
    "read_section_json",
    "section_to_json",
    "to_csv",
    "velocity_columns",
]

_HOME = {
    "DepthSection": "interp.section",
    "InterpretSettings": "interp.interpretation",
    "bound_columns": "interp.section_tables",
    "depth_columns": "interp.section_tables",
    "interpret": "interp.interpretation",
    "read_section_json": "interp.section_json",
    "section_to_json": "interp.section_json",
    "to_csv": "interp.section_tables",
    "velocity_columns": "interp.section_tables",
}


def __getattr__(name: str) -> object:
    """Load a name when it is first asked for, so that `rockhead --help` loads no numerical library."""
    if name not in _HOME:
        raise AttributeError(f"module 'interp' has no attribute {name!r}")
    import importlib

    return getattr(importlib.import_module(_HOME[name]), name)


def __dir__() -> list[str]:
    """Names for completion in a notebook."""
    return sorted({*globals(), *__all__})
