"""The junctions of each kind: how a contact thins, what bridges the gap, how the gap tunnels.

Sources (only what they support is claimed; every other number is our own choice and stands in
:class:`~meseta.simulate.settings.SimulationSettings`):

- Peaks of room-temperature gold at multiples of G0 only: Gai et al., Phys. Rev. B 53, 1042 (1996).  Scattering near the
  contact shifts them down like a resistor in series: Bakker et al., Phys. Rev. B 65, 235416.
- Last plateaus lengthen atom by atom, peaks 0.25 to 0.26 nm apart: Untiedt et al., cond-mat/0202349; chains of four
  atoms and more: Yanson et al., Nature 395, 783 (1998).
- Tunnelling G ~ exp(-2 kappa d): one decade per 0.1005 nm at a barrier of 5 eV (textbook).
- Molecular conductance is log-normal with a width of a third to half a decade, by common practice; so are the lengths
  and slopes of the plateaus.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from statistics import NormalDist
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError, nearest
from meseta.quantities import G0_SIEMENS
from meseta.simulate.record import Draw
from meseta.simulate.results import LABELS
from meseta.simulate.settings import SimulationSettings

__all__ = ["KINDS", "Bridge", "Junctions", "Kind", "Staircase", "kind_of", "metal_centre_g0", "metal_spread_g0"]

Floats = npt.NDArray[np.float64]

_CHAIN_WEIGHTS: Final = (0.42, 0.28, 0.16, 0.09, 0.05)
"""Share of last plateaus that are 1, 2, ... atoms long."""
_CHAIN_SPREAD_NM: Final = 0.035
_SKIPPED_SHARE: Final = 0.15
_SKIPPED_LAST_SHARE: Final = 0.08
_IRREGULAR_SHARE: Final = 0.10
"""Share of contacts of more than one atom whose arrangement gives no multiple of G0."""


@dataclass(frozen=True)
class Staircase:
    """Metallic plateaus, thickest contact first; (traces, contacts) float64 each.  Length 0: left out."""

    level_g0: Floats
    length_nm: Floats
    slope_decades_per_nm: Floats


@dataclass(frozen=True)
class Bridge:
    """Molecular plateau after the metallic contact has broken; (traces,) each.  Length 0: none.

    ``label`` is the place in :data:`~meseta.simulate.results.LABELS`.
    """

    log10_g0: Floats
    length_nm: Floats
    slope_decades_per_nm: Floats
    label: npt.NDArray[np.uint8]


@dataclass(frozen=True)
class Junctions:
    """All that happens in a block of openings.

    ``gap_nm`` is the tunnelling gap right after the rupture; ``decades_per_nm`` (positive) the tunnelling slope.
    """

    staircase: Staircase
    bridge: Bridge
    gap_nm: Floats
    decades_per_nm: Floats


def metal_centre_g0(atoms: npt.ArrayLike, settings: SimulationSettings) -> Floats:
    """Return the population centre of a contact of so many atoms: n / (1 + n R G0) with scattering R."""
    number = np.asarray(atoms, float)
    return number / (1 + number * settings.scattering_ohm * G0_SIEMENS)


def metal_spread_g0(atoms: npt.ArrayLike) -> Floats:
    """Return the standard deviation of such contacts; thicker contacts have more arrangements (our choice)."""
    return 0.045 * np.asarray(atoms, float) ** 1.1


def _staircase(draw: Draw, shift_decades: Floats) -> Staircase:
    """Return the thinning contact, from ``settings.staircase`` atoms to one."""
    atoms = np.arange(draw.settings.staircase, 0, -1)
    level = _metal_levels(draw, atoms) * 10 ** shift_decades[:, None]
    length = _metal_lengths(draw, atoms)
    steepness = draw.rng.standard_normal(level.shape)
    slope = np.where(atoms == 1, -0.05 + 0.05 * steepness, -np.abs(0.25 + 0.15 * steepness))
    return Staircase(level, length, _gentle(slope, level, length))


def _gentle(slope: Floats, level: Floats, length: Floats) -> Floats:
    """Return slopes so gentle that no plateau runs past its neighbours: every rearrangement is a fall."""
    gaps = np.log10(level[:, :-1] / level[:, 1:])
    wide = np.full((len(level), 1), np.inf)
    nearest_gap = np.minimum(np.concatenate([wide, gaps], axis=1), np.concatenate([gaps, wide], axis=1))
    steepest = 2 * np.minimum(0.4 * nearest_gap, 0.05) / np.maximum(length, 0.01)
    return np.clip(slope, -steepest, steepest)


def _metal_levels(draw: Draw, atoms: npt.NDArray[np.int64]) -> Floats:
    rng, spread = draw.rng, metal_spread_g0(atoms)
    level = metal_centre_g0(atoms, draw.settings) + spread * draw.partly_remembered(
        draw.record.level_memory, len(atoms)
    )
    irregular = (rng.random(level.shape) < _IRREGULAR_SHARE) & (atoms > 1)
    level = np.where(irregular, metal_centre_g0(atoms, draw.settings) + rng.uniform(-0.45, 0.45, level.shape), level)
    for column in range(len(atoms) - 2, -1, -1):  # stretching never makes the contact thicker
        level[:, column] = np.maximum(level[:, column], level[:, column + 1] + 0.15)
    return level


def _metal_lengths(draw: Draw, atoms: npt.NDArray[np.int64]) -> Floats:
    rng, shape = draw.rng, (draw.traces, len(atoms))
    mean = 0.11 * (2 / np.maximum(atoms, 2)) ** 0.25
    length = np.maximum(rng.gamma(3.0, 1.0, shape) * mean / 3.0, 0.01)
    chain = 1 + rng.choice(len(_CHAIN_WEIGHTS), draw.traces, p=_CHAIN_WEIGHTS)
    last = draw.settings.atom_nm * chain + _CHAIN_SPREAD_NM * np.sqrt(chain) * rng.standard_normal(draw.traces)
    length[:, -1] = np.maximum(last, 0.03)
    skipped = rng.random(shape) < np.where(atoms == 1, _SKIPPED_LAST_SHARE, _SKIPPED_SHARE)
    return np.where(skipped, 0.0, length)


def _no_bridge(traces: int) -> Bridge:
    zero = np.zeros(traces)
    return Bridge(np.full(traces, -np.inf), zero, zero, np.zeros(traces, np.uint8))


def _caught(draw: Draw) -> npt.NDArray[np.bool_]:
    """Return which traces catch a molecule."""
    share = draw.settings.yield_share
    latent = draw.partly_remembered(draw.record.bridge_memory, 1)[:, 0]
    if share <= 0 or share >= 1:
        return np.full(draw.traces, share >= 1)
    return latent < NormalDist().inv_cdf(share)


def _bridge(draw: Draw, centre: Floats, mean_length_nm: Floats, label: npt.NDArray[np.uint8]) -> Bridge:
    settings, rng = draw.settings, draw.rng
    caught = _caught(draw)
    spread = draw.partly_remembered(draw.record.level_memory, 1)[:, 0]
    log10_g0 = centre + settings.molecule_width_decades * spread + draw.record.shift_decades
    length = mean_length_nm + settings.molecule_length_spread_nm * rng.standard_normal(draw.traces)
    slope = settings.molecule_slope_decades_per_nm + settings.molecule_slope_spread * rng.standard_normal(draw.traces)
    return Bridge(
        np.where(caught, log10_g0, -np.inf), np.where(caught, np.maximum(length, 0.05), 0.0), slope, label * caught
    )


def _gap(draw: Draw, bridge: Bridge) -> tuple[Floats, Floats]:
    """Return the gap after the rupture in nm and the tunnelling slope in decades per nm.

    Where a molecule is caught the gap is wider: it has to fit in.
    """
    settings, rng = draw.settings, draw.rng
    relative = 1 + settings.tunnelling_spread * rng.standard_normal(draw.traces)
    slope = settings.tunnelling_decades_per_nm * np.maximum(relative, 0.3)
    gap = settings.snap_back_nm + settings.snap_back_spread_nm * rng.standard_normal(draw.traces)
    return np.maximum(gap, 0.05) + settings.bridge_gap_nm * (bridge.length_nm > 0), slope


def metal(draw: Draw) -> Junctions:
    """Return a necking contact of a noble metal that jumps, breaks, snaps back and tunnels."""
    staircase = _staircase(draw, draw.record.shift_decades)
    bridge = _no_bridge(draw.traces)
    return Junctions(staircase, bridge, *_gap(draw, bridge))


def molecule(draw: Draw) -> Junctions:
    """Return contacts of which a share is bridged by a molecule after it has broken."""
    staircase = _staircase(draw, np.zeros(draw.traces))
    settings, ones = draw.settings, np.ones(draw.traces)
    bridge = _bridge(
        draw, settings.molecule_log10_g0 * ones, settings.molecule_length_nm * ones, np.zeros(draw.traces, np.uint8)
    )
    return Junctions(staircase, bridge, *_gap(draw, bridge))


def mixture(draw: Draw) -> Junctions:
    """Return contacts bridged by one of two kinds of molecular junction, labelled."""
    staircase = _staircase(draw, np.zeros(draw.traces))
    settings = draw.settings
    second = draw.rng.random(draw.traces) < settings.second_share
    centre = np.where(second, settings.second_log10_g0, settings.molecule_log10_g0)
    length = np.where(second, settings.second_length_nm, settings.molecule_length_nm)
    label = np.where(second, LABELS.index("second"), LABELS.index("first")).astype(np.uint8)
    bridge = _bridge(draw, centre, length, label)
    return Junctions(staircase, bridge, *_gap(draw, bridge))


def blank(draw: Draw) -> Junctions:
    """Return what is recorded without molecules: metallic contacts that break and tunnel."""
    staircase = _staircase(draw, np.zeros(draw.traces))
    bridge = _no_bridge(draw.traces)
    return Junctions(staircase, bridge, *_gap(draw, bridge))


def tunnelling(draw: Draw) -> Junctions:
    """Return a touch without a neck: from 1 to 5 G0 straight into the tunnelling decay, no plateau at all."""
    empty = np.zeros((draw.traces, 1))
    bridge = _no_bridge(draw.traces)
    _, slope = _gap(draw, bridge)
    start = np.exp(draw.rng.uniform(np.log(1.0), np.log(5.0), draw.traces))
    return Junctions(Staircase(empty + 1.0, empty, empty), bridge, -np.log10(start) / slope, slope)


@dataclass(frozen=True)
class Kind:
    """A kind of simulation: how to draw it, whether it has metallic plateaus, and its molecular populations."""

    draw: Callable[[Draw], Junctions]
    title: str
    metallic: bool = True
    bridges: tuple[str, ...] = ()


KINDS: Final[Mapping[str, Kind]] = {
    "metal": Kind(metal, "a necking contact of a noble metal"),
    "molecule": Kind(molecule, "contacts of which a share is bridged by a molecule", bridges=("molecule",)),
    "mixture": Kind(mixture, "two kinds of molecular plateau, labelled", bridges=("first", "second")),
    "blank": Kind(blank, "metallic contacts that break and tunnel, no molecule"),
    "tunnelling": Kind(tunnelling, "a touch without a neck, tunnelling only", metallic=False),
}


def kind_of(name: str) -> Kind:
    """Return the kind of this name.

    Raises
    ------
    CallError
        Where there is none.
    """
    try:
        return KINDS[name]
    except KeyError:
        raise CallError(f"there is no kind of simulation '{name}'", "simulate", nearest(name, KINDS)) from None


def populations(kind: Kind, settings: SimulationSettings) -> list[dict[str, Any]]:
    """Return the true population peaks of a kind.

    ``position_g0`` is the centre; the peak of a histogram with a linear or logarithmic axis stands at
    ``position_linear_axis_g0`` or ``position_logarithmic_axis_g0``, as the axes differ by the Jacobian: for a normal
    population (mu + sqrt(mu² + 4 sigma²))/2 on the logarithmic axis, for a log-normal one 10^(m - s² ln 10) on the
    linear axis (definitions of the two distributions).
    """
    peaks: list[dict[str, Any]] = []
    if kind.metallic:
        for atoms in range(1, min(settings.staircase, 4) + 1):
            centre, spread = float(metal_centre_g0(atoms, settings)), float(metal_spread_g0(atoms))
            peaks.append(
                {
                    "name": "1 atom" if atoms == 1 else f"{atoms} atoms",
                    "shape": "normal",
                    "position_g0": centre,
                    "sigma_g0": spread,
                    "position_linear_axis_g0": centre,
                    "position_logarithmic_axis_g0": (centre + (centre**2 + 4 * spread**2) ** 0.5) / 2,
                }
            )
    centres = {"second": settings.second_log10_g0}
    for name in kind.bridges:
        log10, width = centres.get(name, settings.molecule_log10_g0), settings.molecule_width_decades
        peaks.append(
            {
                "name": name,
                "shape": "log-normal",
                "position_g0": 10**log10,
                "sigma_decades": width,
                "position_linear_axis_g0": 10 ** (log10 - width**2 * math.log(10)),
                "position_logarithmic_axis_g0": 10**log10,
            }
        )
    return peaks
