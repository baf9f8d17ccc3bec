"""Text tables: one snapshot per line, one column per point, perhaps a column of times and a line of names.

Columns ``u1, u2, ...`` (or ``u_1``, ``u[1]``, ``u.1``) are together the variable ``u``; all columns but those called
time or t are together the variable ``data``. Lines that begin with # are comments; the last one before the numbers may
hold the names.
"""

from __future__ import annotations

import re
from collections.abc import Generator
from itertools import islice
from pathlib import Path

import numpy as np

from service.feeding.variables import UNNAMED, DataFile, FeedError, Values, Variable

MAX_LINE_BYTES = 64 * 2**20  # a snapshot of about four million numbers; larger ones have no place in a text file
TIME_NAMES = ("time", "t")
_NUMBERED = re.compile(r"^(.*?)[ _.\-\[(]?\d+[\])]?$")
_UNIT = re.compile(r"\s*[\[(].*?[\])]$")


class Table:
    """A text table that is read forward; going back begins again."""

    def __init__(self, path: Path) -> None:
        self.path = path
        first, names = self._look()
        self._delimiter = _delimiter_of(first)
        self.n_columns = len(self._split(first))
        self.names = self._names(names)
        self.n_rows = sum(1 for _ in self._lines())
        self._rows = self._lines()
        self._next = 0

    def read(self, start: int, stop: int, columns: list[int]) -> Values:
        """Rows [start, stop) of some columns, float64. Raises FeedError naming the first bad row."""
        if start < self._next:
            self._rows, self._next = self._lines(), 0
        lines = list(islice(self._rows, start - self._next, stop - self._next))
        self._next = stop
        try:
            table = np.loadtxt(lines, np.float64, delimiter=self._delimiter, ndmin=2, comments=None)
        except ValueError as error:
            raise FeedError(f"{self.path}, data rows {start + 1} to {stop}: {error}") from error
        if table.shape != (len(lines), self.n_columns):
            raise FeedError(
                f"{self.path}, data rows {start + 1} to {stop}: {table.shape[1]} columns, expected {self.n_columns}"
            )
        return table[:, columns]

    def close(self) -> None:
        self._rows.close()

    def _texts(self) -> Generator[str]:
        """All lines that are not empty."""
        with self.path.open(encoding="utf-8-sig", errors="replace") as file:
            while line := file.readline(MAX_LINE_BYTES):
                if len(line) == MAX_LINE_BYTES:
                    raise FeedError(
                        f"{self.path} holds a line of more than {MAX_LINE_BYTES} characters; use NPY or HDF5"
                    )
                if text := line.strip():
                    yield text

    def _lines(self) -> Generator[str]:
        """The lines that hold numbers."""
        begun = False
        for text in self._texts():
            if not text.startswith("#") and (begun or _is_numbers(text)):
                begun = True
                yield text

    def _look(self) -> tuple[str, str]:
        """The first line of numbers, and the line before it that may hold names."""
        names = ""
        for text in self._texts():
            if not text.startswith("#") and _is_numbers(text):
                return text, names
            names = text.lstrip("# ") or names
        raise FeedError(f"{self.path} holds no line of numbers; decimals need a point, columns , ; tab or blanks")

    def _split(self, line: str) -> list[str]:
        return [cell.strip().strip('"') for cell in line.split(self._delimiter)]

    def _names(self, line: str) -> list[str]:
        cells = self._split(line) if line else []
        return cells if len(cells) == self.n_columns else [f"{UNNAMED}{k + 1}" for k in range(self.n_columns)]


def read(path: Path) -> DataFile:
    """Open a text table. Raises FeedError."""
    try:
        table = Table(path)
    except OSError as error:
        raise FeedError(f"{path} cannot be read: {error}") from error
    groups: dict[str, list[int]] = {}
    for k, name in enumerate(table.names):
        plain = _UNIT.sub("", name) if not _NUMBERED.match(name) else name
        numbered = _NUMBERED.match(plain)
        groups.setdefault(numbered[1] if numbered and numbered[1] else plain, []).append(k)
    times = {name for name in groups if name.lower() in TIME_NAMES}
    others = [k for name, columns in groups.items() if name not in times for k in columns]
    variables = {name: _variable(table, name, columns, name in times) for name, columns in groups.items()}
    variables.setdefault(UNNAMED, _variable(table, UNNAMED, sorted(others), False))
    return DataFile(path, variables, table.close)


def _variable(table: Table, name: str, columns: list[int], flat: bool) -> Variable:
    def cut(axis: int, start: int, stop: int) -> Values:
        if axis != 0:
            raise FeedError(f"{table.path}: the lines of a text table are its snapshots; leave --time-axis out")
        values = table.read(start, stop, columns)
        return values[:, 0] if flat else values

    shape = (table.n_rows,) if flat else (table.n_rows, len(columns))
    return Variable(name, shape, np.dtype(np.float64), cut)


def _delimiter_of(line: str) -> str | None:
    """The first that occurs; blanks when none does."""
    return next((one for one in (";", "\t", ",") if one in line), None)


def _is_numbers(line: str) -> bool:
    try:
        for cell in line.split(_delimiter_of(line)):
            float(cell)
    except ValueError:
        return False
    return True
