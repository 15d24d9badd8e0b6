"""What the file check shows, made off the window's thread: descriptions, raw channels, calibrated traces."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta import intake
from meseta.errors import InputError, MesetaError
from meseta.intake import Description
from meseta.recipe import Recipe
from meseta.traces import TraceSet
from meseta.window.envelope import Curve, reduced
from meseta.work import Work

__all__ = ["CheckPicture", "RawCurve", "check_picture"]

PREVIEW_SAMPLES = 40_000
PREVIEW_POINTS = 2_000
PREVIEW_TRACES = 12
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
    """

    paths: tuple[str, ...]
    files: int
    described: tuple[Description, ...]
    bad: tuple[str, ...]
    raw: tuple[RawCurve, ...]
    calibrated: Curve | None
    drive_unit: str
    fault: str = ""

    @property
    def readable(self) -> bool:
        """Whether the files can be read as they are understood now."""
        return any(one.traces for one in self.described)

    def sentences(self) -> list[str]:
        """Return one sentence for each doubt, for everything odd, and for every file that cannot be read."""
        said: list[str] = [self.fault] if self.fault else []
        for one in self.described:
            said += [one.problem] if one.problem else []
            said += list(one.doubts)
            said += [f"{finding.check}: {finding.text}" for finding in one.findings if not finding.fine]
        said += list(self.bad)
        return list(dict.fromkeys(said))


def check_picture(paths: Sequence[str], recipe: Recipe, work: Work) -> CheckPicture:
    """Look at files as they would be read with a recipe.

    Raises
    ------
    InputError
        Where there are no files.
    """
    files, _ = intake.find_files(list(paths))
    if not files:
        raise InputError(
            "no files were found", str(paths[0]) if paths else "", "choose files or a folder that holds some"
        )
    described: list[Description] = []
    bad: list[str] = []
    fault = ""
    for file in files[:DESCRIBED_FILES]:
        work.check()
        try:
            good, errors = intake.describe([str(file.path)], recipe, work.quiet())
            described += good
            bad += [str(error) for error in errors]
        except InputError as error:
            bad.append(str(error))
    raw = _raw_curves(str(files[0].path), files[0].name, recipe)
    calibrated, unit = None, ""
    if any(one.traces for one in described):
        try:
            traces = intake.read([str(files[0].path)], recipe, work.quiet())
            calibrated, unit = _calibrated(traces), traces.drive.unit
        except MesetaError as error:
            fault = str(error)
    return CheckPicture(tuple(paths), len(files), tuple(described), tuple(bad), raw, calibrated, unit, fault)


def _raw_curves(path: str, name: str, recipe: Recipe) -> tuple[RawCurve, ...]:
    curves = []
    try:
        with intake.open_recording(path, recipe, name) as recording:
            stop = min(recording.samples, PREVIEW_SAMPLES)
            places = np.arange(stop, dtype=np.float64)
            for channel in recording.channels:
                if channel.role not in QUIET_ROLES:
                    values = np.asarray(recording.values(channel, 0, stop), np.float64)
                    curves.append(
                        RawCurve(channel.name, channel.role, channel.unit, reduced(places, values, PREVIEW_POINTS))
                    )
    except InputError:
        return ()  # the description says what is wrong; there is nothing to draw
    return tuple(curves)


def _calibrated(traces: TraceSet) -> Curve:
    from meseta.window.envelope import gapped

    curves = []
    for trace in range(min(traces.traces, PREVIEW_TRACES)):
        drive: npt.NDArray[np.float64] = traces.trace_drive(trace)
        curves.append(
            reduced(drive - (drive[0] if len(drive) else 0.0), traces.trace_conductance(trace), PREVIEW_POINTS)
        )
    return gapped(curves)
