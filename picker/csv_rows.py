"""Cells of a CSV file that people made: any separator and encoding, and every refusal names line and column."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Sequence
from decimal import Decimal
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.errors import InputError
from picker.units import METRES_PER_FOOT

FloatArray = npt.NDArray[np.float64]

_NOT_A_NUMBER = ("", "nan", "na", "n/a", "null", "-", "none")
_MOST = 2**53  # whole numbers above are not held exactly by every program


class CsvRows:
    """The rows of a file, their columns under our own names.

    Parameters
    ----------
    path : Path
        UTF-8 (with or without a byte order mark), UTF-16 with one, or Windows-1252; commas, semicolons or tabs, with
        decimal commas where those are not the separator. Rows that begin with # and empty ones are passed over.
    own_name : callable
        Our name of a column as it is headed, and whether its lengths are in feet.
    known : sequence of str
        Our names; other columns are passed over.
    needed : sequence of str
        Columns without which the file is refused.
    unnamed : sequence of str, optional
        Our names, in order, for columns of numbers that have no line of names; more columns than names are refused.

    Attributes
    ----------
    columns : dict of str to int
        Which columns are there, by our names.
    lines : list of int
        Line of the file in which each row begins.
    unnamed : bool
        True where the names were not in the file.

    Raises
    ------
    InputError
        If the file cannot be read, holds no rows, lacks a column or has one twice, or rows differ in length.
    """

    def __init__(
        self,
        path: Path,
        own_name: Callable[[str], tuple[str, bool]],
        known: Sequence[str],
        needed: Sequence[str],
        unnamed: Sequence[str] = (),
    ) -> None:
        self.path = path
        text = _text(path)
        separator = _separator(text)
        rows = _rows(path, text, separator)
        self.unnamed = bool(rows) and len(needed) <= len(rows[0][1]) <= len(unnamed) and _all_numbers(rows[0][1])
        if self.unnamed:
            rows.insert(0, (rows[0][0], list(unnamed[: len(rows[0][1])])))
        if len(rows) < 2:
            raise InputError(
                "holds no rows",
                file=path,
                expected="a line of column names and a line a row",
                found="one line" if rows else "nothing",
                remedy="Write the table again",
            )
        line, header = rows[0]
        self.columns: dict[str, int] = {}
        self._stated: dict[str, str] = {}
        self._feet: set[str] = set()
        for column, stated in enumerate(header):
            name, feet = own_name(stated)
            if name not in known:
                continue
            if name in self.columns:
                raise InputError(
                    f"line {line}: two columns for {name}",
                    file=path,
                    expected="one",
                    found=f"{self._stated[name]} and {stated.strip()}",
                    remedy="Take one of them out",
                )
            self.columns[name] = column
            self._stated[name] = stated.strip()
            if feet:
                self._feet.add(name)
        missing = [name for name in needed if name not in self.columns]
        if missing:
            raise InputError(
                f"line {line}: no column {', '.join(missing)}",
                file=path,
                expected=f"at least {', '.join(needed)}",
                found=", ".join(cell.strip() for cell in header)[:200],
                remedy="Name the columns so in the first line; lengths in feet end in _ft",
            )
        self.lines = [number for number, _ in rows[1:]]
        self._cells = [cells for _, cells in rows[1:]]
        for number, cells in rows[1:]:
            if len(cells) < len(header) or any(cell.strip() for cell in cells[len(header) :]):
                raise InputError(
                    f"line {number}: wrong number of cells",
                    file=path,
                    expected=len(header),
                    found=len(cells),
                    remedy="Put text that holds the separator in double quotes",
                )
        self._decimal_comma = separator != ","

    def stated(self, name: str) -> str:
        """How the file heads a column that is there."""
        return self._stated[name]

    def refuse(self, row: int, name: str, expected: str) -> InputError:
        """Build the error that refuses one cell."""
        found = repr(self._cells[row][self.columns[name]].strip()) if name in self.columns else "no such column"
        return InputError(
            f"line {self.lines[row]}, column {self._stated.get(name, name)}: a cell cannot be used",
            file=self.path,
            expected=expected,
            found=found,
            remedy="Correct the cell and load again",
        )

    def refuse_where(self, wrong: npt.NDArray[np.bool_], name: str, expected: str) -> None:
        """Refuse the first row in which something is wrong, if there is one."""
        if wrong.any():
            raise self.refuse(int(np.flatnonzero(wrong)[0]), name, expected)

    def _each(self, name: str, convert: Callable[[str], object], expected: str) -> list[object]:
        """Convert the cells of a column."""
        values = []
        for row, cells in enumerate(self._cells):
            try:
                values.append(convert(cells[self.columns[name]]))
            except (ValueError, ArithmeticError) as error:
                raise self.refuse(row, name, expected) from error
        return values

    def floats(self, name: str, shift: int, empty: float | None) -> FloatArray:
        """Numbers of a column, metres where they are lengths.

        Parameters
        ----------
        name : str
            Our name of the column.
        shift : int
            By how many places the decimal point is moved, exactly: -3 turns milliseconds into seconds.
        empty : float or None
            Stands for an empty cell or column; None refuses empty cells.

        Returns
        -------
        float (rows,)

        Raises
        ------
        InputError
            If a cell is no number.
        """
        if name not in self.columns:
            return np.full(len(self.lines), np.nan if empty is None else empty)

        def convert(cell: str) -> float:
            text = cell.strip()
            if text.lower() in _NOT_A_NUMBER:
                if empty is None:
                    raise ValueError(text)
                return empty
            if self._decimal_comma and "." not in text:
                text = text.replace(",", ".")
            value = float(Decimal(text).scaleb(shift))
            if not np.isfinite(value):
                raise ValueError(text)
            return value

        values = np.array(self._each(name, convert, "a number"), dtype=np.float64)
        return values * METRES_PER_FOOT if name in self._feet else values

    def whole(self, name: str) -> npt.NDArray[np.int64]:
        """Whole numbers from 1 of a column that is there; InputError where a cell is none."""

        def convert(cell: str) -> int:
            number = Decimal(cell.strip())
            if not 1 <= number <= _MOST or number != int(number):
                raise ValueError(cell)
            return int(number)

        return np.array(self._each(name, convert, "a whole number from 1"), dtype=np.int64)

    def words(self, name: str, allowed: Sequence[str] | None, missing: str) -> npt.NDArray[np.str_]:
        """Words of a column in lower case, or any text as it stands where `allowed` is None; `missing` for empty."""
        if name not in self.columns:
            return np.full(len(self.lines), missing)

        def convert(cell: str) -> str:
            if allowed is None:
                return cell or missing
            word = cell.strip().lower()
            if word and word not in allowed:
                raise ValueError(cell)
            return word or missing

        return np.array(self._each(name, convert, f"one of {', '.join(allowed or ())}"), dtype=np.str_)


def _text(path: Path) -> str:
    """Text of a file in whatever encoding it seems to be."""
    if path.is_dir():
        raise InputError("is a folder", file=path, expected="a CSV file", found="a folder", remedy="Name the file")
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise InputError(
            f"cannot be read ({error.strerror or error})", file=path, remedy="Check the path and who may read it"
        ) from error
    if raw[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return raw.decode("utf-16", errors="replace")
    if b"\0" in raw:
        raise InputError(
            "is no text", file=path, expected="a CSV file", found="binary data", remedy="Save the table as CSV"
        )
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("cp1252", errors="replace")


def _all_numbers(cells: Sequence[str]) -> bool:
    """Whether a row holds numbers only, as no line of names does."""
    try:
        return all(np.isfinite(float(cell.strip().replace(",", "."))) for cell in cells)
    except ValueError:
        return False


def _separator(text: str) -> str:
    """Whichever separator the line of column names has most of."""
    for line in text.splitlines():
        if line.strip() and not line.lstrip().startswith("#"):
            return max(",;\t", key=line.count)
    return ","


def _rows(path: Path, text: str, separator: str) -> list[tuple[int, list[str]]]:
    """Rows with cells and the line in which each begins, the column names first."""
    rows = []
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator)
    line = 1
    try:
        for cells in reader:
            if any(cell.strip() for cell in cells) and not cells[0].lstrip().startswith("#"):
                rows.append((line, cells))
            line = reader.line_num + 1
    except csv.Error as error:
        raise InputError(
            f"line {line}: cannot be read as CSV ({error})", file=path, remedy="Look for a quote that is never closed"
        ) from error
    return rows
