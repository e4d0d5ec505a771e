"""Reading Touchstone files, the open text form of port matrices over frequency: versions 1 and 2, any number of ports.

- `PortMatrices`: what such a file holds
- `read_touchstone`: from a file; `elbowroom.job.touchstonewriter` writes them
- `reflection_from_file`: a one-port file as a termination

The form is that of "Touchstone File Format Specification", version 1.1 (2002) and version 2.0 (2009), IBIS Open Forum; read from
memory and held against an independent reader and writer in the tests.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import NoReturn

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import JobFileError
from elbowroom.base.inputs import read_input
from elbowroom.job.tomlfile import counted, near_miss
from elbowroom.system.terminations import SampledReflection

UNITS_HZ = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}
PARAMETERS = ("S", "Y", "Z")
FORMATS = ("ri", "ma", "db")

_KEYWORDS = (
    "version", "number of ports", "two-port data order", "number of frequencies", "number of noise frequencies", "reference",
    "matrix format", "mixed-mode order", "begin information", "end information", "network data", "noise data", "end",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class PortMatrices:
    """Matrices of some ports over frequency.

    Attributes
    ----------
    frequency_hz : float64 (F,)
        Rising [Hz].
    parameter : "S", "Y" or "Z"
        Which matrices.
    matrices : complex128 (F, P, P)
        [-], [S] or [ohm]; never normalised.
    reference_ohm : float64 (P,)
        Reference resistance of each port [ohm]; what S refers to.
    comments : tuple of str
        Lines for people.
    """

    frequency_hz: FloatArray
    parameter: str
    matrices: ComplexArray
    reference_ohm: FloatArray
    comments: tuple[str, ...] = field(default=())

    @property
    def n_ports(self) -> int:
        """Number of ports P."""
        return self.matrices.shape[1]


@dataclass(frozen=True)
class _Options:
    unit: float = 1e9
    parameter: str = "S"
    form: str = "ma"
    reference: tuple[float, ...] = (50.0,)


_Line = tuple[int, str]
"""Line number and what stands on it besides comments."""


class _Reader:
    """One file while it is read; every error names the file and, where there is one, the line."""

    def __init__(self, file: Path) -> None:
        self.file = file
        self.lines: list[_Line] = []
        self.comments: list[str] = []
        for number, text in enumerate(re.split(r"\r\n|\n|\r", self._text()), start=1):
            body, mark, comment = text.partition("!")
            if mark and comment.strip():
                self.comments.append(comment.strip())
            if body.strip():
                self.lines.append((number, body.strip()))

    def fail(self, text: str, line: int | None = None) -> NoReturn:
        raise JobFileError(text if line is None else f"line {line}: {text}", file=self.file)

    def _text(self) -> str:
        try:
            data = read_input(self.file)
        except FileNotFoundError:
            try:
                siblings = [p.name for p in self.file.parent.iterdir() if p.is_file()]
            except OSError:
                siblings = []
            hint = near_miss(self.file.name, siblings)
            self.fail("no such Touchstone file" + (f"; {hint}" if hint.startswith("did") else ""))
        except IsADirectoryError:
            self.fail("is a folder; a Touchstone file expected")
        except (OSError, ValueError) as cause:
            self.fail(f"cannot be read: {getattr(cause, 'strerror', None) or cause}")
        if not data.strip():
            self.fail("the file is empty; a Touchstone file expected")
        if b"\0" in data:
            self.fail("not plain text; a Touchstone file expected")
        try:
            return data.decode("utf-8-sig")
        except UnicodeDecodeError:
            # comments with a degree sign or a name in an older encoding do no harm
            return data.decode("latin-1")

    def number(self, token: str, line: int) -> float:
        """Return a number; refuse whatever is none, or not finite."""
        try:
            value = float(token.replace("_", "?"))
        except ValueError:
            self.fail(f"{token[:40]!r} is not a number", line)
        if not math.isfinite(value):
            self.fail(f"{token[:40]!r} is not a finite number", line)
        return value

    def options(self, line: int, text: str) -> _Options:
        """Return what an option line says; what it leaves out is GHz S MA R 50."""
        unit, parameter, form = 1e9, "S", "ma"
        reference: tuple[float, ...] = (50.0,)
        tokens = text[1:].split()
        given: dict[str, str] = {}
        expected = "expected # with a unit (Hz, kHz, MHz, GHz), S, Y or Z, a format (RI, MA, DB) and R with a resistance"
        while tokens:
            token = tokens.pop(0)
            small = token.lower()
            kind = (
                "unit" if small in UNITS_HZ else "format" if small in FORMATS
                else "parameter" if small in ("s", "y", "z", "g", "h") else "R" if small == "r" else ""
            )  # fmt: skip
            if not kind:
                self.fail(f"option line: {token[:40]!r} is not known; {expected}", line)
            if kind in given:
                self.fail(f"option line: {token!r} beside {given[kind]!r}; {expected}", line)
            given[kind] = token
            if kind == "unit":
                unit = UNITS_HZ[small]
            elif kind == "format":
                form = small
            elif kind == "parameter":
                if small in "gh":
                    self.fail(f"option line: {token.upper()} parameters are not supported; S, Y or Z expected", line)
                parameter = token.upper()
            else:
                values = []
                while tokens and re.match(r"[-+.\d]", tokens[0]):
                    values.append(self.number(tokens.pop(0), line))
                if not values:
                    self.fail(f"option line: R without a resistance; {expected}", line)
                if min(values) <= 0.0:
                    self.fail(f"option line: R {min(values):g}: expected a positive resistance", line)
                reference = tuple(values)
        return _Options(unit, parameter, form, reference)

    def frequencies(
        self, lines: Sequence[_Line], n_pairs: int, what: str, options: _Options, *, noise: bool
    ) -> tuple[FloatArray, ComplexArray]:
        """Return frequencies (F,) [Hz] and values (F, pairs) from the lines of numbers.

        With noise, five numbers at a frequency not above the last one begin the noise data, which are skipped.
        """
        need = 1 + 2 * n_pairs
        rows: list[list[float]] = []
        row: list[float] = []
        start = 0

        def missing() -> NoReturn:
            self.fail(f"{counted(len(row), 'number')} found for this frequency, {need} expected ({what})", start)

        for line, text in lines:
            if text.startswith("["):
                self.fail(f"{text[:40]} among the data", line)
            numbers = [self.number(token, line) for token in text.split()]
            if not row:
                if noise and rows and len(numbers) == 5 and numbers[0] <= rows[-1][0]:
                    break
                start = line
            elif len(numbers) % 2 == 1:
                # pairs are never split over lines, so a new frequency begins here
                missing()
            row = [*row, *numbers]
            if len(row) > need:
                missing()
            if len(row) == need:
                if row[0] < 0.0:
                    self.fail(f"frequency {row[0]:g} is negative", start)
                if rows and row[0] <= rows[-1][0]:
                    self.fail(f"frequency {row[0]:.10g} after {rows[-1][0]:.10g}; rising frequencies expected", start)
                rows.append(row)
                row = []
        if row:
            missing()
        if not rows:
            self.fail("no data below the option line")
        table = np.array(rows)
        first, second = table[:, 1::2], table[:, 2::2]
        if options.form == "ri":
            values = first + 1j * second
        else:
            with np.errstate(over="ignore"):
                size = first if options.form == "ma" else 10.0 ** (first / 20.0)
            values = size * np.exp(1j * np.deg2rad(second))
        if not np.all(np.isfinite(values)):
            self.fail("values too large to be numbers")
        return table[:, 0] * options.unit, values


def ports_by_name(path: Path) -> int | None:
    """Return how many ports a file has by its name, as ``.s2p``; None if that does not say."""
    found = re.fullmatch(r"\.[syz](\d{1,4})p", path.suffix.lower())
    return int(found[1]) if found else None


def _ports_by_numbers(lines: Sequence[_Line]) -> int | None:
    """Return how many ports the first frequency of a version 1 file is of, if its numbers fit any."""
    count = 0
    for i, (_, text) in enumerate(lines):
        here = len(text.split())
        if i and here % 2 == 1:
            break
        count += here
    n = round(math.sqrt(max(count - 1, 0) / 2))
    return n if n and count == 1 + 2 * n * n else None


def read_touchstone(path: str | Path, *, ports: int | None = None) -> PortMatrices:
    """Read a Touchstone file of version 1 or 2.

    S, Y or Z parameters, in any unit and format, with one reference resistance or one a port, any kind of line end, comments
    anywhere; noise data are skipped.  A version 1 file tells its number of ports by its name (``.s2p``) or, if that says
    nothing, by the numbers of its first frequency.

    Parameters
    ----------
    path : str or Path
        The file.
    ports : int, optional
        How many ports it must have.

    Returns
    -------
    PortMatrices

    Raises
    ------
    JobFileError
        If the file cannot be used; with the line at fault, what was found and what was expected.
    """
    reader = _Reader(Path(path))
    if not reader.lines:
        reader.fail("nothing but comments; an option line (# Hz S RI R 50) and numbers expected")
    line, text = reader.lines[0]
    if text.startswith("["):
        found = _read_version_2(reader)
    elif text.startswith("#"):
        found = _read_version_1(reader, ports)
    else:
        reader.fail(f"{text[:40]!r} before the option line; # with unit, parameter and format expected first", line)
    if ports is not None and found.n_ports != ports:
        reader.fail(f"{counted(found.n_ports, 'port')} found, {ports} expected")
    return found


def _reference_of(reader: _Reader, values: Sequence[float], n: int, line: int) -> FloatArray:
    if len(values) not in (1, n):
        reader.fail(f"{len(values)} reference resistances found, 1 or {n} (one a port) expected", line)
    return np.broadcast_to(np.array(values, dtype=float), (n,)).copy()


def _read_version_1(reader: _Reader, ports: int | None) -> PortMatrices:
    line, text = reader.lines[0]
    options = reader.options(line, text)
    # further option lines are to be ignored, says the specification
    data = [entry for entry in reader.lines[1:] if not entry[1].startswith("#")]
    if not data:
        reader.fail("no data below the option line", line)
    named, numbered = ports_by_name(reader.file), _ports_by_numbers(data)
    n = named or numbered or ports
    if not n:
        reader.fail("the number of ports is told neither by the name (.s1p, .s2p, ...) nor by the numbers of the first frequency")
    if numbered and numbered != n:
        reader.fail(
            f"the name says {counted(n, 'port')}, but the first frequency has the {1 + 2 * numbered**2} numbers of "
            f"{counted(numbered, 'port')}",
            data[0][0],
        )
    frequency, values = reader.frequencies(data, n * n, counted(n, "port"), options, noise=n == 2)
    matrices = values.reshape(-1, n, n)
    if n == 2:
        # the one case in which columns run first: 11 21 12 22
        matrices = matrices.transpose(0, 2, 1)
    reference = _reference_of(reader, options.reference, n, line)
    root = np.sqrt(reference)
    scale = {"S": np.ones((n, n)), "Z": np.outer(root, root), "Y": 1.0 / np.outer(root, root)}[options.parameter]
    return PortMatrices(frequency, options.parameter, matrices * scale, reference, tuple(reader.comments))


def _keywords(reader: _Reader) -> Iterator[tuple[int, str, str, list[_Line]]]:
    """Give line, keyword, argument and the lines below it, for every keyword and the option line (``#``)."""
    informed = False
    at: tuple[int, str, str, list[_Line]] | None = None
    for line, text in reader.lines:
        found = re.match(r"\[\s*([^\]]*?)\s*\](.*)", text)
        word = " ".join(found[1].lower().split()) if found else ""
        if informed:
            informed = word != "end information"
            continue
        if not found and not text.startswith("#"):
            if at is None or at[1] == "#":
                reader.fail(f"{text[:40]!r} where a keyword in brackets was expected", line)
            at[3].append((line, text))
            continue
        if found and word not in _KEYWORDS:
            reader.fail(f"[{found[1]}] is not known; {near_miss(word, _KEYWORDS, 'keywords')}", line)
        if at is not None:
            yield at
        informed = word == "begin information"
        at = (line, word, found[2].strip(), []) if found else (line, "#", text, [])
        if word == "end":
            break
    if at is not None:
        yield at


def _read_version_2(reader: _Reader) -> PortMatrices:
    parts: dict[str, tuple[int, str, list[_Line]]] = {}
    for line, word, argument, below in _keywords(reader):
        if word in parts and word != "#":
            reader.fail(f"[{word}] again; it stands on line {parts[word][0]} already", line)
        if not parts and word != "version":
            reader.fail(f"[{word}] before [Version], which must come first", line)
        if below and word not in ("reference", "network data", "noise data"):
            reader.fail(f"{below[0][1][:40]!r} where a keyword in brackets was expected", below[0][0])
        parts.setdefault(word, (line, argument, below))

    def part(word: str) -> tuple[int, str, list[_Line]]:
        if word not in parts:
            reader.fail("the option line (# ...) is missing" if word == "#" else f"[{word.title()}] is missing")
        return parts[word]

    def whole_number(word: str) -> int:
        line, argument, _ = part(word)
        if not re.fullmatch(r"0*[1-9]\d{0,6}", argument):
            reader.fail(f"[{word.title()}] {argument[:40]}: expected a whole number of 1 or more", line)
        return int(argument)

    line, version, _ = part("version")
    if version not in ("2.0", "2.1"):
        reader.fail(f"[Version] {version[:40]}: expected 2.0 or 2.1; a file of version 1 has no [Version]", line)
    options_line, text, _ = part("#")
    options = reader.options(options_line, text)
    n = whole_number("number of ports")
    named = ports_by_name(reader.file)
    if named is not None and named != n:
        reader.fail(f"[Number of Ports] {n}, but the name says {named}", parts["number of ports"][0])
    if "mixed-mode order" in parts:
        reader.fail("mixed-mode data are not supported; single-ended ports expected", parts["mixed-mode order"][0])
    layout = parts.get("matrix format", (0, "full", []))
    shape = layout[1].lower()
    if shape not in ("full", "lower", "upper"):
        reader.fail(f"[Matrix Format] {layout[1][:40]}: expected Full, Lower or Upper", layout[0])
    order = ""
    if n == 2:
        line, order, _ = part("two-port data order")
        if order not in ("12_21", "21_12"):
            reader.fail(f"[Two-Port Data Order] {order[:40]}: expected 12_21 or 21_12", line)
    reference, reference_line = list(options.reference), options_line
    if "reference" in parts:
        reference_line, argument, below = parts["reference"]
        entries = [(reference_line, argument), *below]
        reference = [reader.number(token, at) for at, entry in entries for token in entry.split()]
        if not reference or min(reference) <= 0.0:
            reader.fail("[Reference]: expected positive resistances", reference_line)
        if len(reference) != n:
            reader.fail(f"[Reference]: {len(reference)} resistances found, {n} expected, one a port", reference_line)
    if "end" not in parts:
        reader.fail("[End] is missing; the file may have been cut short")
    data_line, _, data = part("network data")
    if not data:
        reader.fail("no numbers below [Network Data]", data_line)
    pairs = n * n if shape == "full" else n * (n + 1) // 2
    frequency, values = reader.frequencies(data, pairs, f"{counted(n, 'port')}, {shape} matrix", options, noise=False)
    announced = whole_number("number of frequencies")
    if announced != frequency.size:
        line = parts["number of frequencies"][0]
        reader.fail(f"[Number of Frequencies] {announced}, but {frequency.size} found below [Network Data]", line)
    if shape == "full":
        matrices = values.reshape(-1, n, n)
        matrices = matrices.transpose(0, 2, 1) if order == "21_12" else matrices
    else:
        rows, columns = np.tril_indices(n) if shape == "lower" else np.triu_indices(n)
        matrices = np.empty((frequency.size, n, n), dtype=complex)
        matrices[:, rows, columns] = values
        matrices[:, columns, rows] = values
    return PortMatrices(
        frequency,
        options.parameter,
        matrices,
        _reference_of(reader, reference, n, reference_line),
        tuple(reader.comments),
    )


def reflection_from_file(path: str | Path, *, allow_negative_resistance: bool = False) -> SampledReflection:
    """Read a one-port Touchstone file as a termination.

    Parameters
    ----------
    path : str or Path
        The file, of S, Y or Z.
    allow_negative_resistance : bool, optional
        Whether it may be active.

    Returns
    -------
    SampledReflection
        Against the file's reference resistance; interpolated as told there.

    Raises
    ------
    JobFileError
        If the file cannot be used or has not one port.
    ModelRangeError
        If it is active and may not be.
    """
    file = Path(path)
    found = read_touchstone(file, ports=1)
    reference, values = float(found.reference_ohm[0]), found.matrices[:, 0, 0]
    if found.parameter != "S":
        ratio = values / reference if found.parameter == "Z" else values * reference
        with np.errstate(all="ignore"):
            values = (ratio - 1.0) / (ratio + 1.0) if found.parameter == "Z" else (1.0 - ratio) / (1.0 + ratio)
        # within rounding of the point where the reflection has no value
        if not np.all(np.abs(values) < 1e9):
            msg = f"an impedance of minus the reference of {reference:g} ohm cannot be used"
            raise JobFileError(msg, file=file)
    return SampledReflection(
        tuple(found.frequency_hz),
        tuple(values),
        reference,
        file.name,
        allow_negative_resistance,
    )
