"""The file check: how a file was understood, on what ground, what would be assumed, and what is odd."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from meseta.errors import InputError
from meseta.intake.assembly import Part, plan_of, prepared
from meseta.intake.checks.check_up import Finding, check_up
from meseta.intake.files import find_files
from meseta.intake.meaning.context import batch_context, recordings_among
from meseta.intake.meaning.kept_layouts import fit_of, kept_layout
from meseta.intake.opening import open_recording
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe import Recipe
from meseta.recipe.kept_layouts import KeptLayout
from meseta.work import Work

__all__ = ["ChannelDescription", "Description", "describe", "describe_recording"]

SHOWN_ENTRIES = 24
LOADED_SAMPLES = 4_000_000
"""Larger recordings are looked at where they lie."""


@dataclass(frozen=True)
class ChannelDescription:
    """What one channel was taken for, and why."""

    name: str
    role: str
    unit: str
    scale: float
    offset: float
    dtype: str
    ground: str
    confidence: float
    doubts: tuple[str, ...]

    def line(self) -> str:
        """Return the channel in one line."""
        unit = f" in {self.unit}" if self.unit else ""
        scaled = "" if self.scale == 1.0 and self.offset == 0.0 else f", stored x {self.scale:g} + {self.offset:g}"
        ground = f"  ({self.ground}, {self.confidence:.0%} sure)" if self.ground else "  (not recognised)"
        return f"  {self.name}: {self.role}{unit}{scaled}{ground}"


@dataclass(frozen=True)
class Description:
    """What a file is taken for.

    Attributes
    ----------
    file, reader, layout : str
    traces, openings, samples : int
        What would be read with this recipe; traces is 0 where ``problem`` says what is missing.
    channels : tuple of ChannelDescription
    metadata : mapping
        What the file says of itself, under canonical names where one is known.
    calibration : mapping
        Constant -> value and where it was taken from.
    drive, conductance_from : str
    incomplete : int
        Ranges of the record that are no complete traces.
    doubts : tuple of str
        What would be assumed and why, and what is odd.
    findings : tuple of Finding
        Of the calibration check-up.
    problem : str
        What must be given before the file can be read; empty where nothing is missing.
    pieces : int
        Parts that the recording itself comes in: datasets, rows, columns, blocks.
    kept_layout : str
        Name of the kept layout that it fits; empty where it was recognised.
    form : KeptLayout
        What it would be kept as, with these answers.
    """

    file: str
    reader: str
    layout: str
    size_byte: int
    sha256: str
    channels: tuple[ChannelDescription, ...]
    metadata: dict[str, Any]
    traces: int = 0
    openings: int = 0
    samples: int = 0
    calibration: dict[str, Any] = field(default_factory=dict)
    drive: str = ""
    conductance_from: str = ""
    incomplete: int = 0
    doubts: tuple[str, ...] = ()
    findings: tuple[Finding, ...] = ()
    problem: str = ""
    proposed_zero_g0: float | None = None
    pieces: int = 1
    kept_layout: str = ""
    form: KeptLayout = field(default_factory=KeptLayout, repr=False)

    def as_dict(self) -> dict[str, Any]:
        """Return everything as plain values for JSON."""
        plain: dict[str, Any] = _finite(asdict(self) | {"form": self.form.model_dump(mode="json")})
        return plain

    def said_of_itself(self) -> str:
        """Return the first entries of metadata in words; empty where there are none."""
        return ", ".join([f"{name} = {value}" for name, value in self.metadata.items()][:SHOWN_ENTRIES])

    def lines(self) -> list[str]:
        """Return the description for people."""
        shown = [
            f"{self.file}",
            f"  reader {self.reader}: {self.layout}"
            + (f", kept layout '{self.kept_layout}'" if self.kept_layout else ""),
            f"  {self.size_byte} bytes, {self.samples} samples",
        ]
        shown += [channel.line() for channel in self.channels]
        if self.metadata:
            shown.append(f"  says of itself: {self.said_of_itself()}")
        if self.problem:
            return [*shown, f"  cannot be read yet: {self.problem}", *(f"  ? {doubt}" for doubt in self.doubts)]
        shown.append(f"  conductance from {self.conductance_from}; {self.drive}")
        shown += [f"  {name} = {one['value']} ({one['from']})" for name, one in self.calibration.items()]
        closings = self.traces - self.openings
        ranges = "range" if self.incomplete == 1 else "ranges"
        apart = f", {self.incomplete} {ranges} kept apart as incomplete" if self.incomplete else ""
        shown.append(f"  traces: {self.openings} opening, {closings} closing{apart}")
        if self.proposed_zero_g0 is not None:
            shown.append(f"  zero of displacement: {self.proposed_zero_g0:g} G0 fits this recording")
        shown += [f"  ? {doubt}" for doubt in self.doubts]
        return [*shown, *(f"  {finding.line()}" for finding in self.findings)]


def _finite(value: Any) -> Any:
    """Return nested plain values with NaN and infinities as None, as JSON knows neither."""
    if isinstance(value, dict):
        return {str(key): _finite(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(one) for one in value]
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not np.isfinite(value) else value


def describe(
    paths: str | Path | Iterable[str | Path], recipe: Recipe | None = None, work: Work | None = None
) -> tuple[list[Description], list[InputError]]:
    """Describe recordings, one file at a time.

    Returns
    -------
    (list of Description, list of InputError)
        What was understood, and the files that could not be.

    Raises
    ------
    InputError
        Where no file can be understood at all.
    """
    recipe, work = recipe or Recipe(), work or Work()
    files = recordings_among(find_files(paths)[0], recipe.intake)
    context = batch_context(recipe.intake, [file.path for file in files])
    described: list[Description] = []
    bad: list[InputError] = []
    for done, file in enumerate(files):
        work.tell("checking files", done, len(files), "files")
        try:
            with open_recording(file.path, recipe, file.name, context) as recording:
                described.append(describe_recording(recording, recipe, work))
        except InputError as error:
            bad.append(error)
    if not described:
        raise bad[0]
    return described, bad


@np.errstate(all="ignore")  # the numbers of a damaged recording may be anything
def describe_recording(recording: Recording, recipe: Recipe, work: Work | None = None) -> Description:
    """Describe one open recording: what it is taken for and what its numbers say of the calibration."""
    settled, fit = prepared(recording, recipe), fit_of(recording, recipe.intake)
    source = recording.source
    channels = tuple(_channel(one) for one in settled.channels)
    base = Description(
        source.name, source.reader, source.layout, source.size_byte, source.sha256, channels, dict(recording.metadata),
        samples=recording.samples, pieces=recording.pieces, kept_layout="" if fit is None else fit.name,
        form=kept_layout(recording, recipe.intake),
    )  # fmt: skip
    try:
        part = plan_of(recording, recipe)
    except InputError as error:
        doubts = [*recording.doubts, *(f"'{c.name}': {doubt}" for c in settled.channels for doubt in c.doubts)]
        return _with(base, problem=f"{error.what} -> {error.remedy}", doubts=tuple(doubts))
    work = work or Work()
    return _read(base, part, recipe, work if part.samples > LOADED_SAMPLES else work.quiet())


def _with(base: Description, **changes: Any) -> Description:
    from dataclasses import replace

    return replace(base, **changes)


def _read(base: Description, part: Part, recipe: Recipe, work: Work) -> Description:
    part = part.stream(work) if part.samples > LOADED_SAMPLES else part.load(work)
    part.settle_directions()
    notes = part.notes()
    findings, proposed = check_up(part, recipe.alignment)
    return _with(
        base,
        traces=part.traces,
        openings=part.cut.direction.count("opening"),
        calibration=notes["calibration"],
        drive=notes["drive"],
        conductance_from=notes["conductance_from"],
        incomplete=len(part.cut.apart),
        doubts=tuple(notes["doubts"]),
        findings=findings,
        proposed_zero_g0=proposed,
    )


def _channel(channel: RawChannel) -> ChannelDescription:
    return ChannelDescription(
        channel.name, channel.role, channel.unit, channel.scale, channel.offset, str(channel.dtype), channel.ground,
        channel.confidence, channel.doubts,
    )  # fmt: skip
