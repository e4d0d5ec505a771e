"""What the metal of a round wire adds per length."""

from __future__ import annotations

import numpy as np
from scipy.special import ive

from elbowroom.base.constants import VACUUM_PERMEABILITY


def internal_impedance(radius: float, conductivity: float, relative_permeability: float, frequency_hz: float) -> complex:
    r"""Return the internal impedance per length of a round wire [ohm/m].

    .. math:: Z_i = \frac{\gamma}{2 \pi a \sigma} \frac{I_0(\gamma a)}{I_1(\gamma a)},
              \quad \gamma = \sqrt{j \omega \mu \sigma}

    Exact for a current that does not vary along the wire.

    Parameters
    ----------
    radius : float
        Wire radius a [m].
    conductivity : float
        Conductivity [S/m].
    relative_permeability : float
        Relative permeability [-].
    frequency_hz : float
        Frequency [Hz].

    References
    ----------
    .. [1] S. Ramo, J. R. Whinnery, T. Van Duzer, Fields and Waves in Communication Electronics, 3rd ed., 1994,
       section 4.5.
    """
    omega = 2.0 * np.pi * frequency_hz
    gamma = np.sqrt(1j * omega * VACUUM_PERMEABILITY * relative_permeability * conductivity)
    # Exponentially scaled Bessel functions: their common factor cancels, so thick wires do not overflow.
    ratio = ive(0, gamma * radius) / ive(1, gamma * radius)
    return complex(gamma / (2.0 * np.pi * radius * conductivity) * ratio)
