"""Numbers without a header, as the recipe says they stand: type, byte order, bytes before them, channels in turn."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents, make_channel, whole
from meseta.intake.readers.file_array import InFile, Numbers
from meseta.intake.readers.shared_blocks import SharedBlocks
from meseta.recipe.intake import IntakeSettings

__all__ = ["BinaryReader"]


@dataclass(frozen=True)
class _Interleaved:
    """One channel of numbers that take turns in a file."""

    numbers: Numbers
    dtype: np.dtype[Any]
    header_byte: int
    channels: int
    place: int
    samples: int

    def __len__(self) -> int:
        return self.samples

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
        row = self.dtype.itemsize * self.channels
        count = (stop - start) * self.channels
        block = self.numbers.read(self.header_byte + start * row, count, self.dtype)
        return block.reshape(-1, self.channels)[:, self.place].astype(self.dtype.newbyteorder("="))


class BinaryReader:
    """Reads headerless binary files; only where the recipe says how they stand."""

    name = "binary"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return False: nothing in such a file says what it is."""
        return False

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the channels as the recipe describes them."""
        if settings.binary_type is None:
            raise InputError("needs the type of its numbers", str(path), "give intake.binary_type, for example int16")
        names = settings.binary_channels or ["column 1"]
        dtype = np.dtype(settings.binary_type).newbyteorder(settings.binary_order)
        body = path.stat().st_size - settings.binary_header_byte
        samples, rest = divmod(body, dtype.itemsize * len(names))
        if samples <= 0:
            raise InputError("is shorter than its header", str(path), "check intake.binary_header_byte")
        doubts = (f"{rest} bytes at the end do not make a whole row",) if rest else ()
        numbers: Numbers = InFile(path) if len(names) == 1 else SharedBlocks(path)
        channels = tuple(
            make_channel(
                name, _Interleaved(numbers, dtype, settings.binary_header_byte, len(names), place, samples), dtype
            )
            for place, name in enumerate(names)
        )
        layout = f"{len(names)} channel{'s' if len(names) > 1 else ''} of {settings.binary_type} in turn"
        return Contents(layout, channels, *whole(samples), doubts=doubts)
