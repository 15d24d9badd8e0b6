"""From recordings to a TraceSet: roles, calibration, cutting and drive of each, then all end to end."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property, partial
from itertools import pairwise, repeat
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.alike import Memory
from meseta.intake.calibrate import Calibration
from meseta.intake.constants import calibration_of
from meseta.intake.constants_said import plain_constants
from meseta.intake.cutting import PULL, PUSH, Cut, cut
from meseta.intake.drive import DriveAxis, drive_of, sample_interval
from meseta.intake.kept_layouts import fit_of
from meseta.intake.recording import RawChannel, Recording
from meseta.intake.roles import settle_roles, unmatched
from meseta.intake.room import check_room
from meseta.intake.rows import BLOCK_SAMPLES, RawSpans, SharedAxis, StreamedRow
from meseta.intake.units import unit_factor
from meseta.recipe import Recipe
from meseta.work import Work, blocks_of

__all__ = ["Part", "plan_of", "prepared"]

LINEAR_TOLERANCE: Final = 1.2e-7
"""Steps are equal where no value is off by more than the rounding of float32."""
CARRIED: Final = ("other", "voltage", "bias", "range_code", "trigger", "phase")
ENDS: Final = 16
RISE_FACTOR: Final = 10.0
LARGEST_BLOCK: Final = 2_000_000
"""Samples that are read at once at most; a longer trace comes in several blocks."""


@dataclass
class Part:
    """The traces of one recording: ranges, calibration, drive axis, and their samples once they can be had.

    :meth:`load` brings the samples into memory; :meth:`stream` leaves them in the recording, which must then stay
    open: rows are worked out block by block when they are read.
    """

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
    conductance: Any = field(default_factory=lambda: np.empty(0, np.float32))
    quality: Any = None
    drive_start: npt.NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    drive_step: npt.NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    relative: Any = None
    carried: dict[str, Any] = field(default_factory=dict)
    first_bias_volt: npt.NDArray[np.float64] | None = None

    @property
    def traces(self) -> int:
        """Number of traces."""
        return len(self.start)

    @property
    def samples(self) -> int:
        """Number of samples of all traces."""
        return int(self.offsets[-1])

    @cached_property
    def raw_spans(self) -> RawSpans:
        """Where the samples lie in the recording."""
        return RawSpans.of(self.start, self.stop, self.offsets)

    def gathered(self, read: Callable[[int, int], npt.NDArray[Any]], low: int, high: int) -> npt.NDArray[Any]:
        """Return what ``read`` gives for the recording's samples behind flat samples ``low`` to ``high``."""
        parts = [read(start, stop) for start, stop in self.raw_spans.within(low, high)]
        return parts[0] if len(parts) == 1 else np.concatenate(parts or [read(0, 0)])

    # -- all in memory ----------------------------------------------------------------------------------------------

    @property
    def memory_byte(self) -> int:
        """What the samples take once loaded: conductance, displacement and what else was recorded in float32, flags."""
        return self.samples * (4 * (2 + len(self.extras)) + 1)

    def load(self, work: Work) -> Part:
        """Read and calibrate all samples into memory; returns itself.

        Raises
        ------
        InputError
            Where they would take more memory than the machine has to spare.
        """
        check_room(self.memory_byte, self.recording.source.name)
        total = self.samples
        self.conductance = np.empty(total, np.float32)
        self.carried = {channel.name: np.empty(total, np.float32) for channel in self.extras}
        self.quality = np.zeros(total, np.uint8) if self._may_be_doubtful() else None
        own_drive = self._begin_drive()
        if own_drive:
            self.relative = np.empty(total, np.float32)
        blocks = flat_blocks(self.offsets, min(work.block_samples, LARGEST_BLOCK))
        sizes = [high - low for low, high in blocks]
        straight = True
        for one in work.each(
            partial(self._load_block, own_drive=own_drive), blocks, "reading", sizes=sizes, unit="samples"
        ):
            straight = straight and one
        if own_drive and straight:
            self.relative = None
        if isinstance(self.relative, SharedAxis):
            self.relative = self.relative.read(0, total)
        self._read_first_bias()
        if self.quality is not None and not self.quality.any():
            self.quality = None
        return self

    @np.errstate(all="ignore")
    def _load_block(self, block: tuple[int, int], own_drive: bool) -> bool:
        """Fill the arrays over a range of flat samples; return whether the steps of the drive are equal."""
        low, high = block
        self._calibrate(low, self.conductance[low:high], None if self.quality is None else self.quality[low:high])
        for channel in self.extras:
            self.carried[channel.name][low:high] = self._carried_values(channel, low, high)
        return self._drive_block(low, high, self.relative[low:high]) if own_drive else True

    def _calibrate(self, low: int, target: npt.NDArray[np.float32], bits: npt.NDArray[np.uint8] | None) -> None:
        """Fill arrays with conductance and quality from flat sample ``low`` on."""
        at = 0
        for start, stop in self.raw_spans.within(low, low + len(target)):
            end = at + stop - start
            if not self.calibration.apply_into(self.recording, start, target[at:end]):
                found = self.calibration.apply(self.recording, start, stop)
                target[at:end] = found.conductance
                if found.quality is not None and bits is not None:
                    bits[at:end] = found.quality
            at = end

    def _carried_values(self, channel: RawChannel, low: int, high: int) -> npt.NDArray[np.float32]:
        values = self.gathered(partial(self.recording.values, channel), low, high)
        with np.errstate(over="ignore"):  # what float32 cannot hold becomes infinite, as it is in the recording
            return values.astype(np.float32)

    def _may_be_doubtful(self) -> bool:
        return self.calibration.has_quality

    def _read_first_bias(self) -> None:
        bias = self.calibration.bias_channel
        if bias is not None and self.traces:
            firsts = [self.recording.values(bias, at, at + 1) for at in self.start.tolist()]
            self.first_bias_volt = np.concatenate(firsts) * unit_factor(bias.unit or "V", "V")

    # -- the drive --------------------------------------------------------------------------------------------------

    def _begin_drive(self) -> bool:
        """Make room for starts and steps; return whether they are to be found in a channel, block by block."""
        self.drive_start, self.drive_step = np.zeros(self.traces), np.full(self.traces, self.axis.factor)
        channel = self.axis.channel
        if channel is None:
            return False
        if channel.shared and self._is_uncut():
            self._share_drive()
            return False
        for row in np.flatnonzero(np.diff(self.offsets) > LARGEST_BLOCK).tolist():  # it comes in several blocks
            begin, end = int(self.start[row]), int(self.stop[row])
            first, last = (float(self.axis.values(self.recording, at, at + 1)[0]) for at in (begin, end - 1))
            self.drive_start[row], self.drive_step[row] = first, (last - first) / (end - begin - 1)
        return True

    def _is_uncut(self) -> bool:
        """Return whether every piece is one trace."""
        return np.array_equal(self.start, self.recording.offsets[:-1]) and np.array_equal(
            self.stop, self.recording.offsets[1:]
        )

    @np.errstate(all="ignore")
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
            self.relative = SharedAxis(relative.astype(np.float32), self.offsets)

    def _drive_block(self, low: int, high: int, relative: npt.NDArray[np.float32]) -> bool:
        """Fill the drive relative to each trace's start; return whether its steps are equal."""
        from meseta.intake.kernels import drive_piece, drive_steps

        values = self.gathered(lambda a, b: self.axis.values(self.recording, a, b), low, high)
        values = np.ascontiguousarray(values)
        first, last = (int(np.searchsorted(self.offsets, at, side="right")) - 1 for at in (low, high - 1))
        if int(self.offsets[first + 1] - self.offsets[first]) > LARGEST_BLOCK:
            base = low - int(self.offsets[first])
            begin, step = float(self.drive_start[first]), float(self.drive_step[first])
            return bool(drive_piece(values, base, begin, step, LINEAR_TOLERANCE, relative))
        rows = slice(first, last + 1)
        offsets = self.offsets[first : last + 2] - low
        start, step_of = self.drive_start[rows], self.drive_step[rows]
        return bool(drive_steps(values, offsets, LINEAR_TOLERANCE, start, step_of, relative))

    # -- left in the recording --------------------------------------------------------------------------------------

    def stream(self, work: Work) -> Part:
        """Leave all samples in the recording and look through it once for what all rows need; returns itself."""
        total = self.samples
        self.conductance = StreamedRow(total, np.float32, self._conductance_of)
        self.quality = StreamedRow(total, np.uint8, self._quality_of) if self._may_be_doubtful() else None
        self.carried = {
            channel.name: StreamedRow(total, np.float32, partial(self._carried_values, channel))
            for channel in self.extras
        }
        own_drive = self._begin_drive()
        blocks = flat_blocks(self.offsets, min(work.block_samples, BLOCK_SAMPLES))
        sizes = [high - low for low, high in blocks]
        straight, doubtful = True, False
        look = partial(self._look_block, own_drive=own_drive)
        for one, bits in work.each(look, blocks, "looking through", sizes=sizes, unit="samples"):
            straight, doubtful = straight and one, doubtful or bits
        if own_drive and not straight:
            self.relative = StreamedRow(total, np.float32, self._relative_of)
        self._read_first_bias()
        self.quality = self.quality if doubtful else None
        return self

    @np.errstate(all="ignore")
    def _look_block(self, block: tuple[int, int], own_drive: bool) -> tuple[bool, bool]:
        low, high = block
        scratch = np.empty(high - low, np.float32) if own_drive else None
        straight = True if scratch is None else self._drive_block(low, high, scratch)
        return straight, self.quality is not None and bool(self._quality_of(low, high).any())

    def _conductance_of(self, low: int, high: int) -> npt.NDArray[np.float32]:
        target = np.empty(high - low, np.float32)
        self._calibrate(low, target, None)
        return target

    def _quality_of(self, low: int, high: int) -> npt.NDArray[np.uint8]:
        bits = np.zeros(high - low, np.uint8)
        self._calibrate(low, np.empty(high - low, np.float32), bits)
        return bits

    def _relative_of(self, low: int, high: int) -> npt.NDArray[np.float32]:
        values = self.gathered(lambda a, b: self.axis.values(self.recording, a, b), low, high)
        first, last = np.searchsorted(self.offsets, [low, high - 1], side="right") - 1
        bounds = np.clip(self.offsets[first : last + 2], low, high)
        return (values - np.repeat(self.drive_start[first : last + 1], np.diff(bounds))).astype(np.float32)

    def nan_samples(self) -> int:
        """Return how many samples have no conductance."""
        return self._count(self.conductance, lambda values: np.isnan(values))

    def share_of(self, bit: int) -> float:
        """Return the share of all samples that have a bit of :class:`meseta.traces.Quality`."""
        if self.quality is None or not self.samples:
            return 0.0
        return self._count(self.quality, lambda bits: bits & bit > 0) / self.samples

    def _count(self, row: Any, has: Callable[[npt.NDArray[Any]], npt.NDArray[np.bool_]]) -> int:
        edges = [*range(0, self.samples, BLOCK_SAMPLES), self.samples]
        return sum(int(np.count_nonzero(has(row[low:high]))) for low, high in pairwise(edges))

    @np.errstate(all="ignore")
    def settle_directions(self) -> None:
        """Give every trace without a stated direction one: closing where its conductance rises from end to end."""
        unknown = [row for row, direction in enumerate(self.cut.direction) if not direction]
        if unknown:
            rising = self._rises(np.array(unknown, np.int64))
            for row, closing in zip(unknown, rising.tolist(), strict=True):
                self.cut.direction[row] = "closing" if closing else "opening"
        lengths = np.diff(self.offsets).tolist()
        if not self.cut.phases:
            kinds = [PUSH if direction == "closing" else PULL for direction in self.cut.direction]
            self.cut.phases = list(zip(range(self.traces), repeat(0), lengths, kinds, strict=False))
            return
        has_phase = {phase[0] for phase in self.cut.phases}
        if len(has_phase) == self.traces:
            return
        self.cut.phases += [
            (row, 0, length, PUSH if direction == "closing" else PULL)
            for row, (length, direction) in enumerate(zip(lengths, self.cut.direction, strict=True))
            if row not in has_phase
        ]
        self.cut.phases.sort()

    def _rises(self, rows: npt.NDArray[np.int64]) -> npt.NDArray[np.bool_]:
        """Return for each row whether its conductance ends much higher than it begins."""
        from meseta.intake.kernels import rising_rows

        rising = np.empty(len(rows), np.bool_)
        if isinstance(self.conductance, np.ndarray):
            rising_rows(self.conductance, self.offsets, rows, ENDS, RISE_FACTOR, rising)
            return rising
        for first, last in blocks_of(self.offsets, BLOCK_SAMPLES):
            wanted = slice(*np.searchsorted(rows, [first, last]))
            offsets = self.offsets[first : last + 1] - self.offsets[first]
            low, high = int(self.offsets[first]), int(self.offsets[last])
            if len(rows[wanted]) == 0:
                continue
            if high - low > BLOCK_SAMPLES:  # a long trace: its ends will do
                ends = [self.conductance[low : low + ENDS], self.conductance[high - ENDS : high]]
                values, offsets = np.concatenate(ends), np.array([0, 2 * ENDS], np.int64)
            else:
                values = np.asarray(self.conductance[low:high])
            rising_rows(values, offsets, rows[wanted] - first, ENDS, RISE_FACTOR, rising[wanted])
        return rising

    def let_go(self) -> Part:
        """Drop the recorded samples, which are not needed once all is loaded; returns itself."""
        channels = tuple(channel.without_samples() for channel in self.recording.channels)
        self.recording = self.recording.with_channels(channels)
        self.calibration, axis = self.calibration.without_samples(), self.axis
        self.axis = axis if axis.channel is None else axis.with_channel(axis.channel.without_samples())
        self.extras = tuple(channel.without_samples() for channel in self.extras)
        return self

    def notes(self) -> dict[str, Any]:
        """Return what there is to say of this recording, in plain values."""
        return {
            "calibration": plain_constants(self.calibration),
            "conductance_from": self.calibration.kind,
            "drive": self.axis.said,
            "doubts": self.doubts(),
        }

    def doubts(self) -> list[str]:
        """Return what was assumed and what is odd, each once."""
        said = [*self.recording.doubts, *self.calibration.doubts, *self.axis.doubts, *self.cut.notes]
        said += [f"'{c.name}': {doubt}" for c in self.recording.channels for doubt in c.doubts]
        return list(dict.fromkeys(said))


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


def flat_blocks(offsets: npt.NDArray[np.int64], block_samples: int) -> list[tuple[int, int]]:
    """Cut flat samples into blocks of whole traces; only a trace beyond the largest block is cut itself."""
    blocks: list[tuple[int, int]] = []
    for first, last in blocks_of(offsets, block_samples):
        low, high = int(offsets[first]), int(offsets[last])
        if high - low > LARGEST_BLOCK:
            blocks += [(at, min(at + LARGEST_BLOCK, high)) for at in range(low, high, LARGEST_BLOCK)]
        elif high > low:
            blocks.append((low, high))
    return blocks


def _distinct(extras: Sequence[RawChannel]) -> tuple[RawChannel, ...]:
    """Return the carried channels with names that no channel of our own has."""
    return tuple(
        replace(channel, name=f"recorded {channel.name}") if channel.name in ("conductance", "quality") else channel
        for channel in extras
    )
