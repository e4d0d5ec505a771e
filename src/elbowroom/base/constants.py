"""Physical constants, SI, each with its source."""

from math import pi

SPEED_OF_LIGHT = 299_792_458.0
"""[m/s], exact by definition (SI Brochure, 9th edition, 2019)."""

VACUUM_PERMEABILITY = 1.25663706127e-6
"""[H/m], CODATA 2022 recommended value."""

VACUUM_PERMITTIVITY = 1.0 / (VACUUM_PERMEABILITY * SPEED_OF_LIGHT**2)
"""[F/m], from the two constants above."""

IMPEDANCE_OF_VACUUM = VACUUM_PERMEABILITY * SPEED_OF_LIGHT
"""[ohm], 376.730...; handbooks that print 120 pi are 0.07 % off."""


def wavenumber_of(frequency_hz: float) -> float:
    """Return the free-space wavenumber [rad/m] at a frequency [Hz]."""
    return 2.0 * pi * frequency_hz / SPEED_OF_LIGHT


def wavelength_of(frequency_hz: float) -> float:
    """Return the free-space wavelength [m] at a frequency [Hz]."""
    return SPEED_OF_LIGHT / frequency_hz
