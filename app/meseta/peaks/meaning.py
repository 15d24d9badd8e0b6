"""What a conductance may be called, and how many channels it needs at least."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

__all__ = ["assignment", "channels_at_least"]

_NEAR = 0.25


def assignment(conductance_g0: float, names: Mapping[str, float]) -> str:
    """Return the name of the nearest value, with how far the conductance is from it; empty where none is near.

    The user's own named values come first (within a factor of 1.78, a quarter of a decade); from 0.75 G0 on the nearest
    multiple of G0.  A name is a label, no proof of a mechanism: positions near multiples of G0 also reflect preferred
    atomic arrangements (Untiedt et al., cond-mat/0309622).
    """
    if not np.isfinite(conductance_g0) or conductance_g0 <= 0:
        return ""
    near = {
        name: abs(np.log10(conductance_g0 / value))
        for name, value in names.items()
        if value > 0 and abs(np.log10(conductance_g0 / value)) <= _NEAR
    }
    if near:
        name = min(near, key=lambda key: near[key])
        return f"{name} ({100 * (conductance_g0 / names[name] - 1):+.1f} %)"
    number = round(conductance_g0)
    if number < 1 or abs(conductance_g0 - number) > _NEAR:
        return ""
    return f"{number} G0 ({100 * (conductance_g0 / number - 1):+.1f} %)"


def channels_at_least(conductance_g0: float) -> int:
    """Return the smallest number of channels that can carry a conductance: N >= G/G0, since no channel exceeds G0.

    Nothing more follows from a conductance alone (Landauer; the transmissions of the channels are not known).  A
    reading within 2 % above a whole number is taken as that number.
    """
    if not np.isfinite(conductance_g0) or conductance_g0 <= 0:
        return 0
    return max(int(np.ceil(conductance_g0 / 1.02)), 1)
