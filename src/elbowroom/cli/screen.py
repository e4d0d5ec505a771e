"""What is written to the terminal: tables, progress and messages."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text


def readable_seconds(seconds: float) -> str:
    """Return a duration in the unit people would use."""
    if seconds < 90.0:
        return f"{seconds:.1f} s"
    if seconds < 5400.0:
        return f"{seconds / 60.0:.1f} min"
    return f"{seconds / 3600.0:.1f} h"


def _is_number(cell: Any) -> bool:
    try:
        float(cell)
    except (TypeError, ValueError):
        return False
    return True


class Screen:
    """Where a command talks to its user.

    Parameters
    ----------
    mode : str
        ``"normal"``, ``"quiet"`` (results and errors only) or ``"json"`` (one JSON object a line on standard output).
    """

    def __init__(self, mode: str = "normal") -> None:
        self.mode = mode
        width = None if sys.stdout.isatty() or "COLUMNS" in os.environ else 140
        self.out = Console(highlight=False, soft_wrap=True, width=width)
        self.error = Console(stderr=True, highlight=False, soft_wrap=True)

    def say(self, text: str = "") -> None:
        """Write a line that quiet runs leave out."""
        if self.mode == "normal":
            self.out.print(text, markup=False)

    def warn(self, text: str) -> None:
        """Write a warning to standard error."""
        self.error.print(f"warning: {text}", markup=False)

    def emit(self, kind: str, **values: Any) -> None:
        """Write one JSON line, in JSON mode only."""
        if self.mode == "json":
            try:
                print(json.dumps({"kind": kind, **values}), flush=True)
            except BrokenPipeError:
                # without a number click leaves it to the program, instead of ending by 1
                raise BrokenPipeError from None

    def wrote(self, path: Path, what: str = "") -> None:
        """Tell that a file was written."""
        self.emit("file", path=str(path), what=what)
        if self.mode != "json":
            self.out.print(f"wrote {path}" + (f" ({what})" if what else ""), markup=False)

    def table(self, title: str, columns: Sequence[str], rows: Sequence[Sequence[Any]]) -> None:
        """Write a table, except in JSON mode."""
        if self.mode == "json":
            return
        made = Table(title=title, title_justify="left")
        for index, column in enumerate(columns):
            numeric = bool(rows) and all(_is_number(row[index]) for row in rows)
            # Text, not markup: square brackets are units.
            made.add_column(Text(column), justify="right" if numeric else "left", overflow="fold")
        texts = [[f"{cell:.6g}" if isinstance(cell, float) else str(cell) for cell in row] for row in rows]
        for row in texts:
            made.add_row(*map(Text, row))
        needed = sum(
            max([max(map(len, column.split()), default=1), *(len(r[i]) for r in texts)]) + 3 for i, column in enumerate(columns)
        )
        if needed < self.out.width:
            self.out.print(made)
            return
        # Too narrow for a table that can be read: one line a number.
        self.out.print(title, markup=False)
        for row in texts:
            self.out.print()
            for column, cell in zip(columns, row, strict=True):
                self.out.print(f"  {column}: {cell}", markup=False)


def with_origins(columns: list[str], rows: list[list[Any]], origins: Sequence[str]) -> None:
    """Add a column with the origin of each row's channel to a table, unless all were assembled."""
    if _not_all_assembled(origins):
        columns.append("origin")
        for row, origin in zip(rows, origins, strict=True):
            row.append(short_origin(origin))


def short_origin(origin: str) -> str:
    """Return the origin of a channel in words that leave room for other columns."""
    return origin.replace("interpolated", "interp.")


def tell_origins(screen: Screen, origins: Sequence[str]) -> None:
    """Say what origins mean, unless all channels were assembled."""
    from elbowroom.system.solving import ORIGIN_MEANING

    if _not_all_assembled(origins):
        screen.say(f"origin: {ORIGIN_MEANING}")


def _not_all_assembled(origins: Sequence[str]) -> bool:
    from elbowroom.system.solving import ORIGINS

    return any(origin != ORIGINS[0] for origin in origins)
