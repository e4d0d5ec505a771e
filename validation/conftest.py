"""The table at the end of a validation run: what was found, what it was held against, how closely, and the source."""

from __future__ import annotations

from dataclasses import dataclass
from math import floor, isfinite, log10

import pytest


@dataclass(frozen=True)
class Row:
    """One comparison; ``tolerance`` is absolute, in the unit of the two values."""

    check: str
    found: complex
    reference: complex
    tolerance: float
    source: str
    nearest_wrong: float | None

    @property
    def holds(self) -> bool:
        return abs(self.found - self.reference) <= self.tolerance

    @property
    def digits(self) -> str:
        """Return the decimal digits in which the two agree, relative to the reference (absolute where it is zero)."""
        deviation, scale = abs(self.found - self.reference), abs(self.reference) or 1.0
        if deviation == 0.0:
            return "all"
        return f"{max(0, floor(-log10(deviation / scale) * 10) / 10):.1f}" if isfinite(deviation) else "0"


ROWS = pytest.StashKey[list[Row]]()


class Recorder:
    """Compares, keeps the row for the table, and makes sure the comparison would have caught a wrong value."""

    def __init__(self, rows: list[Row]) -> None:
        self._rows = rows

    def __call__(
        self,
        check: str,
        found: complex,
        reference: complex,
        *,
        source: str,
        absolute: float = 0.0,
        relative: float = 0.0,
        wrong=(),
    ) -> None:
        """Assert |found - reference| <= max(absolute, relative |reference|) and note it for the table.

        Parameters
        ----------
        check : str
            What is compared, with its unit.
        found, reference : float or complex
            The program's value and the one from outside.
        source : str
            Where the reference comes from.
        absolute, relative : float
            The tolerance; the larger of the two counts.
        wrong : float or complex or a sequence of them, optional
            Values that a plausible mistake would give: each must fail the same comparison.
        """
        tolerance = max(absolute, relative * abs(reference))
        assert isfinite(tolerance), f"{check}: tolerance {tolerance}"
        assert tolerance > 0.0, f"{check}: a comparison needs a tolerance above zero"
        values = [complex(v) for v in (wrong if isinstance(wrong, (list, tuple)) else [wrong])]
        nearest = min((abs(v - reference) for v in values), default=None)
        row = Row(check, complex(found), complex(reference), tolerance, source, nearest)
        self._rows.append(row)
        assert row.holds, (
            f"{check}: found {found:.10g}, reference {reference:.10g}, apart by {abs(found - reference):.3g}, "
            f"tolerance {tolerance:.3g} ({source})"
        )
        for v in values:
            wrong_holds = Row(check, v, complex(reference), tolerance, source, None).holds
            assert not wrong_holds, f"{check}: the tolerance {tolerance:.3g} lets the wrong value {v:.10g} pass"


@pytest.fixture
def record(request: pytest.FixtureRequest) -> Recorder:
    """Return the function that compares a value with its reference and puts it into the table."""
    return Recorder(request.config.stash.setdefault(ROWS, []))


def _number(value: complex) -> str:
    if value.imag == 0.0:
        return f"{value.real:.7g}"
    return f"{value.real:.6g}{value.imag:+.6g}j"


def pytest_terminal_summary(terminalreporter, config: pytest.Config) -> None:
    """Print the table."""
    rows = config.stash.get(ROWS, [])
    if not rows:
        return
    heads = ("check", "found", "reference", "digits", "tolerance", "wrong at", "source")
    lines = [
        (
            row.check if row.holds else f"FAILED {row.check}",
            _number(row.found),
            _number(row.reference),
            row.digits,
            f"{row.tolerance:.1e}",
            "" if row.nearest_wrong is None else f"{row.nearest_wrong / row.tolerance:.1e} tol",
            row.source,
        )
        for row in rows
    ]
    widths = [max(len(line[c]) for line in (heads, *lines)) for c in range(len(heads))]
    terminalreporter.section("comparison with values from outside")
    for line in (heads, tuple("-" * w for w in widths), *lines):
        terminalreporter.write_line("  ".join(cell.ljust(w) for cell, w in zip(line, widths, strict=True)).rstrip())
