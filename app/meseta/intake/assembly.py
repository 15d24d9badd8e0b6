"""From a recording to its traces: roles, calibration, cutting and drive; samples come when the part is read."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.alike import Memory
from meseta.intake.calibration.constants import calibration_of
from meseta.intake.calibration.drive import drive_of, sample_interval
from meseta.intake.cutting.cut import cut
from meseta.intake.meaning.kept_layouts import fit_of
from meseta.intake.meaning.roles import settle_roles, unmatched
from meseta.intake.part import Part
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe import Recipe

__all__ = ["Part", "plan_of", "prepared"]

CARRIED: Final = ("other", "voltage", "bias", "range_code", "trigger", "phase")
"""Roles of channels that are carried along with the conductance."""


def prepared(recording: Recording, recipe: Recipe) -> Recording:
    """Return the recording with what the recipe says of its channels: by the kept layout it fits, then one by one.

    Raises
    ------
    InputError
        Where it fits no kept layout, or the recipe names a channel that the recording does not have.
    """
    fit = fit_of(recording, recipe.intake)
    channels = settle_roles(recording.channels if fit is None else fit.channels, recipe.intake.channels)
    strangers = unmatched(recording.channels, recipe.intake.channels)
    if strangers:
        there = ", ".join(f"'{channel.name}'" for channel in recording.channels[:8])
        raise InputError(
            f"does not fit the channels of the recipe: it has no '{strangers[0]}', but {there}",
            recording.source.name,
            "correct intake.channels, or read files of another layout apart",
        )
    return recording.with_channels(channels)


@np.errstate(all="ignore")  # the numbers of a damaged recording may be anything
def plan_of(recording: Recording, recipe: Recipe, memory: Memory | None = None) -> Part:
    """Return the traces of one recording, not yet loaded.

    Parameters
    ----------
    recording : Recording
    recipe : Recipe
    memory : Memory, optional
        Of the batch that the recording belongs to; always used with the same recipe.

    Raises
    ------
    InputError
        Where its channels do not give conductance.
    """
    memory, settings = memory or Memory(), recipe.calibration
    channels = memory.ask("channels", recording, lambda one: prepared(one, recipe).channels)
    recording = recording.with_channels(channels)
    calibration = memory.ask("calibration", recording, lambda one: calibration_of(one, settings))
    pieces = cut(recording, recipe.cutting, calibration)
    sign = pieces.pull_sign
    axis = memory.ask(("drive", sign), recording, lambda one: drive_of(one, settings, sign))
    interval, origin = memory.ask("interval", recording, lambda one: sample_interval(one, settings))
    start, stop = np.array(pieces.start, np.int64), np.array(pieces.stop, np.int64)
    offsets = np.concatenate([[0], np.cumsum(stop - start)]).astype(np.int64)
    used = {channel.name for channel in (calibration.channel, axis.channel, calibration.second) if channel is not None}
    extras = tuple(c for c in recording.channels if c.role in CARRIED and not c.shared and c.name not in used)
    return Part(recording, calibration, axis, pieces, interval, origin, _distinct(extras), offsets, start, stop)


def _distinct(extras: Sequence[RawChannel]) -> tuple[RawChannel, ...]:
    """Return the carried channels with names that no channel of our own has."""
    return tuple(
        replace(channel, name=f"recorded {channel.name}") if channel.name in ("conductance", "quality") else channel
        for channel in extras
    )
