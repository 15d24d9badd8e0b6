"""From peaks edited one by one to the settings of a recipe: no widget, no file, no state."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from itertools import pairwise
from typing import Literal

import numpy as np

from meseta.errors import CallError
from meseta.peaks.model import WIDTH_TO_FWHM
from meseta.peaks.results import PeakTable
from meseta.recipe.peaks import PeakSettings, PeakStart

__all__ = ["editable_peaks", "edited_peaks"]

Tie = Literal["none", "multiples", "ladder"]
_WHERE = "peaks.peaks"


def editable_peaks(settings: PeakSettings, table: PeakTable) -> list[PeakStart]:
    """Return the peaks to edit: those that the settings ask for, else the fitted ones, sorted by position.

    Parameters
    ----------
    settings : PeakSettings
    table : PeakTable
        Of the fit that is shown; rows without a position are left out.

    Notes
    -----
    What was proposed begins where it was fitted, free, with its own multiple of G0 (where it is near one) in case the
    user ties it.
    """
    if settings.peaks:
        return sorted(settings.peaks, key=lambda peak: peak.position_g0)
    rows = np.flatnonzero(np.isfinite(table.position_g0) & (table.position_g0 > 0))
    return [_start(table, int(row)) for row in rows]


def _start(table: PeakTable, row: int) -> PeakStart:
    position, width = float(table.position_g0[row]), float(table.fwhm[row]) / WIDTH_TO_FWHM
    name, number = str(table.peak[row]), round(position)
    return PeakStart(
        name="" if name.isdecimal() else name,
        position_g0=position,
        width=width if np.isfinite(width) and width > 0 else None,
        multiple=float(number) if number and abs(position - number) < 0.25 * number else None,
    )


def edited_peaks(
    settings: PeakSettings,
    peaks: Sequence[PeakStart],
    *,
    tie: Tie | None = None,
    equal_relative_widths: bool | None = None,
) -> PeakSettings:
    """Return the settings that ask for these peaks.

    Parameters
    ----------
    settings : PeakSettings
        Everything but the peaks and their ties is taken from here.
    peaks : sequence of PeakStart
        In any order; none means that peaks are proposed from the histogram again.
    tie : str, optional
        "none", "multiples" or "ladder": how the positions of the peaks with ``tied`` hang together; as in the settings
        where it is not given.
    equal_relative_widths : bool, optional
        Whether peaks with ``tied_width`` are equally wide relative to their positions; likewise.

    Returns
    -------
    PeakSettings
        For ``recipe.model_copy(update={"peaks": ...})``.

    Raises
    ------
    CallError
        Where ties, multiples or names do not go together: two tied peaks that are one multiple, a tie of one peak, a
        name given twice, two tied peaks with fixed positions.
    """
    tie = settings.tie if tie is None else tie
    widths = settings.equal_relative_widths if equal_relative_widths is None else equal_relative_widths
    ordered = sorted(peaks, key=lambda peak: peak.position_g0)
    _check_names(ordered)
    if ordered and tie != "none":
        _check_tie(ordered)
    if ordered and widths and sum(peak.tied_width for peak in ordered) < 2:
        raise CallError("one peak alone cannot be equally wide", _WHERE, "tie the widths of two peaks or of none")
    return settings.model_copy(update={"peaks": ordered, "tie": tie, "equal_relative_widths": widths})


def _check_names(peaks: Sequence[PeakStart]) -> None:
    twice = [name for name, number in Counter(peak.name for peak in peaks if peak.name).items() if number > 1]
    if twice:
        raise CallError(f"two peaks are called '{twice[0]}'", _WHERE, "give each its own name")


def _check_tie(peaks: Sequence[PeakStart]) -> None:
    tied = [peak for peak in peaks if peak.tied]
    if len(tied) < 2:
        raise CallError("one peak alone cannot be tied", _WHERE, "tie the positions of two peaks or of none")
    numbers = [peak.multiple or rank + 1.0 for rank, peak in enumerate(tied)]
    if any(upper <= lower for lower, upper in pairwise(numbers)):
        text = ", ".join(f"{number:g}" for number in numbers)
        raise CallError(
            f"tied peaks in the order of conductance are the multiples {text}", _WHERE, "let the multiples grow"
        )
    if sum(peak.fixed for peak in tied) > 1:
        raise CallError("two tied positions are fixed", _WHERE, "fix one: the others follow from it")
