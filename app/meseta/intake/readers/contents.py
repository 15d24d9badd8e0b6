"""What every reader returns, and the protocol of a reader."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from meseta.intake.meaning.metadata import Plain, canonical, plain_value
from meseta.intake.meaning.roles import DRIVE_ROLES, SIGNAL_ROLES, Guess, guess_role
from meseta.intake.recording import RawChannel
from meseta.recipe.intake import IntakeSettings
from meseta.traces import Samples

__all__ = [
    "Contents",
    "Reader",
    "channel_constants",
    "columns_of",
    "conversion",
    "conversion_names",
    "make_channel",
    "whole",
]


def _nothing() -> None:
    """Close nothing."""


@dataclass(frozen=True)
class Contents:
    """A file's channels in pieces, as :class:`~meseta.intake.recording.Recording` has them, and the layout in words."""

    layout: str
    channels: tuple[RawChannel, ...]
    offsets: npt.NDArray[np.int64]
    record_start: npt.NDArray[np.int64]
    dataset: npt.NDArray[np.str_]
    metadata: Mapping[str, Plain] = field(default_factory=dict)
    table: Mapping[str, npt.NDArray[Any]] = field(default_factory=dict)
    doubts: tuple[str, ...] = ()
    close: Callable[[], None] = _nothing
    sha256: str = ""
    """Checksum of the file, where the reader had all its bytes in hand; else the file is read once more for it."""
    like: object | None = None
    """The same object in files that differ in nothing but their samples; None where that is not known."""


class Reader(Protocol):
    """One file format.

    ``sniff`` looks at the first bytes (and, where it must, at the file) and tells whether the content is of this
    format; ``open`` returns the content, its samples read lazily where the file is large.
    """

    name: str

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the content of a file is of this format."""
        ...

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the content of the file.

        Raises
        ------
        InputError
            Where the file is damaged, empty, refused, or of no known layout.
        """
        ...


def whole(samples: int, name: str = "") -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64], npt.NDArray[np.str_]]:
    """Return offsets, record_start and dataset of a recording that is one piece."""
    return np.array([0, samples], np.int64), np.zeros(1, np.int64), np.array([name], np.str_)


_SAID_IN = ("name", "channel_name", "label", "title", "standard_name", "description")
"""Attributes that say in words what a channel is."""
_FREE_TEXTS = ("title", "description")
_CONVERSION = (
    ("scale", "scale_factor", "slope", "volt_per_count", "volts_per_count", "lsb", "lsb_volt", "counts_to_volt"),
    ("offset", "add_offset", "intercept", "offset_value"),
)


def conversion(attributes: Mapping[str, Any], integers: bool) -> tuple[float, float]:
    """Return scale and offset that turn stored numbers into the channel's unit.

    An offset alone converts only integers: beside volts it is the amplifier's offset.
    """
    lowered = {str(name).lower(): plain_value(value) for name, value in attributes.items()}
    factor, shift = (next((lowered[name] for name in names if name in lowered), None) for names in _CONVERSION)
    scale = float(factor) if isinstance(factor, int | float) else 1.0
    if isinstance(shift, int | float) and (integers or factor is not None):
        return scale, float(shift)
    return scale, 0.0


def conversion_names() -> frozenset[str]:
    """Return the attribute names that convert stored numbers, in lower case."""
    return frozenset(name for names in _CONVERSION for name in names)


def make_channel(
    name: str,
    samples: Samples,
    dtype: np.dtype[Any],
    attributes: Mapping[str, Any] | None = None,
    *,
    unit: str = "",
    unit_ground: str = "attribute",
    context: str = "",
    shared: bool = False,
) -> RawChannel:
    """Return a channel with the role and unit that its name, attributes and unit row propose.

    Parameters
    ----------
    name : str
        Name in the file.
    dtype : numpy dtype
        Type of the stored numbers.
    attributes : mapping, optional
        The file's attributes of the channel; "unit", "units", "role", "quantity", "long_name", "scale", "offset" are
        looked at.
    unit : str
        Unit from elsewhere (a unit row), where the attributes state none.
    context : str
        Name that says more than ``name`` does (of the group that the dataset lies in), tried where ``name`` says
        nothing.
    """
    attributes = attributes or {}
    lowered = {str(key).lower(): plain_value(value) for key, value in attributes.items()}
    stated = next((str(lowered[key]) for key in ("unit", "units", "unit_string") if lowered.get(key)), "")
    role = str(lowered.get("role") or lowered.get("quantity") or "").strip().lower().replace(" ", "_")
    ground = "attribute" if stated else unit_ground
    guess = guess_role(name, stated or unit, role, ground)
    for other in (str(lowered.get("long_name") or lowered.get("quantity") or ""), context):
        if guess.role == "other" and other:
            second = guess_role(other, stated or unit, "", ground)
            guess = second if second.role != "other" else guess
    if guess.role == "other" and (told := _told_in_words(lowered, stated or unit, ground)) is not None:
        guess = told
    scale, offset = conversion(attributes, dtype.kind in "iu")
    doubts = list(guess.doubts)
    if (
        dtype.kind in "iu"
        and scale == 1.0
        and guess.role not in ("trace_number", "trigger", "phase", "range_code", "other")
    ):
        doubts.append("stored as whole numbers without a scale: taken as they are")
    plain = {str(key): value for key, raw in attributes.items() if (value := plain_value(raw)) is not None}
    said = (guess.role, guess.unit, scale, offset, shared, guess.ground, guess.confidence)
    return RawChannel(name, samples, *said, doubts=tuple(doubts), attributes=plain)


def _told_in_words(lowered: Mapping[str, Any], unit: str, ground: str) -> Guess | None:
    """Return the role that the words of an attribute speak of; None where they speak of none, or of several."""
    for key in _SAID_IN:
        words = re.findall(r"[^\W\d_]{2,}", str(lowered.get(key) or ""))
        found = {(guess := guess_role(word, unit, "", ground)).role: guess for word in words}
        found = {
            role: guess for role, guess in found.items() if role in SIGNAL_ROLES + DRIVE_ROLES + ("voltage", "bias")
        }
        if len(found) > 1:  # "voltage at the piezo"
            found.pop("voltage", None)
        if len(found) == 1 and (guess := next(iter(found.values()))).role != "voltage":
            said = f"its {key} says '{str(lowered[key])[:60]}': taken as {guess.role}"
            return replace(guess, doubts=(said,)) if key in _FREE_TEXTS else guess
    return None


def channel_constants(attributes: Mapping[str, Any], where: str) -> tuple[dict[str, Plain], list[str]]:
    """Return the calibration constants among a channel's attributes, and doubts about them."""
    skipped = conversion_names() if any(str(name).lower() in _CONVERSION[0] for name in attributes) else frozenset()
    words = ("unit", "units", "role", "quantity", "long_name", *_SAID_IN)
    kept = {key: value for key, value in attributes.items() if str(key).lower() not in (*words, *skipped)}
    return canonical(kept, where)


def columns_of(rows: Sequence[Mapping[str, Plain]]) -> dict[str, npt.NDArray[Any]]:
    """Return one array a name from one mapping a piece; NaN or "" where a piece does not have it."""
    names = dict.fromkeys(name for row in rows for name in row)
    columns: dict[str, npt.NDArray[Any]] = {}
    for name in names:
        values = [row.get(name) for row in rows]
        if all(value is None or isinstance(value, int | float) for value in values):
            columns[name] = np.array([np.nan if value is None else value for value in values], np.float64)
        else:
            columns[name] = np.array(["" if value is None else str(value) for value in values], np.str_)
    return columns
