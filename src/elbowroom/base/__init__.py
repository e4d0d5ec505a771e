"""What every other package may use: errors, physical constants, array declarations."""
