"""Calibration check-up: what the numbers of a recording say of its own calibration.

Each check compares something measured with something known: the converter's step, the pile-up at full scale, the floor
against thermal noise, two gains in their overlap, mains pickup, the speed of the amplifier, the place of the
single-atom peak, the tunnelling slope, opening against closing.  Findings name factors of 2, 10 and 100, signs and
dividers as such; they change no number.
"""

from __future__ import annotations

from typing import Final

from meseta.intake.assembly import Part
from meseta.intake.checks import contact as contacts
from meseta.intake.checks import instrument
from meseta.intake.checks.atom import single_atom, upside_down
from meseta.intake.checks.findings import Finding, look_at
from meseta.intake.checks.tunnelling import tunnelling_slope
from meseta.recipe.alignment import AlignmentSettings

__all__ = ["Finding", "check_up"]

LEAST_SAMPLES: Final = 200


def check_up(part: Part, alignment: AlignmentSettings) -> tuple[tuple[Finding, ...], float | None]:
    """Return the findings on a loaded part, and the level of zero that its recording proposes (None where any fits).

    Parameters
    ----------
    part : Part
        With its samples at hand (loaded, or streamed from a recording that is open) and directions settled.
    alignment : AlignmentSettings
    """
    look = look_at(part)
    if sum(len(one) for one in look.values) < LEAST_SAMPLES:
        turned = upside_down(part)
        return ((turned,) if turned is not None else ()), None
    zero, finding = contacts.zero_level(look, alignment.zero_at_g0)
    found = [
        contacts.sign(look),
        contacts.direction(look),
        instrument.full_scale(part),
        instrument.converter_step(look),
        instrument.floor_noise(look),
        instrument.mains(look),
        *instrument.response(look),
        instrument.gain_ratio(part),
        single_atom(look),
        tunnelling_slope(look),
        contacts.both_ways(part),
        finding,
    ]
    return tuple(one for one in found if one is not None), zero
