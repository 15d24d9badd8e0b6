"""The traces of one recording: loaded into memory, or left in the recording and worked out when they are read."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property, partial
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.intake.calibration.calibrate import Calibration
from meseta.intake.calibration.constants_said import plain_constants
from meseta.intake.calibration.drive import DriveAxis
from meseta.intake.cutting.cut import Cut
from meseta.intake.meaning.units import unit_factor
from meseta.intake.part_directions import settle_directions
from meseta.intake.part_drive import begin_drive, drive_block, relative_of
from meseta.intake.recording import RawChannel, Recording
from meseta.intake.room import check_room
from meseta.intake.rows import BLOCK_SAMPLES, LARGEST_BLOCK, RawSpans, SharedAxis, StreamedRow, flat_blocks
from meseta.work import Work

__all__ = ["Part"]


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
        own_drive = begin_drive(self)
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
        return drive_block(self, low, high, self.relative[low:high]) if own_drive else True

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
        own_drive = begin_drive(self)
        blocks = flat_blocks(self.offsets, min(work.block_samples, BLOCK_SAMPLES))
        sizes = [high - low for low, high in blocks]
        straight, doubtful = True, False
        look = partial(self._look_block, own_drive=own_drive)
        for one, bits in work.each(look, blocks, "looking through", sizes=sizes, unit="samples"):
            straight, doubtful = straight and one, doubtful or bits
        if own_drive and not straight:
            self.relative = StreamedRow(total, np.float32, partial(relative_of, self))
        self._read_first_bias()
        self.quality = self.quality if doubtful else None
        return self

    @np.errstate(all="ignore")
    def _look_block(self, block: tuple[int, int], own_drive: bool) -> tuple[bool, bool]:
        low, high = block
        scratch = np.empty(high - low, np.float32) if own_drive else None
        straight = True if scratch is None else drive_block(self, low, high, scratch)
        return straight, self.quality is not None and bool(self._quality_of(low, high).any())

    def _conductance_of(self, low: int, high: int) -> npt.NDArray[np.float32]:
        target = np.empty(high - low, np.float32)
        self._calibrate(low, target, None)
        return target

    def _quality_of(self, low: int, high: int) -> npt.NDArray[np.uint8]:
        bits = np.zeros(high - low, np.uint8)
        self._calibrate(low, np.empty(high - low, np.float32), bits)
        return bits

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

    def settle_directions(self) -> None:
        """Give every trace without a stated direction one: closing where its conductance rises from end to end."""
        settle_directions(self)

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
