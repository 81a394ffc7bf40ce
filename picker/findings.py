"""Finding: something a file says that a person should know of, though it does not stop the work."""

from __future__ import annotations

import os
from dataclasses import dataclass

SEVERITIES = ("look", "note")


@dataclass(frozen=True)
class Finding:
    """One thing found in the input.

    Parameters
    ----------
    severity : str
        `look`: a person must look at it before trusting the result (exit status 1); `note`: good to know.
    text : str
        What was found: a full sentence.
    proposal : str
        What to do about it: a full sentence, or empty.
    file : str
        The file it was found in, or empty.
    record, channel : int, optional
        The record and recorder channel, where it concerns one only.

    Raises
    ------
    ValueError
        If the severity is unknown.
    """

    severity: str
    text: str
    proposal: str = ""
    file: str = ""
    record: int | None = None
    channel: int | None = None

    def __post_init__(self) -> None:
        if self.severity not in SEVERITIES:
            raise ValueError(f"severity: expected one of {SEVERITIES}, found {self.severity!r}")

    def __str__(self) -> str:
        place = [os.path.basename(self.file)] if self.file else []
        place += [f"{name} {value}" for name, value in (("record", self.record), ("channel", self.channel)) if value]
        words = f"{self.text} {self.proposal}".strip()
        return f"{', '.join(place)}: {words}" if place else words
