"""The lower layers of the U.S. Standard Atmosphere, 1976 (NOAA, NASA, USAF), by geopotential altitude H in m.

Constants from its Tables 1 to 4, typed from memory; the values that follow from them agree with the published tables to
all printed digits (see the tests). ISO 2533:1975 has the same layers with another gas constant.
"""

import math

GRAVITY = 9.80665  # m/s²
MOLAR_MASS = 28.9644  # kg/kmol
GAS_CONSTANT = 8314.32  # J/(kmol K), the rounded one of 1976
EARTH_RADIUS = 6356766.0  # m
K_PER_M = GRAVITY * MOLAR_MASS / GAS_CONSTANT

BASES = (0.0, 11000.0, 20000.0, 32000.0, 47000.0)  # m
TOP = 51000.0
LAPSE_RATES = (-0.0065, 0.0, 0.001, 0.0028, 0.0)  # K/m
TEMPERATURES = (288.15, 216.65, 216.65, 228.65, 270.65)  # K, at the bases


def layer(height: float) -> int:
    return max(0, sum(base <= height for base in BASES) - 1)


def temperature(height: float) -> float:
    """K. Its slope jumps at the bases of the layers."""
    i = layer(height)
    return TEMPERATURES[i] + LAPSE_RATES[i] * (height - BASES[i])


def _fall(i: int, height: float) -> float:
    """Pressure at a height in layer i, over that at its base."""
    if LAPSE_RATES[i] == 0.0:
        return math.exp(-K_PER_M * (height - BASES[i]) / TEMPERATURES[i])
    here = TEMPERATURES[i] + LAPSE_RATES[i] * (height - BASES[i])
    return float((TEMPERATURES[i] / here) ** (K_PER_M / LAPSE_RATES[i]))


def _base_pressures() -> tuple[float, ...]:
    pressures = [101325.0]
    for i, top in enumerate(BASES[1:]):
        pressures.append(pressures[-1] * _fall(i, top))
    return tuple(pressures)


BASE_PRESSURES = _base_pressures()  # Pa


def pressure(height: float) -> float:
    """Pa. Value and slope are continuous everywhere."""
    i = layer(height)
    return BASE_PRESSURES[i] * _fall(i, height)


def pressure_slope(height: float) -> float:
    """Pa/m: the hydrostatic law, dp/dH = -p·k/T."""
    return -pressure(height) * K_PER_M / temperature(height)


def density(height: float) -> float:
    """kg/m³. Continuous, with the kinks of the temperature."""
    return pressure(height) * MOLAR_MASS / (GAS_CONSTANT * temperature(height))


def geopotential(altitude: float) -> float:
    """H for a geometric altitude Z, both m."""
    return EARTH_RADIUS * altitude / (EARTH_RADIUS + altitude)


def gravity(altitude: float) -> float:
    """m/s² at a geometric altitude."""
    return GRAVITY * (EARTH_RADIUS / (EARTH_RADIUS + altitude)) ** 2
