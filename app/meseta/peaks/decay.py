"""Decay constant and conductance at zero length of a length series: ln G = ln G_c - beta L."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.peaks.lines import Line, fit_line

__all__ = ["Decay", "DecayPoints", "decay"]

Floats = npt.NDArray[np.float64]

_FEWEST = 2
_DOUBT = 0.05


@dataclass(frozen=True)
class DecayPoints:
    """Conductance of molecules of different length.

    Attributes
    ----------
    length : (n,) float64
        In ``length_unit``.
    conductance_g0 : (n,) float64
    length_error, conductance_error_g0 : (n,) float64
        Standard errors; NaN where not stated.
    label : (n,) str
    length_unit : str
        What a length counts ("nm", "angstrom", "carbon", "ring"); the decay constant is per this unit.
    source : str
        Where the points come from, for messages.
    """

    length: Floats
    conductance_g0: Floats
    length_error: Floats
    conductance_error_g0: Floats
    label: npt.NDArray[np.str_]
    length_unit: str
    source: str = "points"


@dataclass(frozen=True)
class Decay:
    """Decay constant of a length series.

    Attributes
    ----------
    points : DecayPoints
    beta, beta_sigma, beta_sigma_scaled : float
        Decay constant per unit of length; its error from the stated errors alone, and stretched to the scatter of the
        points.  Where no errors are stated both are from the scatter.  NaN where it cannot be told (two points).
    log_contact, log_contact_sigma, log_contact_sigma_scaled : float
        ln(G_c/G0), the logarithm of the conductance at zero length.
    contact_g0, contact_low_g0, contact_high_g0 : float
        G_c with its 95 % interval (wider of the two errors).
    beta_low, beta_high : float
        95 % interval of the decay constant (wider of the two errors).
    chi_square : float
        Weighted squares; of ln G without weights where no errors are stated.
    freedom : int
    probability : float
        Chance of so large a chi-square if the points lay on the line within their errors; NaN without stated errors.
    absolute : bool
        Whether errors were stated.
    notes : tuple of str
        What a reader must know.
    """

    points: DecayPoints
    beta: float
    beta_sigma: float
    beta_sigma_scaled: float
    log_contact: float
    log_contact_sigma: float
    log_contact_sigma_scaled: float
    contact_g0: float
    contact_low_g0: float
    contact_high_g0: float
    beta_low: float
    beta_high: float
    chi_square: float
    freedom: int
    probability: float
    absolute: bool
    notes: tuple[str, ...]
    line: Line = field(repr=False)

    def band(self, length: npt.ArrayLike) -> tuple[Floats, Floats, Floats]:
        """Return the line and its 95 % confidence band at the given lengths, in G0.

        Returns
        -------
        conductance, low, high : (n,) float64
            ``low`` and ``high`` are NaN where there is no error to speak of.
        """
        at = np.asarray(length, float)
        middle = self.line.intercept + self.line.slope * at
        half = _quantile(self.line) * _stretch(self.line) * self.line.sigma_at(at)
        return np.exp(middle), np.exp(middle - half), np.exp(middle + half)


def decay(points: DecayPoints) -> Decay:
    """Fit the decay constant of a length series.

    Parameters
    ----------
    points : DecayPoints
        At least two lengths; conductances positive.  Errors of conductance count where every point has one, errors of
        length only together with them.

    Raises
    ------
    InputError
        Where points are too few, or not positive.

    Notes
    -----
    Errors of ln G are sigma_G/G.  Errors in both coordinates: York et al., Am. J. Phys. 72, 367 (2004).  If the points
    do not lie on one line within their errors the absolute error is too small; so both are given.
    """
    from scipy import stats

    _check(points)
    sigma, sigma_x, notes = _errors(points)
    line = fit_line(points.length, np.log(points.conductance_g0), sigma, sigma_x)
    scale = line.scale
    probability = float(stats.chi2.sf(line.chi_square, line.freedom)) if line.absolute and line.freedom > 0 else np.nan
    if probability < _DOUBT:
        notes.append(
            "the points do not lie on one line within their errors: the absolute error is too small, see the scaled one"
        )
    if line.freedom < 1:
        notes.append("two points always lie on a line: the fit cannot be judged")
    if line.slope >= 0:
        notes.append("conductance does not fall with length")
    half = _quantile(line) * _stretch(line)
    log_contact = line.intercept
    return Decay(
        points=points,
        beta=-line.slope,
        beta_sigma=line.slope_sigma,
        beta_sigma_scaled=line.slope_sigma * scale,
        log_contact=log_contact,
        log_contact_sigma=line.intercept_sigma,
        log_contact_sigma_scaled=line.intercept_sigma * scale,
        contact_g0=float(np.exp(log_contact)),
        contact_low_g0=float(np.exp(log_contact - half * line.intercept_sigma)),
        contact_high_g0=float(np.exp(log_contact + half * line.intercept_sigma)),
        beta_low=-line.slope - half * line.slope_sigma,
        beta_high=-line.slope + half * line.slope_sigma,
        chi_square=line.chi_square,
        freedom=line.freedom,
        probability=probability,
        absolute=line.absolute,
        notes=tuple(notes),
        line=line,
    )


def _stretch(line: Line) -> float:
    """Return the factor on the line's errors: the scatter's where that is larger."""
    return 1.0 if np.isnan(line.scale) else max(line.scale, 1.0)


def _quantile(line: Line) -> float:
    """Return the 97.5 % quantile: Student's where the error comes from the scatter, the normal one else."""
    from scipy import stats

    if line.absolute and _stretch(line) == 1.0:
        return float(stats.norm.ppf(0.975))
    return float(stats.t.ppf(0.975, line.freedom)) if line.freedom > 0 else float("nan")


def _errors(points: DecayPoints) -> tuple[Floats | None, Floats | None, list[str]]:
    """Return errors of ln G and of length, and what has to be said about them."""
    stated = np.isfinite(points.conductance_error_g0)
    along = np.isfinite(points.length_error)
    if not stated.all():
        notes = ["no errors of conductance: all points weigh the same, errors come from the scatter"]
        if stated.any():
            notes = ["errors of conductance are missing for some points: all weigh the same, errors from the scatter"]
        if along.any():
            notes.append("errors of length are not used without errors of conductance")
        return None, None, notes
    sigma = points.conductance_error_g0 / points.conductance_g0
    if not along.any():
        return sigma, None, []
    notes = [] if along.all() else ["errors of length are missing for some points and taken as zero there"]
    return sigma, np.where(along, points.length_error, 0.0), notes


def _check(points: DecayPoints) -> None:
    where, remedy = points.source, "give lengths, and positive conductances in G0"
    if len(np.unique(points.length)) < _FEWEST:
        raise InputError(f"needs points at {_FEWEST} different lengths or more", where, remedy)
    if not np.isfinite(points.length).all():
        raise InputError("a length is not a number", where, remedy)
    good = np.isfinite(points.conductance_g0) & (points.conductance_g0 > 0)
    if not good.all():
        raise InputError(f"conductance {points.conductance_g0[~good][0]} G0 has no logarithm", where, remedy)
    for errors, name in ((points.conductance_error_g0, "conductance"), (points.length_error, "length")):
        bad = np.isfinite(errors) & ((errors <= 0) if name == "conductance" else (errors < 0))
        if bad.any():
            raise InputError(
                f"the error {errors[bad][0]} of a {name} is not positive", where, "leave it out if unknown"
            )
