"""The one way in which the program says that an input could not be used."""

from __future__ import annotations

import os


class InputError(Exception):
    """The input could not be used. Ends a command with exit status 2.

    Parameters
    ----------
    problem : str
        What is wrong, in a few words.
    file, record, trace : optional
        Where. Traces are numbered from 1, as in the records' own channel numbers.
    expected, found : optional
        What should have been there and what was.
    remedy : str, optional
        What to do about it: a full sentence.
    """

    def __init__(
        self,
        problem: str,
        *,
        file: str | os.PathLike[str] | None = None,
        record: int | None = None,
        trace: int | None = None,
        expected: object = None,
        found: object = None,
        remedy: str | None = None,
    ) -> None:
        place = {"file": None if file is None else os.fspath(file), "record": record, "trace": trace}
        where = ", ".join(f"{name} {value}" for name, value in place.items() if value is not None)
        text = f"{where}: {problem}" if where else problem
        if expected is not None:
            text += f"; expected {expected}, found {found}"
        super().__init__(f"{text}. {remedy}" if remedy else f"{text}.")
