"""CSV files of named antennas with numbers: columns by name and unit, every problem told at once with its line.

- `read_rows`: texts and numbers of every antenna, and what is wrong with them
- `fail_table`: the error that tells all problems of a file
"""

from __future__ import annotations

import csv
import difflib
import math
import re
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import NoReturn

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import JobFileError
from elbowroom.base.inputs import read_input

_UNITS = {"_s_per_m": "siemens per metre", "_hz": "hertz", "_m": "metres", "_deg": "degrees"}
"""Units by how columns end; others are plain numbers."""


@dataclass(frozen=True, eq=False)
class Rows:
    """What a file says of its antennas, whole or not.

    Attributes
    ----------
    header : list of str
        Names of the columns.
    lines : list of int
        Line number of each of the A antennas.
    texts : dict of str to tuple of str
        Cells of each text column (A); empty where the column is absent.
    numbers : float64 (A, C)
        Numbers in the order asked for; NaN where unusable.
    problems : list of (int, str)
        Line and text of what is wrong so far.
    """

    header: list[str]
    lines: list[int]
    texts: dict[str, tuple[str, ...]]
    numbers: FloatArray
    problems: list[tuple[int, str]]


def read_rows(
    file: Path,
    what: str,
    numbers: Mapping[str, float | None],
    texts: Sequence[str],
    required: Sequence[str],
    things: str = "antennas",
) -> Rows:
    """Read a CSV file whose first line names the columns.

    Lines starting with ``#`` are comments.  A byte-order mark, any kind of line end, spaces round cells, blank lines and
    lines of nothing but commas do no harm.

    Parameters
    ----------
    file : Path
        The file, UTF-8.
    what : str
        What it should be, for messages: ``"layout"``.
    numbers : mapping of str to float or None
        Columns of numbers and their defaults; names end in their unit, ``_m``, ``_deg``, ``_hz`` or ``_s_per_m``, or have none.
    texts : sequence of str
        Columns of text.
    required : sequence of str
        Columns that must be there.
    things : str, optional
        What lines stand for.

    Raises
    ------
    JobFileError
        If the file cannot be read or split into columns; other problems are returned, so that the caller can add to them.
    """
    columns = (*texts[:1], *numbers, *texts[1:])
    records, problems = _split_records(_read_text(file, things))
    if not records:
        fail_table(file, what, problems or [(0, f"no header line and no {things}")])
    header_line, header = records[0]
    fault = _header_fault(header, required)
    if fault:  # no column can be told, so checks of the rows would only add noise
        fail_table(file, what, [*problems, (header_line, fault)])
    problems += _header_problems(header_line, header, columns, required)
    values: list[list[float]] = []  # one row for each antenna, NaN where unusable
    lines: list[int] = []
    cells_of: dict[str, list[str]] = {key: [] for key in texts}
    for line, cells in records[1:]:
        if len(cells) != len(header):
            expected = f"{len(header)} ({', '.join(header)})"
            problems.append((line, f"{counted(len(cells), 'cell')} found, {expected} expected"))
            continue
        row = dict(zip(header, cells, strict=True))
        own = []
        for key, default in numbers.items():
            value, problem = _number(key, row[key]) if key in row else (math.nan if default is None else default, "")
            own.append(value)
            if problem:
                problems.append((line, problem))
        lines.append(line)
        values.append(own)
        for key in texts:
            cells_of[key].append(row.get(key, ""))
    if len(records) == 1 and all(line <= header_line for line, _ in problems):
        problems.append((header_line, f"no {things} below the header"))
    table = np.array(values, dtype=float).reshape(-1, len(numbers))
    return Rows(header, lines, {key: tuple(cells) for key, cells in cells_of.items()}, table, problems)


def fail_table(file: Path, what: str, problems: Sequence[tuple[int, str]]) -> NoReturn:
    """Raise JobFileError with all problems of a file, (line, text) each, line 0 for the file as a whole."""
    msg = f"not a usable {what}, {counted(len(problems), 'problem')}"
    lines = tuple(f"line {line}: {text}" if line else text for line, text in sorted(problems, key=lambda p: p[0]))
    raise JobFileError(msg, file=file, problems=lines)


