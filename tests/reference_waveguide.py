"""Slow reference: the waveguide simulator, a TE10 guide with a probe as a piece of an infinite array.

P. W. Hannan, M. A. Balfour, IEEE TAP 13, 342, 1965 (scan angle), and the probe's radiation resistance of
R. E. Collin, Field Theory of Guided Waves, ch. 7 (MEMORY, confirmed by a mode sum). SI units here: metres,
hertz.
"""

from __future__ import annotations

import numpy as np

SPEED_OF_LIGHT = 299_792_458.0
ETA = 376.730313412
WIDTH, HEIGHT, FREQUENCY = 22.86e-3, 10.16e-3, 10e9
"""The guide of the table, m and Hz."""
SCAN_ANGLE_DEG = 40.97
GUIDE_WAVELENGTH = 39.707e-3
PROBE_RESISTANCE = {5e-3: 32.66, 7e-3: 79.47}
"""Probe height (m) -> resistance (ohm), imposed sinusoid, wall a quarter guide wavelength behind (CLOSED,
0.1 %)."""


def scan_angle(width: float, frequency: float) -> float:
    """H-plane scan angle (rad) simulated by the TE10 wave, ``sin t = lambda / (2 width)``."""
    return float(np.arcsin(SPEED_OF_LIGHT / frequency / (2 * width)))


def guide_wavelength(width: float, frequency: float) -> float:
    """Guide wavelength of TE10, m."""
    return SPEED_OF_LIGHT / frequency / np.cos(scan_angle(width, frequency))


def probe_resistance(probe: float, wall: float, width: float, height: float, frequency: float) -> float:
    """Radiation resistance of a probe in the middle of the broad wall, ohm.

    ``(2 eta / (a b beta k)) sin^2(beta l) tan^2(k d / 2)``: probe of height d, shorting wall at the distance
    l behind it, guide a by b, TE10 alone propagating.
    """
    k = 2 * np.pi * frequency / SPEED_OF_LIGHT
    beta = 2 * np.pi / guide_wavelength(width, frequency)
    return 2 * ETA / (width * height * beta * k) * np.sin(beta * wall) ** 2 * np.tan(k * probe / 2) ** 2
