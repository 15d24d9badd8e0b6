"""Section ``[noise]``: the noise model, learnt from the recording unless stated here."""

from __future__ import annotations

from meseta.recipe.fields import Section, setting

__all__ = ["NoiseSettings"]

_LEARNT = "learnt from the recording"


class NoiseSettings(Section):
    """Floor, noise and rise time."""

    floor_g0: float | None = setting(None, "Floor", "Mean reading with the contact open.", unit="G0", unset=_LEARNT)
    floor_sigma_g0: float | None = setting(
        None,
        "Noise at the floor",
        "Standard deviation of the reading with the contact open.",
        unit="G0",
        unset=_LEARNT,
        gt=0,
    )
    relative_noise: float | None = setting(
        None,
        "Relative noise",
        "Standard deviation of G/G on a plateau well above the floor.",
        unset=_LEARNT,
        gt=0,
    )
    rise_samples: float | None = setting(
        None,
        "Rise time",
        "Samples that the amplifier needs for a step (10 to 90 %).",
        unit="samples",
        unset=_LEARNT,
        gt=0,
    )
    saturation_g0: float | None = setting(
        None, "Saturation", "Highest conductance that the amplifier can show.", unit="G0", unset=_LEARNT, gt=0
    )
