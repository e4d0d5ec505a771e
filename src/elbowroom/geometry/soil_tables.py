"""Constants of soil over frequency, from CSV files."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.csvtable import fail_table, read_rows
from elbowroom.geometry.soils import TABLE_TOLERANCE, Soil, TabulatedSoil

_COLUMNS: dict[str, float | None] = {"frequency_hz": None, "relative_permittivity": None, "conductivity_s_per_m": None}


def read_soil_table(path: str | Path, tolerance: float = TABLE_TOLERANCE) -> TabulatedSoil:
    """Read soil from a CSV file with the columns ``frequency_hz``, ``relative_permittivity`` and ``conductivity_s_per_m``.

    Frequencies rise from line to line; otherwise as :func:`elbowroom.geometry.layouts.read_layout`.

    Parameters
    ----------
    path : str or Path
        The file, UTF-8.
    tolerance : float, optional
        See :class:`Soil`.

    Raises
    ------
    JobFileError
        With every problem found and its line number.
    """
    file = Path(path)
    rows = read_rows(file, "soil table", _COLUMNS, (), tuple(_COLUMNS), things="frequencies")
    problems = [*rows.problems, *_problems(rows.lines, rows.numbers)]
    if problems:
        fail_table(file, "soil table", problems)
    frequency, permittivity, conductivity = (tuple(float(v) for v in column) for column in rows.numbers.T)
    return TabulatedSoil(frequency, permittivity, conductivity, tolerance)


def _problems(lines: list[int], numbers: np.ndarray) -> Iterator[tuple[int, str]]:
    before = 0.0
    for line, (frequency, permittivity, conductivity) in zip(lines, numbers, strict=True):
        if np.isfinite(frequency):
            if frequency <= 0.0:
                yield line, f"frequency_hz = {frequency:.10g}: a positive frequency expected"
            elif frequency <= before:
                yield line, f"frequency_hz = {frequency:.10g} does not lie above the line before ({before:.10g})"
            before = max(before, frequency)
        if np.isfinite(permittivity) and np.isfinite(conductivity):
            try:
                Soil(permittivity, conductivity)
            except ModelRangeError as cause:
                yield line, str(cause)