def counted(count: int, noun: str) -> str:
    """Return ``1 problem``, ``2 problems``."""
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _read_text(file: Path, things: str) -> str:
    try:
        data = read_input(file)
    except FileNotFoundError:
        near = difflib.get_close_matches(file.name, _siblings(file), n=1)
        msg = "no such file" + (f"; did you mean {near[0]!r}?" if near else "")
        raise JobFileError(msg, file=file) from None
    except IsADirectoryError:
        msg = "is a folder; a CSV file expected"
        raise JobFileError(msg, file=file) from None
    except (OSError, ValueError) as cause:
        msg = f"cannot be read: {getattr(cause, 'strerror', None) or cause}"
        raise JobFileError(msg, file=file) from cause
    if not data.strip():
        msg = f"the file is empty; a header line and {things}, a line each, expected"
        raise JobFileError(msg, file=file)
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as cause:
        line = len(re.findall(rb"\r\n|\n|\r", cause.object[: cause.start])) + 1
        wide = data[:2] in (b"\xff\xfe", b"\xfe\xff")
        msg = f"not UTF-8 text (line {line}, byte 0x{cause.object[cause.start]:02x})" + (
            "; it looks like UTF-16: save it as UTF-8" if wide else "; save it as UTF-8"
        )
        raise JobFileError(msg, file=file) from cause


def _siblings(file: Path) -> list[str]:
    try:
        return [p.name for p in file.parent.iterdir() if p.is_file()]
    except OSError:
        return []


def _split_records(text: str) -> tuple[list[tuple[int, list[str]]], list[tuple[int, str]]]:
    """Cells of every line that holds any, with line numbers; and lines whose quoting is broken."""
    records: list[tuple[int, list[str]]] = []
    problems: list[tuple[int, str]] = []
    for number, line in enumerate(re.split(r"\r\n|\n|\r", text), start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        # each line on its own, so that one open quote cannot swallow the rest of the file;
        # the empty second line is read only if a quote is still open at the end of the first
        reader = csv.reader([line + "\n", ""], skipinitialspace=True)
        try:
            cells = [cell.strip() for cell in next(reader)]
        except csv.Error as cause:
            problems.append((number, f"cannot be split into cells: {cause}"))
            continue
        if reader.line_num > 1:
            problems.append((number, "a double quote is opened and not closed on the same line"))
        elif any(cells) and not cells[0].startswith("#"):
            records.append((number, cells))
    return records, problems


def _header_fault(header: list[str], required: Sequence[str]) -> str:
    if len(header) == 1 and re.search(r"[;\t]", header[0]):
        separator = "semicolons" if ";" in header[0] else "tabs"
        return f"cells seem to be separated by {separator}; commas expected"
    if any(re.fullmatch(r"[-+]?\.?\d[\d.eE+-]*", cell) for cell in header):
        return f"the header is missing; column names expected first, for example {','.join(required)}"
    return ""


def _header_problems(line: int, header: list[str], columns: Sequence[str], required: Sequence[str]) -> list[tuple[int, str]]:
    problems = []
    explained = set()
    for position, cell in enumerate(header, start=1):
        if cell in columns:
            continue
        if not cell:
            problems.append((line, f"column {position} has no name"))
            continue
        near = difflib.get_close_matches(cell.lower(), [c for c in columns if c not in header], n=1)
        explained.update(near)
        hint = f"did you mean {near[0]!r}?" if near else f"known columns: {', '.join(columns)}"
        problems.append((line, f"unknown column {cell!r}; {hint}"))
    problems += [(line, f"column {key!r} appears {n} times") for key, n in Counter(header).items() if n > 1 and key in columns]
    problems += [(line, f"required column {key!r} is missing") for key in required if key not in header and key not in explained]
    return problems


def _number(key: str, cell: str) -> tuple[float, str]:
    """Value of a cell, NaN if unusable, and what is wrong with it."""
    unit = next((name for end, name in _UNITS.items() if key.endswith(end)), "")
    if not cell:
        return math.nan, f"{key} is empty; a number{unit and f' in {unit}'} expected"
    try:
        value = float(cell.replace("_", "?"))  # 1_000 would be a number to Python
    except ValueError:
        return math.nan, f"{key} = {cell!r} is not a number; {unit or 'a number'} expected, as in -12.5"
    if not math.isfinite(value):
        return math.nan, f"{key} = {cell!r} is not a finite number"
    return value, ""
