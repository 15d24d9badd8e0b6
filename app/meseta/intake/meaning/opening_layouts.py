"""Opening a file for kept layouts, which say how headerless numbers stand and whether rows or columns are traces."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from contextlib import suppress

from meseta.errors import InputError
from meseta.intake.meaning.kept_layouts import arrangement_of, nearest_fit
from meseta.intake.recording import Recording
from meseta.recipe.intake import ChannelRole, IntakeSettings
from meseta.recipe.kept_layouts import KeptLayout

__all__ = ["opened_for_layouts"]

Open = Callable[[IntakeSettings], Recording]


def opened_for_layouts(
    layouts: Mapping[str, KeptLayout], settings: IntakeSettings, open_with: Open, recognised: Callable[[], bool]
) -> Recording:
    """Return a file's recording as the layout that it fits has it; where none fits, as the nearest one has it.

    Parameters
    ----------
    layouts : mapping of str to KeptLayout
        Those in use.
    settings : IntakeSettings
        Of the recipe.
    open_with : callable
        Opens the file with settings.
    recognised : callable
        Tells whether the file says itself of what format it is: then it is not headerless.

    Raises
    ------
    InputError
        Where the file can be opened in none of the ways that the layouts say.
    """
    ways = _ways(layouts, settings, recognised)
    best: Recording | None = None
    distance, fault = 0, None
    for way, arrangement in ways:
        try:
            recording = _turned(open_with, way, arrangement)
        except InputError as error:
            fault = fault or error
            continue
        found = len(nearest_fit(recording, layouts, settings.channels)[0].differences)
        if best is not None and found >= distance:
            recording.close()
            continue
        if best is not None:
            best.close()
        best, distance = recording, found
        if not found:
            break
    if best is None:
        raise fault or InputError("cannot be opened as a kept layout says", "", "see `meseta peek`")
    return best


def _ways(
    layouts: Mapping[str, KeptLayout], settings: IntakeSettings, recognised: Callable[[], bool]
) -> list[tuple[IntakeSettings, str]]:
    """Return the different settings that the layouts have a file opened with, and the arrangement that each expects."""
    ways: list[tuple[IntakeSettings, str]] = []
    for layout in layouts.values():
        way = _settings_for(layout, settings, recognised)
        arrangement = layout.arrangement if layout.layout == "auto" and _orientation(layout.arrangement) else ""
        if (way, arrangement) not in ways:
            ways.append((way, arrangement))
    return ways


def _settings_for(layout: KeptLayout, settings: IntakeSettings, recognised: Callable[[], bool]) -> IntakeSettings:
    changes: dict[str, object] = {}
    if layout.layout != "auto":
        changes["layout"] = layout.layout
    numbered = {name: ChannelRole(role="other") for name in layout.channels if name[-1:].isdigit()}
    if numbered:  # inputs and columns that are told apart by numbers are channels, not traces
        changes["channels"] = numbered | settings.channels
    if layout.binary_type is not None and not recognised():
        changes["reader"] = layout.reader or "binary"
        changes |= {
            name: getattr(layout, name)
            for name in ("binary_type", "binary_order", "binary_header_byte", "binary_channels")
        }
    return settings.model_copy(update=changes) if changes else settings


def _orientation(arrangement: str) -> str:
    """Return "rows" or "columns" where an arrangement says that these are traces; empty where it does not."""
    found = re.search(r"traces in (rows|columns)$", arrangement)
    return found[1] if found else ""


def _turned(open_with: Open, way: IntakeSettings, arrangement: str) -> Recording:
    """Return the recording with rows or columns as traces, as the layout has it, where the numbers do not tell.

    Where they tell that it is the other way, the recording comes that way: it does not fit.
    """
    recording = open_with(way)
    told = _orientation(arrangement)
    if not told or not recording.doubts or way.layout != "auto":
        return recording
    with suppress(InputError):
        other = open_with(way.model_copy(update={"layout": told}))
        same = arrangement_of(recording.source.layout) == arrangement_of(other.source.layout)
        if same or set(recording.doubts) - set(other.doubts):
            recording.close()
            return other
        other.close()
    return recording
