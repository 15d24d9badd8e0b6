"""TDMS files, channel by channel."""

from __future__ import annotations

import struct
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.recipe.intake import IntakeSettings

__all__ = ["TdmsReader"]

_FAULTS: Final = (
    ValueError, KeyError, EOFError, OSError, IndexError, TypeError, OverflowError, struct.error, AttributeError,
    AssertionError, NotImplementedError, ZeroDivisionError, MemoryError,
)  # fmt: skip


@dataclass(frozen=True)
class _Data:
    """The samples of one channel, read from the file when asked for."""

    channel: Any
    where: str

    @property
    def shape(self) -> tuple[int, ...]:
        return (len(self.channel),)

    @property
    def dtype(self) -> np.dtype[Any]:
        return np.dtype(self.channel.dtype)

    def __getitem__(self, place: slice) -> npt.NDArray[Any]:
        start, stop, _ = place.indices(len(self.channel))
        if stop <= start:
            return np.empty(0, self.dtype)
        try:
            return np.asarray(self.channel.read_data(start, stop - start, scaled=True))
        except _FAULTS as error:
            raise InputError("is damaged", self.where, "copy the file again from its origin") from error


class TdmsReader:
    """Reads TDMS files."""

    name = "TDMS"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the file begins with a TDMS segment."""
        return head.startswith(b"TDSm")

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the channels of the file, groups as groups."""
        from nptdms import TdmsFile

        try:
            file = TdmsFile.open(str(path))
        except _FAULTS as error:
            raise InputError(f"is damaged ({str(error)[:60]})", str(path), "copy the file again") from error
        try:
            return replace(understood(_tree(file, path), path, settings), close=file.close)
        except _FAULTS as error:
            file.close()
            raise InputError(f"is damaged ({str(error)[:60]})", str(path), "copy the file again") from error
        except InputError:
            file.close()
            raise


def _tree(file: Any, path: Path) -> Tree:
    tree = Tree(attributes={"": dict(file.properties)})
    size = path.stat().st_size
    for group in file.groups():
        home = f"/{group.name.replace('/', '_')}"
        tree.attributes[home] = dict(group.properties)
        for channel in group.channels():
            name = f"{home}/{channel.name.replace('/', '_')}"
            count = len(channel)
            if count * max(np.dtype(channel.dtype).itemsize if channel.dtype is not None else 1, 1) > 64 * size:
                tree.refused.append(f"{name} claims more samples than the file holds")
            elif count > 0 and np.dtype(channel.dtype).kind in "iuf":
                data = _Data(channel, f"{path}, {name}")
                tree.nodes.append(Node(name, data, data.shape, data.dtype, _attributes(channel.properties)))
    return tree


def _attributes(properties: Any) -> dict[str, Any]:
    """Return a channel's properties; scaling is applied by the library, so its own entries are left out."""
    found = {key: value for key, value in dict(properties).items() if not str(key).startswith("NI_")}
    if "unit_string" in found:
        found["unit"] = found.pop("unit_string")
    return found
