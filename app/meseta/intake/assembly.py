"""From recordings to a TraceSet: roles, calibration, cutting and drive of each, then all end to end."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.calibrate import Calibration, calibration_of, plain_constants
from meseta.intake.cutting import PULL, PUSH, Cut, cut
from meseta.intake.drive import DriveAxis, drive_of, sample_interval
from meseta.intake.recording import RawChannel, Recording
from meseta.intake.roles import settle_roles, unmatched
from meseta.intake.two_gain import overlap_doubts
from meseta.intake.units import unit_factor
from meseta.recipe import Recipe
from meseta.traces import ArraySamples
from meseta.work import Work, blocks_of

__all__ = ["Part", "plan_of", "prepared"]

LINEAR_TOLERANCE: Final = 1.2e-7
"""Steps are equal where no value is off by more than the rounding of float32."""
CARRIED: Final = ("other", "voltage", "bias", "range_code", "phase")
ENDS: Final = 16
RISE_FACTOR: Final = 10.0


@dataclass
class Part:
    """The traces of one recording: ranges, calibration, drive axis, and, once loaded, their samples."""

    recording: Recording
    calibration: Calibration
    axis: DriveAxis
    cut: Cut
    interval_second: float
    interval_from: str
    extras: tuple[RawChannel, ...]
    offsets: npt.NDArray[np.int64]
    start: npt.NDArray[np.int64]
    stop: npt.NDArray[np.int64]
    conductance: npt.NDArray[np.float32] = field(default_factory=lambda: np.empty(0, np.float32))
    quality: npt.NDArray[np.uint8] | None = None
    drive_start: npt.NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    drive_step: npt.NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    relative: npt.NDArray[np.float32] | None = None
    carried: dict[str, npt.NDArray[np.float32]] = field(default_factory=dict)
    first_bias_volt: npt.NDArray[np.float64] | None = None

    @property
    def traces(self) -> int:
        """Number of traces."""
        return len(self.start)

    def spans(self, first: int, last: int) -> Iterator[tuple[int, int]]:
        """Yield flat raw ranges that hold traces ``first`` to ``last``, joined where they touch."""
        begin = int(self.start[first])
        for row in range(first, last):
            if row + 1 == last or self.start[row + 1] != self.stop[row]:
                yield begin, int(self.stop[row])
                begin = int(self.start[row + 1]) if row + 1 < last else 0

    def gathered(self, read: Callable[[int, int], npt.NDArray[Any]], first: int, last: int) -> npt.NDArray[Any]:
        """Return what ``read`` gives for traces ``first`` to ``last``, end to end."""
        parts = [read(start, stop) for start, stop in self.spans(first, last)]
        return parts[0] if len(parts) == 1 else np.concatenate(parts)

    def load(self, work: Work) -> Part:
        """Read and calibrate all samples into memory; returns itself."""
        total = int(self.offsets[-1])
        self.conductance = np.empty(total, np.float32)
        self.carried = {channel.name: np.empty(total, np.float32) for channel in self.extras}
        self.quality = (
            np.zeros(total, np.uint8)
            if "full_scale_volt" in self.calibration.constants or (self.calibration.second is not None)
            else None
        )
        self.drive_start, self.drive_step = np.zeros(self.traces), np.full(self.traces, self.axis.factor)
        shared = self.axis.channel is not None and self.axis.channel.shared and self._is_uncut()
        if shared:
            self._share_drive()
        elif self.axis.channel is not None:
            self.relative = np.empty(total, np.float32)
        spans = blocks_of(self.offsets, min(work.block_samples, 2_000_000))
        sizes = [last - first for first, last in spans]
        linear = True
        for straight in work.each(
            partial(self._load_block, with_drive=not shared), spans, "reading traces", sizes=sizes
        ):
            linear = linear and straight
        if linear and not shared:
            self.relative = None
        bias = self.calibration.bias_channel
        if bias is not None:
            firsts = [self.recording.values(bias, at, at + 1) for at in self.start.tolist()]
            self.first_bias_volt = np.concatenate(firsts) * unit_factor(bias.unit or "V", "V")
        if self.quality is not None and not self.quality.any():
            self.quality = None
        return self

    def _is_uncut(self) -> bool:
        """Return whether every piece is one trace."""
        return np.array_equal(self.start, self.recording.offsets[:-1]) and np.array_equal(
            self.stop, self.recording.offsets[1:]
        )

    def _share_drive(self) -> None:
        """Take one axis for all traces, each as long as it is."""
        longest = int(np.max(np.diff(self.offsets)))
        piece = int(np.argmax(np.diff(self.offsets)))
        begin = int(self.recording.offsets[piece])
        values = self.axis.values(self.recording, begin, begin + longest)
        step = (values[-1] - values[0]) / max(longest - 1, 1)
        relative = values - values[0]
        self.drive_start[:], self.drive_step[:] = values[0], step
        bound = LINEAR_TOLERANCE * float(np.max(np.abs(values)))
        if not np.all(np.abs(relative - step * np.arange(longest)) <= bound):
            self.relative = np.concatenate([relative[:n] for n in np.diff(self.offsets)]).astype(np.float32)

    def _load_block(self, span: tuple[int, int], with_drive: bool) -> bool:
        """Fill the arrays for traces ``first`` to ``last``; return whether their drive steps are equal."""
        first, last = span
        lo, hi = int(self.offsets[first]), int(self.offsets[last])
        at, bits = lo, self.quality
        for start, stop in self.spans(first, last):
            end = at + stop - start
            if self.calibration.apply_into(self.recording, start, self.conductance[at:end]):
                at = end
                continue
            found = self.calibration.apply(self.recording, start, stop)
            self.conductance[at:end] = found.conductance
            if found.quality is not None and bits is not None:
                bits[at:end] = found.quality
            at = end
        for channel in self.extras:
            read = partial(self.recording.values, channel)
            self.carried[channel.name][lo:hi] = self.gathered(read, first, last)
        return self._load_drive(first, last) if with_drive and self.axis.channel is not None else True

    def _load_drive(self, first: int, last: int) -> bool:
        from meseta.intake.kernels import drive_steps

        assert self.relative is not None
        values = self.gathered(lambda a, b: self.axis.values(self.recording, a, b), first, last)
        offsets = self.offsets[first : last + 1] - self.offsets[first]
        own = slice(int(self.offsets[first]), int(self.offsets[last]))
        start, step, relative = self.drive_start[first:last], self.drive_step[first:last], self.relative[own]
        return bool(drive_steps(np.ascontiguousarray(values), offsets, LINEAR_TOLERANCE, start, step, relative))

    def settle_directions(self) -> None:
        """Give every trace without a stated direction one: closing where its conductance rises from end to end."""
        unknown = [row for row, direction in enumerate(self.cut.direction) if not direction]
        if unknown:
            rising = _rises(self.conductance, self.offsets, np.array(unknown, np.int64))
            for row, closing in zip(unknown, rising.tolist(), strict=True):
                self.cut.direction[row] = "closing" if closing else "opening"
        has_phase = {phase[0] for phase in self.cut.phases}
        if len(has_phase) == self.traces:
            return
        lengths = np.diff(self.offsets).tolist()
        self.cut.phases += [
            (row, 0, length, PUSH if direction == "closing" else PULL)
            for row, (length, direction) in enumerate(zip(lengths, self.cut.direction, strict=True))
            if row not in has_phase
        ]
        self.cut.phases.sort()

    def let_go(self) -> Part:
        """Drop the recorded samples, which are not needed once all is loaded; returns itself."""
        nothing = ArraySamples(np.empty(0))
        channels = tuple(replace(channel, samples=nothing) for channel in self.recording.channels)
        self.recording = self.recording.with_channels(channels)
        calibration, axis = self.calibration, self.axis
        first, second, bias = calibration.channel, calibration.second, calibration.bias_channel
        self.calibration = replace(
            calibration,
            channel=replace(first, samples=nothing),
            second=None if second is None else replace(second, samples=nothing),
            bias_channel=None if bias is None else replace(bias, samples=nothing),
        )
        self.axis = axis if axis.channel is None else replace(axis, channel=replace(axis.channel, samples=nothing))
        self.extras = tuple(replace(channel, samples=nothing) for channel in self.extras)
        return self

    def notes(self) -> dict[str, Any]:
        """Return what there is to say of this recording, in plain values."""
        said = [*self.recording.doubts, *self.calibration.doubts, *self.axis.doubts, *self.cut.notes]
        said += [f"'{c.name}': {doubt}" for c in self.recording.channels for doubt in c.doubts]
        return {
            "calibration": plain_constants(self.calibration),
            "conductance_from": self.calibration.kind,
            "drive": self.axis.said,
            "doubts": list(dict.fromkeys(said)),
        }


def _rises(
    values: npt.NDArray[np.float32], offsets: npt.NDArray[np.int64], rows: npt.NDArray[np.int64]
) -> npt.NDArray[np.bool_]:
    """Return for each row whether its conductance ends much higher than it begins."""
    from meseta.intake.kernels import rising_rows

    rising = np.empty(len(rows), np.bool_)
    rising_rows(values, offsets, rows, ENDS, RISE_FACTOR, rising)
    return rising


def prepared(recording: Recording, recipe: Recipe) -> Recording:
    """Return the recording with what the recipe says of its channels.

    Raises
    ------
    InputError
        Where the recipe names a channel that the recording does not have: the layout is another one.
    """
    channels = settle_roles(recording.channels, recipe.intake.channels)
    strangers = unmatched(recording.channels, recipe.intake.channels)
    if strangers:
        there = ", ".join(f"'{channel.name}'" for channel in recording.channels[:8])
        raise InputError(
            f"does not fit the channels of the recipe: it has no '{strangers[0]}', but {there}",
            recording.source.name,
            "correct intake.channels, or read files of another layout apart",
        )
    return recording.with_channels(channels)


def plan_of(recording: Recording, recipe: Recipe) -> Part:
    """Return the traces of one recording, not yet loaded.

    Raises
    ------
    InputError
        Where its channels do not give conductance.
    """
    recording = prepared(recording, recipe)
    calibration = calibration_of(recording, recipe.calibration)
    calibration = replace(calibration, doubts=(*calibration.doubts, *overlap_doubts(recording, calibration)))
    pieces = cut(recording, recipe.cutting, calibration)
    axis = drive_of(recording, recipe.calibration, pieces.pull_sign)
    interval, origin = sample_interval(recording, recipe.calibration)
    start, stop = np.array(pieces.start, np.int64), np.array(pieces.stop, np.int64)
    offsets = np.concatenate([[0], np.cumsum(stop - start)]).astype(np.int64)
    used = {calibration.channel.name, *(c.name for c in (axis.channel, calibration.second) if c is not None)}
    extras = tuple(c for c in recording.channels if c.role in CARRIED and not c.shared and c.name not in used)
    return Part(recording, calibration, axis, pieces, interval, origin, _distinct(extras), offsets, start, stop)


def _distinct(extras: Sequence[RawChannel]) -> tuple[RawChannel, ...]:
    """Return the carried channels with names that no channel of our own has."""
    return tuple(
        replace(channel, name=f"recorded {channel.name}") if channel.name in ("conductance", "quality") else channel
        for channel in extras
    )
