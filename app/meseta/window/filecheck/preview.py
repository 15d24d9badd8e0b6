"""What the file check shows, made off the window's thread: descriptions, raw channels, calibrated traces."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from meseta import intake, typeset
from meseta.errors import InputError, MesetaError
from meseta.intake import Description
from meseta.intake.meaning.context import batch_context, recordings_among
from meseta.intake.meaning.kept_layouts import LayoutError, as_seen
from meseta.intake.meaning.layout_differences import differences
from meseta.recipe import Recipe
from meseta.recipe.kept_layouts import KeptLayout
from meseta.traces import TraceSet
from meseta.window.envelope import Curve, reduced
from meseta.work import Work

__all__ = ["CheckPicture", "Misfit", "RawCurve", "check_picture"]

PREVIEW_SAMPLES = 40_000
PREVIEW_POINTS = 2_000
PREVIEW_TRACES = 12
CUT_SAMPLES = 4_000_000
"""The calibrated preview is cut from no more than the beginning of a recording."""
DESCRIBED_FILES = 3
QUIET_ROLES = ("ignore", "other", "trace_number")


@dataclass(frozen=True)
class RawCurve:
    """The beginning of one recorded channel, as recorded."""

    name: str
    role: str
    unit: str
    curve: Curve


@dataclass(frozen=True)
class Misfit:
    """How the files differ from the kept layout that comes nearest; ``seen`` is the first as it was recognised."""

    file: str
    layout: str
    said: str
    differences: tuple[str, ...]
    seen: KeptLayout


@dataclass(frozen=True)
class CheckPicture:
    """What is known of the files before they are read.

    Attributes
    ----------
    paths : tuple of str
    files : int
        Files that would be read.
    described : tuple of Description
        Of the first few files.
    bad : tuple of str
        Files that cannot be read, in words.
    raw : tuple of RawCurve
        The beginning of each channel of the first file.
    calibrated : Curve
        The first traces of the first file, G in G0 against the drive from each trace's start.
    drive_unit : str
    fitting : tuple of str
        Names of the remembered layouts that the first file fits, where it is read by none.
    misfit : Misfit, optional
        Where none of them fits a kept layout.
    stretch_samples : int
        Samples at the beginning of the first file that the calibrated traces were cut from; 0 where from all of it.
    """

    paths: tuple[str, ...]
    files: int
    described: tuple[Description, ...]
    bad: tuple[str, ...]
    raw: tuple[RawCurve, ...]
    calibrated: Curve | None
    drive_unit: str
    fault: str = ""
    fitting: tuple[str, ...] = ()
    misfit: Misfit | None = None
    stretch_samples: int = 0

    @property
    def readable(self) -> bool:
        """Whether the files can be read as they are understood now."""
        return any(one.traces for one in self.described)

    def sentences(self) -> list[str]:
        """Return one sentence for each doubt, for everything odd, and for every file that cannot be read."""
        said: list[str] = [self.fault] if self.fault else []
        if self.stretch_samples:
            samples = typeset.integer(self.stretch_samples)
            said.append(f"the traces drawn are the first of the first {samples} samples; counts are of the whole file")
        for one in self.described:
            said += [one.problem] if one.problem else []
            said += list(one.doubts)
            said += [f"{finding.check}: {finding.text}" for finding in one.findings if not finding.fine]
        said += [] if self.misfit is not None else list(self.bad)
        return list(dict.fromkeys(said))


def check_picture(
    paths: Sequence[str], recipe: Recipe, work: Work, remembered: Mapping[str, KeptLayout] | None = None
) -> CheckPicture:
    """Look at files as they would be read with a recipe.

    Parameters
    ----------
    paths : sequence of str
    recipe : Recipe
    work : Work
    remembered : mapping of str to KeptLayout, optional
        Layouts that may be proposed.

    Raises
    ------
    InputError
        Where there are no files.
    """
    files = recordings_among(intake.find_files(list(paths))[0], recipe.intake)
    if not files:
        raise InputError(
            "no files were found", str(paths[0]) if paths else "", "choose files or a folder that holds some"
        )
    described: list[Description] = []
    bad: list[InputError] = []
    fault = ""
    for file in files[:DESCRIBED_FILES]:
        work.check()
        try:
            good, errors = intake.describe([str(file.path)], recipe, work.quiet())
            described += good
            bad += errors
        except InputError as error:
            bad.append(error)
    proposed = {} if described and described[0].kept_layout else remembered or {}
    raw, fitting = _raw_curves(str(files[0].path), files[0].name, recipe, proposed)
    calibrated, unit, stretch = None, "", 0
    if any(one.traces for one in described):
        try:
            calibrated, unit, stretch = _calibrated(str(files[0].path), recipe, work.quiet())
        except MesetaError as error:
            fault = str(error)
    misfit = None if described else _misfit(bad)
    words = tuple(str(error) for error in bad)
    return CheckPicture(
        tuple(paths), len(files), tuple(described), words, raw, calibrated, unit, fault, fitting, misfit, stretch
    )


def _misfit(bad: Sequence[InputError]) -> Misfit | None:
    for error in bad:
        if isinstance(error, LayoutError):
            return Misfit(error.where, error.layout, str(error.what), error.differences, error.seen)
    return None


def _raw_curves(
    path: str, name: str, recipe: Recipe, remembered: Mapping[str, KeptLayout]
) -> tuple[tuple[RawCurve, ...], tuple[str, ...]]:
    """Return the beginning of each channel, and the names of the layouts that the recording fits."""
    curves, fitting = [], []
    try:
        with intake.open_recording(path, recipe, name, checksum=False) as recording:
            seen = as_seen(recording)
            fitting = [
                one
                for one, layout in reversed(list(remembered.items()))
                if not differences(layout, seen, recording.pieces)
            ]
            stop = min(recording.samples, PREVIEW_SAMPLES)
            places = np.arange(stop, dtype=np.float64)
            for channel in recording.channels:
                if channel.role not in QUIET_ROLES:
                    values = np.asarray(recording.values(channel, 0, stop), np.float64)
                    curves.append(
                        RawCurve(channel.name, channel.role, channel.unit, reduced(places, values, PREVIEW_POINTS))
                    )
    except InputError:
        return (), ()  # the description says what is wrong; there is nothing to draw
    return tuple(curves), tuple(fitting)


def _calibrated(path: str, recipe: Recipe, work: Work) -> tuple[Curve, str, int]:
    """Return the first traces, the unit of their drive, and within how many samples they were found (0: in all)."""
    context = batch_context(recipe.intake, [Path(path)])
    with intake.open_recording(path, recipe, context=context, checksum=False) as recording:
        begun = recording.beginning(CUT_SAMPLES)
        traces = intake.traces_from([begun], recipe, work, stream=True)
        return _drawn(traces), traces.drive.unit, begun.samples if begun is not recording else 0


def _drawn(traces: TraceSet) -> Curve:
    from meseta.window.envelope import gapped

    curves = []
    for trace in range(min(traces.traces, PREVIEW_TRACES)):
        drive: npt.NDArray[np.float64] = traces.trace_drive(trace)
        curves.append(
            reduced(drive - (drive[0] if len(drive) else 0.0), traces.trace_conductance(trace), PREVIEW_POINTS)
        )
    return gapped(curves)
