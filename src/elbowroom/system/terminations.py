"""What ports see: impedances, circuits, measured reflections, open and short circuits.

- `reflection_of`: terminations at one frequency as reflection coefficients against a reference
- `SeriesCircuit`, `ParallelCircuit`, `SampledReflection`: terminations that change with frequency
- `termination_at`, `negative_resistance`, `port_termination_text`: one of any kind at a frequency, whether active, and in words
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray
from elbowroom.base.errors import ModelRangeError

Termination = complex | float | str | Sequence[complex | float | str] | ArrayLike
"""A number [ohm], ``"open"``, ``"short"``, or one of these per port."""

ROUNDED_REFLECTION = 1e-5
"""How far beyond 1 the magnitude of a sampled reflection may lie by the rounding of printed digits."""


class ActiveImpedance(complex):
    """An impedance [ohm] whose resistance may be negative, by intention; any other is refused when it is."""


def reflection_of(termination: Termination, n_ports: int, reference_ohm: float) -> ComplexArray:
    """Return the reflection coefficient of what each port sees, (P,).

    An open circuit is 1 and a short -1, so that no infinite impedance enters any formula.

    Parameters
    ----------
    termination : number, "open", "short" or a sequence of P of these
        Impedances in ohm.
    n_ports : int
        Number of ports P.
    reference_ohm : float
        Resistance the coefficients refer to [ohm].

    Raises
    ------
    ModelRangeError
        If the length is wrong, a word is unknown, a value is not finite, a resistance is negative and no `ActiveImpedance`, or
        an active impedance is just minus the reference.
    """
    if isinstance(termination, str) or np.ndim(termination) == 0:
        items: Sequence = [termination] * n_ports
    else:
        items = list(termination)  # type: ignore[arg-type]
    if len(items) != n_ports:
        msg = f"termination: expected one value or {n_ports} values (one a port), got {len(items)}"
        raise ModelRangeError(msg)
    reflection = np.empty(n_ports, dtype=complex)
    for port, item in enumerate(items):
        if isinstance(item, str):
            if item not in ("open", "short"):
                msg = f"termination of port {port}: {item!r} is not known; expected an impedance in ohm, 'open' or 'short'"
                raise ModelRangeError(msg)
            reflection[port] = 1.0 if item == "open" else -1.0
            continue
        try:
            impedance = complex(item)
        except (TypeError, ValueError) as cause:
            msg = f"termination of port {port}: expected an impedance in ohm, 'open' or 'short', got {item!r}"
            raise ModelRangeError(msg) from cause
        if not np.isfinite(impedance):
            msg = f"termination of port {port}: {item!r} is not finite; use 'open' for an open port"
            raise ModelRangeError(msg)
        if impedance.real < 0.0 and not isinstance(item, ActiveImpedance):
            msg = f"termination of port {port}: resistance {impedance.real:g} ohm is negative; a passive termination was expected"
            raise ModelRangeError(msg)
        if abs(impedance + reference_ohm) < 1e-9 * reference_ohm:
            msg = f"termination of port {port}: {impedance:g} ohm undoes the reference resistance of {reference_ohm:g} ohm"
            raise ModelRangeError(msg)
        reflection[port] = (impedance - reference_ohm) / (impedance + reference_ohm)
    return reflection


def _positive_frequency(frequency_hz: float) -> float:
    if not (math.isfinite(frequency_hz) and frequency_hz > 0.0):
        msg = f"frequency_hz = {frequency_hz!r}: expected a positive, finite frequency"
        raise ModelRangeError(msg)
    return float(frequency_hz)


def _check_part(name: str, value: float | None, *, zero: bool, negative: bool = False) -> None:
    if value is None:
        return
    good = math.isfinite(value) and (negative or value > 0.0 or (zero and value == 0.0)) and (zero or value != 0.0)
    if not good:
        expected = "a finite number" if negative else "zero or more" if zero else "a positive number"
        msg = f"{name} = {value!r}: expected {expected}"
        raise ModelRangeError(msg)


@dataclass(frozen=True)
class SeriesCircuit:
    """Resistance, inductance and capacitance in series: Z = R + j omega L + 1/(j omega C).

    Parameters
    ----------
    resistance_ohm, inductance_h : float, optional
        [ohm], [H]; 0 by default.
    capacitance_f : float, optional
        [F]; ``None`` means none in series.
    allow_negative_resistance : bool, optional
        Whether the resistance may be negative, as that of an amplifier's model may.

    Raises
    ------
    ModelRangeError
        If a part is not finite, negative, or a capacitance of zero.
    """

    resistance_ohm: float = 0.0
    inductance_h: float = 0.0
    capacitance_f: float | None = None
    allow_negative_resistance: bool = False

    def __post_init__(self) -> None:
        _check_part("resistance_ohm", self.resistance_ohm, zero=True, negative=self.allow_negative_resistance)
        _check_part("inductance_h", self.inductance_h, zero=True)
        _check_part("capacitance_f", self.capacitance_f, zero=False)

    def impedance(self, frequency_hz: float) -> complex:
        """Return the impedance [ohm] at a frequency [Hz]."""
        omega = 2.0 * math.pi * _positive_frequency(frequency_hz)
        reactance = omega * self.inductance_h
        if self.capacitance_f is not None:
            reactance -= 1.0 / (omega * self.capacitance_f)
        return complex(self.resistance_ohm, reactance)

    def __str__(self) -> str:
        """Return the parts in words."""
        capacitance = "" if self.capacitance_f is None else f"{self.capacitance_f:.6g} F"
        inductance = f"{self.inductance_h:.6g} H" if self.inductance_h else ""
        resistance = f"{self.resistance_ohm:.6g} ohm" if self.resistance_ohm or not (inductance or capacitance) else ""
        return " + ".join(part for part in (resistance, inductance, capacitance) if part) + " in series"


@dataclass(frozen=True)
class ParallelCircuit:
    """Resistance, inductance and capacitance in parallel: 1/Z = 1/R + 1/(j omega L) + j omega C.

    Parameters
    ----------
    resistance_ohm, inductance_h : float, optional
        [ohm], [H]; ``None`` means none in parallel.
    capacitance_f : float, optional
        [F]; 0 by default.
    allow_negative_resistance : bool, optional
        Whether the resistance may be negative.

    Raises
    ------
    ModelRangeError
        If a part is not finite, negative, or a resistance or inductance of zero.
    """

    resistance_ohm: float | None = None
    inductance_h: float | None = None
    capacitance_f: float = 0.0
    allow_negative_resistance: bool = False

    def __post_init__(self) -> None:
        _check_part("resistance_ohm", self.resistance_ohm, zero=False, negative=self.allow_negative_resistance)
        _check_part("inductance_h", self.inductance_h, zero=False)
        _check_part("capacitance_f", self.capacitance_f, zero=True)

    def impedance(self, frequency_hz: float) -> complex:
        """Return the impedance [ohm] at a frequency [Hz]; infinite where nothing flows."""
        omega = 2.0 * math.pi * _positive_frequency(frequency_hz)
        susceptance = omega * self.capacitance_f
        if self.inductance_h is not None:
            susceptance -= 1.0 / (omega * self.inductance_h)
        admittance = complex(0.0 if self.resistance_ohm is None else 1.0 / self.resistance_ohm, susceptance)
        return complex(math.inf, 0.0) if admittance == 0.0 else 1.0 / admittance

    def __str__(self) -> str:
        """Return the parts in words."""
        parts = [(self.resistance_ohm, "ohm"), (self.inductance_h, "H"), (self.capacitance_f or None, "F")]
        shown = [f"{value:.6g} {unit}" for value, unit in parts if value is not None]
        return " + ".join(shown) + " in parallel" if shown else "open"


@dataclass(frozen=True)
class SampledReflection:
    """A reflection coefficient known at some frequencies, as from a file, linear in between.

    Real and imaginary part are interpolated, each linearly.  A straight line between two points of the unit disc stays in the
    disc, so what is passive at the samples is passive between them, and open and short circuits are points like any other;
    an interpolated impedance has neither property.  Outside the samples nothing is known, and nothing is returned.

    Parameters
    ----------
    frequency_hz : sequence of F floats
        Rising [Hz].
    reflection : sequence of F complex
        Against the reference [-].
    reference_ohm : float
        [ohm], positive.
    name : str, optional
        Where they are from, for messages.
    allow_negative_resistance : bool, optional
        Whether magnitudes above 1 are meant; otherwise they are refused beyond the rounding of five printed digits.

    Raises
    ------
    ModelRangeError
        If lengths differ, numbers are not finite, frequencies do not rise, the reference is not positive or a sample is active.
    """

    frequency_hz: tuple[float, ...]
    reflection: tuple[complex, ...]
    reference_ohm: float
    name: str = "samples"
    allow_negative_resistance: bool = False

    def __post_init__(self) -> None:
        frequency, reflection = np.asarray(self.frequency_hz, dtype=float), np.asarray(self.reflection, dtype=complex)
        if frequency.ndim != 1 or frequency.size == 0 or frequency.shape != reflection.shape:
            msg = f"{self.name}: expected as many reflections as frequencies, got {reflection.size} and {frequency.size}"
            raise ModelRangeError(msg)
        if not (np.all(np.isfinite(frequency)) and np.all(np.isfinite(reflection))):
            msg = f"{self.name}: expected finite frequencies and reflections"
            raise ModelRangeError(msg)
        if frequency[0] < 0.0 or np.any(np.diff(frequency) <= 0.0):
            msg = f"{self.name}: expected frequencies of zero or more that rise"
            raise ModelRangeError(msg)
        if not (math.isfinite(self.reference_ohm) and self.reference_ohm > 0.0):
            msg = f"{self.name}: reference {self.reference_ohm!r} ohm: expected a positive resistance"
            raise ModelRangeError(msg)
        size = np.abs(reflection)
        if not self.allow_negative_resistance:
            worst = int(np.argmax(size))
            if size[worst] > 1.0 + ROUNDED_REFLECTION:
                msg = (
                    f"{self.name}: negative resistance at {frequency[worst]:.10g} Hz (reflection of magnitude "
                    f"{size[worst]:.6g}); a passive termination was expected"
                )
                raise ModelRangeError(msg)
            reflection = reflection / np.maximum(size, 1.0)
        object.__setattr__(self, "frequency_hz", tuple(float(f) for f in frequency))
        object.__setattr__(self, "reflection", tuple(complex(r) for r in reflection))

    def reflection_at(self, frequency_hz: float) -> complex:
        """Return the reflection coefficient at a frequency [Hz].

        Raises
        ------
        ModelRangeError
            If the frequency lies outside the samples; the message names their range.
        """
        low, high = self.frequency_hz[0], self.frequency_hz[-1]
        # frequencies written with other digits are the same to a part in 1e9
        if not low * (1.0 - 1e-9) <= frequency_hz <= high * (1.0 + 1e-9):
            msg = f"{self.name}: covers {low:.10g} to {high:.10g} Hz; {frequency_hz:.10g} Hz lies outside"
            raise ModelRangeError(msg)
        values = np.asarray(self.reflection)
        real = np.interp(frequency_hz, self.frequency_hz, values.real)
        imaginary = np.interp(frequency_hz, self.frequency_hz, values.imag)
        return complex(real, imaginary)

    def impedance(self, frequency_hz: float) -> complex:
        """Return the impedance [ohm] at a frequency [Hz]; infinite where the reflection is that of an open circuit."""
        reflection = self.reflection_at(frequency_hz)
        if reflection == 1.0:
            return complex(math.inf, 0.0)
        found = self.reference_ohm * (1.0 + reflection) / (1.0 - reflection)
        # on the unit circle rounding may leave a resistance just below zero
        return found if self.allow_negative_resistance else complex(max(found.real, 0.0), found.imag)

    def __str__(self) -> str:
        """Return name, range and number of samples in words."""
        low, high = self.frequency_hz[0] / 1e6, self.frequency_hz[-1] / 1e6
        return f"{self.name} ({low:.6g} to {high:.6g} MHz, {len(self.frequency_hz)} samples)"


Circuit = SeriesCircuit | ParallelCircuit | SampledReflection
"""Terminations that change with frequency."""

PortTermination = complex | float | str | Circuit
"""What one port sees at every frequency: ohms, ``"open"``, ``"short"`` or a `Circuit`."""


def termination_at(termination: PortTermination, frequency_hz: float) -> complex | float | str:
    """Return what a port sees at one frequency: ohms, ``"open"`` or ``"short"``, as `reflection_of` takes it.

    Parameters
    ----------
    termination : number, "open", "short" or Circuit
        What it sees at every frequency.
    frequency_hz : float
        [Hz].

    Raises
    ------
    ModelRangeError
        If nothing is known at that frequency.
    """
    if not isinstance(termination, SeriesCircuit | ParallelCircuit | SampledReflection):
        return termination
    impedance = termination.impedance(frequency_hz)
    if math.isinf(impedance.real):
        return "open"
    if impedance == 0.0:
        return "short"
    return ActiveImpedance(impedance) if termination.allow_negative_resistance else impedance


def negative_resistance(termination: PortTermination) -> bool:
    """Return whether a termination gives power away at any frequency it is known at."""
    if isinstance(termination, SampledReflection):
        return bool(np.max(np.abs(termination.reflection)) > 1.0)
    if isinstance(termination, SeriesCircuit | ParallelCircuit):
        return termination.resistance_ohm is not None and termination.resistance_ohm < 0.0
    return not isinstance(termination, str) and complex(termination).real < 0.0


def port_termination_text(termination: PortTermination) -> str:
    """Return a termination in words: ``100``, ``[75, 20]``, ``open``, or a circuit's parts; numbers in ohm."""
    if isinstance(termination, complex):
        return f"[{termination.real:.10g}, {termination.imag:.10g}]"
    return f"{termination:.10g}" if isinstance(termination, float | int) else str(termination)
