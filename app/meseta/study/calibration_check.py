"""The calibration check-up of a study's recordings, as its report states it."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from meseta.errors import MesetaError
from meseta.intake import Recording, find_files, open_recording
from meseta.intake.checks.together import CheckedTogether, check_together, spread_over
from meseta.intake.meaning.context import batch_context
from meseta.recipe import Recipe
from meseta.study.content import read_sources
from meseta.study.files import is_study, looking
from meseta.study.raw import read_recordings
from meseta.traces import Source
from meseta.work import Work

__all__ = ["CalibrationCheck", "check_calibration"]

MOST_SAMPLES: Final = 8_000_000
"""Of a long recording the beginning is looked at."""
MOST_FOUND: Final = 12
"""So many groups of recordings are looked at; what holds for a dozen nights is told by them."""


@dataclass(frozen=True)
class CalibrationCheck:
    """What the check-up found.

    Attributes
    ----------
    recordings : int
        Of the study.
    missing : int
        Of those that were to be looked at, how many are neither copied nor at hand.
    shortened : int
        Of how many only the first :data:`MOST_SAMPLES` samples were looked at.
    checked : tuple of CheckedTogether
    """

    recordings: int
    missing: int
    shortened: int
    checked: tuple[CheckedTogether, ...]

    def doubts(self) -> list[str]:
        """Return what is not as expected, once each."""
        found = (
            f"calibration check-up, {one.check}: {one.text}"
            for part in self.checked
            for one in part.findings
            if not one.fine
        )
        return list(dict.fromkeys(found))

    def as_dict(self) -> dict[str, Any]:
        """Return it as plain values."""
        return {
            "recordings": self.recordings,
            "missing": self.missing,
            "shortened": self.shortened,
            "samples_at_most": MOST_SAMPLES,
            "checked": [one.as_dict() for one in self.checked],
        }


def check_calibration(
    path: Path, recipe: Recipe, files: Sequence[str | Path] = (), work: Work | None = None
) -> CalibrationCheck:
    """Check the calibration of a study's recordings: those it has copied, and those among ``files``.

    Parameters
    ----------
    path : Path
        The study.
    recipe : Recipe
    files : sequence of str or Path
        What the traces were read from, where they were read just now.
    work : Work, optional
    """
    work = work or Work()
    with looking(path) as root, ExitStack() as stack:
        sources, _ = read_sources(root)
        copied = {one.source.sha256: one for one in read_recordings(root, sources)}
        places = {file.name: file.path for file in _files(files)}
        picked = [sources[row] for row in spread_over(len(sources))]
        context = batch_context(recipe.intake, list(places.values()))
        found: list[Recording] = []
        for source in picked:
            if source.sha256 in copied:
                found.append(copied[source.sha256])
            elif (place := places.get(source.name)) is not None and _is_unchanged(place, source):
                opened = open_recording(place, recipe, source.name, context, checksum=False)
                found.append(stack.enter_context(opened))
        begun = [one.beginning(MOST_SAMPLES) for one in _few(found)]
        shortened = sum(one.samples > MOST_SAMPLES for one in _few(found))
        checked = check_together(begun, recipe, work)
    return CalibrationCheck(len(sources), len(picked) - len(found), shortened, tuple(checked))


def _few(recordings: Sequence[Recording]) -> list[Recording]:
    """Return all small recordings, and of the large ones a dozen spread over the record."""
    large = [row for row, one in enumerate(recordings) if one.samples > MOST_SAMPLES // MOST_FOUND]
    left_out = set(large) - {large[place] for place in spread_over(len(large), MOST_FOUND)}
    return [one for row, one in enumerate(recordings) if row not in left_out]


def _files(files: Sequence[str | Path]) -> list[Any]:
    if not files or any(is_study(file) for file in files):
        return []
    try:
        return list(find_files(list(files))[0])
    except MesetaError:  # taken away since they were read: counted as missing
        return []


def _is_unchanged(place: Path, source: Source) -> bool:
    try:
        return place.stat().st_size == source.size_byte
    except OSError:
        return False
