"""Constants, units and the elementary formulas between volts, amperes, siemens, ohm and G0.

Constants are the CODATA values of :mod:`scipy.constants`.  All functions take scalars or arrays and return
float64.
"""

from __future__ import annotations

from typing import Final

import numpy as np
import numpy.typing as npt
from scipy import constants

__all__ = [
    "BOLTZMANN_JOULE_PER_KELVIN",
    "ELECTRON_MASS_KILOGRAM",
    "ELEMENTARY_CHARGE_COULOMB",
    "G0_SIEMENS",
    "HBAR_JOULE_SECOND",
    "R0_OHM",
    "barrier_from_decay",
    "conductance_from_current",
    "decades_per_nm",
    "johnson_current_rms",
    "remove_series_resistance",
    "series_resistance_error",
    "with_series_resistance",
]

Array = npt.NDArray[np.float64]

ELEMENTARY_CHARGE_COULOMB: Final[float] = float(constants.e)
BOLTZMANN_JOULE_PER_KELVIN: Final[float] = float(constants.k)
ELECTRON_MASS_KILOGRAM: Final[float] = float(constants.m_e)
HBAR_JOULE_SECOND: Final[float] = float(constants.hbar)
G0_SIEMENS: Final[float] = float(constants.physical_constants["conductance quantum"][0])
"""Conductance quantum 2e²/h in siemens (CODATA 2022, exact in the SI)."""
R0_OHM: Final[float] = float(constants.physical_constants["inverse of conductance quantum"][0])
"""Resistance h/2e² of one conductance quantum in ohm."""


def conductance_from_current(
    current_ampere: npt.ArrayLike,
    bias_volt: npt.ArrayLike,
    offset_ampere: npt.ArrayLike = 0.0,
    bias_offset_volt: npt.ArrayLike = 0.0,
) -> Array:
    """Return g = (I - I_off) / ((V - V_off) G0); NaN where the bias is zero.

    Offsets enter before the division (common practice, no source).
    """
    voltage = np.asarray(bias_volt, float) - np.asarray(bias_offset_volt, float)
    current = np.asarray(current_ampere, float) - np.asarray(offset_ampere, float)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(voltage == 0, np.nan, current / (voltage * G0_SIEMENS))


def remove_series_resistance(measured_g0: npt.ArrayLike, resistance_ohm: float) -> Array:
    """Return the contact's conductance behind a series resistance: g_c = g_m / (1 - rho g_m), rho = R_s G0.

    A reading at or above the ceiling 1/rho has no solution and gives NaN, never a negative number.
    """
    measured = np.asarray(measured_g0, float)
    rest = 1.0 - resistance_ohm * G0_SIEMENS * measured
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(rest > 0, measured / rest, np.nan)


def with_series_resistance(contact_g0: npt.ArrayLike, resistance_ohm: float) -> Array:
    """Return what is measured of a contact through a series resistance: g_m = g_c / (1 + rho g_c)."""
    contact = np.asarray(contact_g0, float)
    return contact / (1.0 + resistance_ohm * G0_SIEMENS * contact)


def series_resistance_error(measured_g0: npt.ArrayLike, sigma_g0: npt.ArrayLike, resistance_ohm: float) -> Array:
    """Return sigma(g_c) = sigma(g_m) / (1 - rho g_m)²: a correction also stretches the error."""
    rest = 1.0 - resistance_ohm * G0_SIEMENS * np.asarray(measured_g0, float)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(rest > 0, np.asarray(sigma_g0, float) / rest**2, np.nan)


def decades_per_nm(barrier_ev: npt.ArrayLike) -> Array:
    """Return the tunnelling slope 2 kappa / ln 10 of a square barrier in decades per nm.

    G ~ exp(-2 kappa d), kappa = sqrt(2 m_e phi)/hbar (textbook; 2 kappa = 1.0246 / angstrom x sqrt(phi/eV)).
    """
    energy = np.asarray(barrier_ev, float) * ELEMENTARY_CHARGE_COULOMB
    kappa = np.sqrt(2 * ELECTRON_MASS_KILOGRAM * energy) / HBAR_JOULE_SECOND
    return 2 * kappa * 1e-9 / np.log(10)


def barrier_from_decay(slope_decades_per_nm: npt.ArrayLike) -> Array:
    """Return the apparent barrier height in eV of a tunnelling slope; the inverse of :func:`decades_per_nm`."""
    return (np.abs(np.asarray(slope_decades_per_nm, float)) / decades_per_nm(1.0)) ** 2


def johnson_current_rms(conductance_g0: npt.ArrayLike, temperature_kelvin: float, bandwidth_hertz: float) -> Array:
    """Return the thermal (Johnson-Nyquist) current noise sqrt(4 k_B T G B) in ampere rms."""
    siemens = np.asarray(conductance_g0, float) * G0_SIEMENS
    return np.sqrt(4 * BOLTZMANN_JOULE_PER_KELVIN * temperature_kelvin * siemens * bandwidth_hertz)
