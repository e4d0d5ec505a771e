"""What ports see: impedances, open and short circuits, as reflection coefficients against a reference."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray
from elbowroom.base.errors import ModelRangeError

Termination = complex | float | str | Sequence[complex | float | str] | ArrayLike
"""A number [ohm], ``"open"``, ``"short"``, or one of these per port."""


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
        If the length is wrong, a word is unknown, a value is not finite or a resistance is negative.
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
        if impedance.real < 0.0:
            msg = f"termination of port {port}: resistance {impedance.real:g} ohm is negative; a passive termination was expected"
            raise ModelRangeError(msg)
        reflection[port] = (impedance - reference_ohm) / (impedance + reference_ohm)
    return reflection
