"""Shot records to first-arrival times with their errors.

`picker.pick_records(picker.read_records(paths))` is the whole way from files to picks; a `Survey` keeps what a person
changes on top of them. The parts are modules of one idea each.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from picker.errors import InputError
    from picker.gather import PickSettings, pick_record, pick_records
    from picker.loading import load_files
    from picker.picks import PickTable
    from picker.picks_csv import read_picks_csv, write_picks_csv
    from picker.records import ShotRecord, read_records
    from picker.survey import Survey

__all__ = [
    "InputError",
    "PickSettings",
    "PickTable",
    "ShotRecord",
    "Survey",
    "load_files",
    "pick_record",
    "pick_records",
    "read_picks_csv",
    "read_records",
    "write_picks_csv",
]

_HOME = {
    "InputError": "picker.errors",
    "PickSettings": "picker.gather",
    "PickTable": "picker.picks",
    "ShotRecord": "picker.records",
    "Survey": "picker.survey",
    "load_files": "picker.loading",
    "pick_record": "picker.gather",
    "pick_records": "picker.gather",
    "read_picks_csv": "picker.picks_csv",
    "read_records": "picker.records",
    "write_picks_csv": "picker.picks_csv",
}


def __getattr__(name: str) -> object:
    """Load a name when it is first asked for, so that `rockhead --help` loads no numerical library."""
    if name not in _HOME:
        raise AttributeError(f"module 'picker' has no attribute {name!r}")
    import importlib

    return getattr(importlib.import_module(_HOME[name]), name)


def __dir__() -> list[str]:
    """Names for completion in a notebook."""
    return sorted({*globals(), *__all__})
