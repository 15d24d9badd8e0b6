"""Published conductances with their sources: context beside a fit, never a constraint on it."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass

import numpy as np

from meseta.resources import resource

__all__ = ["PublishedValue", "published"]


@dataclass(frozen=True)
class PublishedValue:
    """One published conductance.

    Attributes
    ----------
    system : str
        Metal or molecule, with its surroundings.
    what : str
        Which contact or peak, under which conditions.
    low_g0, high_g0 : float
        Range in G0; equal where one value was published.
    sigma_g0 : float
        Published error; NaN where none was stated.
    note : str
    source : str
    """

    system: str
    what: str
    low_g0: float
    high_g0: float
    sigma_g0: float
    note: str
    source: str

    @property
    def middle_g0(self) -> float:
        """Middle of the range, in G0."""
        return (self.low_g0 + self.high_g0) / 2

    def decades_away(self, conductance_g0: float) -> float:
        """Return how far a conductance is from the range, in decades; 0 inside."""
        nearest = min(max(conductance_g0, self.low_g0), self.high_g0)
        return float(abs(np.log10(conductance_g0 / nearest)))


def published(
    near_g0: float | None = None, within_decades: float = 0.1, system: str = ""
) -> tuple[PublishedValue, ...]:
    """Return published conductances, nearest first where a conductance is given.

    Parameters
    ----------
    near_g0 : float, optional
        Only values within ``within_decades`` of this conductance; a position that is not positive is near nothing.
    within_decades : float
    system : str
        Only systems whose name holds this text.

    Notes
    -----
    Many systems share a conductance: a position near a published value is no identification.
    """
    values = [_value(entry) for entry in _entries() if system.lower() in str(entry["system"]).lower()]
    if near_g0 is None:
        return tuple(values)
    if not near_g0 > 0:
        return ()
    near = [value for value in values if value.decades_away(near_g0) <= within_decades]
    return tuple(sorted(near, key=lambda value: value.decades_away(near_g0)))


def _entries() -> list[dict[str, str | float]]:
    text = resource("published_values.toml").read_text(encoding="utf-8")
    entries: list[dict[str, str | float]] = tomllib.loads(text)["value"]
    return entries


def _value(entry: dict[str, str | float]) -> PublishedValue:
    low, high = (float(entry.get(name, entry.get("value_g0", np.nan))) for name in ("low_g0", "high_g0"))
    return PublishedValue(
        system=str(entry["system"]),
        what=str(entry["what"]),
        low_g0=low,
        high_g0=high,
        sigma_g0=float(entry.get("sigma_g0", np.nan)),
        note=str(entry.get("note", "")),
        source=str(entry["source"]),
    )
