"""Parts end to end: the trace table, phases, drive and notes of a TraceSet."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from itertools import chain
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.assembly import Part
from meseta.intake.calibration.constants_said import plain_constants
from meseta.intake.meaning.metadata import CONSTANTS
from meseta.intake.recording import BETWEEN_TRACES
from meseta.intake.rows import end_to_end
from meseta.recipe import Recipe
from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet, trace_table

__all__ = ["INTAKE_VERSION", "joined", "key_of"]

INTAKE_VERSION: Final = 3
"""Raised when intake gives other numbers for the same files."""
_OWN_COLUMNS: Final = frozenset({
    "trace", "traces", "source", "dataset", "record_start", "samples", "direction", "partner", "kept", "reason",
    "group", "displacement_span_nm", "rupture_displacement_nm", "length_drive", "drive_unit",
})  # fmt: skip
LONGEST_TEXT: Final = 200


def key_of(sources: Sequence[Source], recipe: Recipe) -> str:
    """Return the key of the traces that these recordings give with this recipe."""
    parts = [f"intake {INTAKE_VERSION}", recipe.key(("intake", "calibration", "cutting"))]
    parts += [f"{source.sha256} {source.name}" for source in sources]
    return hashlib.sha256("\n".join(parts).encode()).hexdigest()


def joined(parts: Sequence[Part], recipe: Recipe, notes: Mapping[str, Any]) -> TraceSet:
    """Return the traces of loaded parts, in order, as one TraceSet."""
    _same_units(parts)
    sizes = [int(part.offsets[-1]) for part in parts]
    bases = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
    offsets = np.concatenate(
        [[0], *(part.offsets[1:] + base for part, base in zip(parts, bases, strict=False))]
    ).astype(np.int64)
    rows = np.concatenate([[0], np.cumsum([part.traces for part in parts])]).astype(np.int64)
    sources = tuple(part.recording.source for part in parts)
    channels = {"conductance": Channel(end_to_end([part.conductance for part in parts]), "G0")}
    channels |= _carried(parts, sizes)
    has_quality = any(part.quality is not None for part in parts)
    quality = (
        end_to_end(
            [np.zeros(n, np.uint8) if part.quality is None else part.quality
             for part, n in zip(parts, sizes, strict=True)]
        )
        if has_quality
        else None
    )  # fmt: skip
    return TraceSet(
        offsets=offsets,
        channels=channels,
        drive=_drive(parts),
        phases=_phases(parts, rows),
        table=_table(parts, recipe, rows),
        sources=sources,
        key=key_of(sources, recipe),
        quality=quality,
        notes=dict(notes) | _notes(parts),
    )


def _same_units(parts: Sequence[Part]) -> None:
    """Raise where some recordings have a displacement and others have not."""
    first = parts[0]
    for part in parts[1:]:
        if part.axis.unit != first.axis.unit:
            raise InputError(
                f"its drive is in {part.axis.unit}, that of {first.recording.source.name} in {first.axis.unit}",
                part.recording.source.name,
                "give calibration.nm_per_volt or calibration.nm_per_second, or read them apart",
            )


def _carried(parts: Sequence[Part], sizes: Sequence[int]) -> dict[str, Channel]:
    """Return the channels that are carried along; NaN where a recording does not have one."""
    units = {channel.name: channel.unit for part in reversed(parts) for channel in part.extras}
    found = {}
    for name in sorted(units):
        arrays = [
            part.carried[name] if name in part.carried else np.full(size, np.nan, np.float32)
            for part, size in zip(parts, sizes, strict=True)
        ]
        found[name] = Channel(end_to_end(arrays), units[name])
    return found


def _drive(parts: Sequence[Part]) -> Drive:
    start = np.concatenate([part.drive_start for part in parts])
    step = np.concatenate([part.drive_step for part in parts])
    unit = parts[0].axis.unit
    if all(part.relative is None for part in parts):
        return Drive(start, step, unit)
    arrays = [_stepped(part) if part.relative is None else part.relative for part in parts]
    return Drive(start, np.full(len(start), np.nan), unit, end_to_end(arrays))


def _stepped(part: Part) -> npt.NDArray[np.float32]:
    lengths = np.diff(part.offsets)
    index = np.arange(int(part.offsets[-1])) - np.repeat(part.offsets[:-1], lengths)
    return (np.repeat(part.drive_step, lengths) * index).astype(np.float32)


def _phases(parts: Sequence[Part], rows: npt.NDArray[np.int64]) -> PhaseTable:
    tables = [
        np.fromiter(chain.from_iterable(part.cut.phases), np.int64).reshape(-1, 4) + np.array([base, 0, 0, 0])
        for part, base in zip(parts, rows, strict=False)
    ]
    table = np.concatenate(tables)
    trace, start, stop, kind = (np.ascontiguousarray(table[:, place]) for place in range(4))
    return PhaseTable(trace, start, stop, kind.astype(np.uint8))


# -- the trace table --------------------------------------------------------------------------------------------------


def _table(parts: Sequence[Part], recipe: Recipe, rows: npt.NDArray[np.int64]) -> dict[str, npt.NDArray[Any]]:
    columns = [_columns(part, recipe) for part in parts]
    names = dict.fromkeys(name for one in columns for name in one)
    table = {}
    for name in names:
        arrays = [
            one[name] if name in one else _unknown(part.traces, columns, name)
            for one, part in zip(columns, parts, strict=True)
        ]
        if len({array.dtype.kind in "US" for array in arrays}) > 1:
            arrays = [array.astype(np.str_) for array in arrays]
        table[name] = np.concatenate(arrays)
    source = np.repeat(np.arange(len(parts)), np.diff(rows))
    partner = np.concatenate(
        [np.where(p >= 0, p + base, -1) for p, base in zip((np.array(q.cut.partner, np.int64) for q in parts), rows,
                                                          strict=False)]
    )  # fmt: skip
    return trace_table(int(rows[-1]), source=source, partner=partner, **table)


def _unknown(count: int, columns: Sequence[Mapping[str, npt.NDArray[Any]]], name: str) -> npt.NDArray[Any]:
    kind = next(one[name].dtype.kind for one in columns if name in one)
    return np.full(count, "", np.str_) if kind in "USO" else np.full(count, np.nan)


def _columns(part: Part, recipe: Recipe) -> dict[str, npt.NDArray[Any]]:
    """Return the columns of one part's traces: where they lie, when, and what the recording says of them."""
    recording, pieces = part.recording, np.array(part.cut.piece, np.int64)
    begin = part.start - recording.offsets[pieces]
    record_start = recording.record_start[pieces] + begin
    found: dict[str, npt.NDArray[Any]] = {
        "dataset": recording.dataset[pieces],
        "record_start": record_start,
        "direction": np.array(part.cut.direction, np.str_),
        "sample_interval_second": np.full(part.traces, part.interval_second),
        "time_second": _time(part, pieces, record_start),
        "bias_volt": _bias(part, pieces),
    }
    for name, value in recording.metadata.items():
        if (
            name not in found
            and name != "sampling_hertz"
            and not (isinstance(value, str) and len(value) > LONGEST_TEXT)
        ):
            found[_column_name(name)] = np.full(part.traces, value)
    for name, column in recording.table.items():
        if name not in ("bias_volt", "direction", "time_second", BETWEEN_TRACES) and len(column) == recording.pieces:
            found[_column_name(name)] = column[pieces]
    for name in found.keys() & CONSTANTS.keys() - {"bias_volt", "sample_interval_second"}:
        used = _used(part, recipe, name)
        if used is not None:
            found[name] = np.broadcast_to(np.asarray(used, np.float64), (recording.pieces,))[pieces]
    for name in ("specimen", "session"):
        given = getattr(recipe.intake, name)
        if given is not None:
            found[name] = np.full(part.traces, given)
        elif name in found:
            found[name] = found[name].astype(np.str_)
    return found


def _used(part: Part, recipe: Recipe, name: str) -> Any:
    """Return the constant that was used, where it may be another than the recording states; None where it was not."""
    known = part.calibration.constants.get(name)
    return getattr(recipe.calibration, name, None) if known is None else known[0]


def _column_name(name: str) -> str:
    return f"file_{name}" if name in _OWN_COLUMNS else name


def _time(part: Part, pieces: npt.NDArray[np.int64], record_start: npt.NDArray[np.int64]) -> npt.NDArray[np.float64]:
    stated = part.recording.table.get("time_second")
    if stated is not None and stated.dtype.kind in "fiu":
        return stated.astype(np.float64)[pieces]
    begun = part.recording.metadata.get("time_second")
    base = float(begun) if isinstance(begun, int | float) else 0.0
    return np.asarray(base + record_start * part.interval_second, np.float64)


def _bias(part: Part, pieces: npt.NDArray[np.int64]) -> npt.NDArray[np.float64]:
    """Return the bias of each trace: of its channel the first value, else from the calibration or as stated."""
    if part.first_bias_volt is not None:
        return part.first_bias_volt
    known = part.calibration.constants.get("bias_volt")
    if known is not None:
        return np.broadcast_to(np.asarray(known[0], np.float64), (part.recording.pieces,))[pieces]
    stated = part.recording.table.get("bias_volt")
    if stated is not None and stated.dtype.kind in "fiu":
        return stated.astype(np.float64)[pieces]
    value = part.recording.metadata.get("bias_volt")
    return np.full(part.traces, float(value) if isinstance(value, int | float) else np.nan)


def _notes(parts: Sequence[Part]) -> dict[str, Any]:
    """Return what there is to say, once for all recordings that say the same."""
    doubts: dict[str, list[str]] = {}
    incomplete = []
    for part in parts:
        for doubt in part.doubts():
            doubts.setdefault(doubt, []).append(part.recording.source.name)
        incomplete += [{"source": part.recording.source.name, **one} for one in part.cut.apart]
    said = [
        f"{names[0]}: {text}" if len(names) == 1 else f"{text} ({len(names)} files, first {names[0]})"
        for text, names in doubts.items()
    ]
    ceiling = sum(part.nan_samples() for part in parts if _may_lack_numbers(part))
    return {
        "assumptions": said,
        "incomplete": incomplete,
        "calibration": _constants_of_all(parts),
        "conductance_from": " and ".join(dict.fromkeys(part.calibration.kind for part in parts)),
        "drive": "; ".join(dict.fromkeys(part.axis.said for part in parts)),
        "samples_without_conductance": ceiling,
    }


def _constants_of_all(parts: Sequence[Part]) -> dict[str, Any]:
    """Return the constants with their origin, for all recordings: lowest and highest where they differ."""
    each = [plain_constants(one) for one in {id(part.calibration): part.calibration for part in parts}.values()]
    found: dict[str, Any] = {}
    for name in dict.fromkeys(name for one in each for name in one):
        stated = [one[name] for one in each if name in one]
        said = [one["value"] for one in stated]
        numbers = [float(end) for value in said if not isinstance(value, str) for end in np.atleast_1d(value)]
        value = [min(numbers), max(numbers)] if numbers and min(numbers) < max(numbers) else said[0]
        origin = " and ".join(dict.fromkeys(str(one["from"]) for one in stated))
        found[name] = {"value": value, "from": origin if len(stated) == len(each) else f"{origin}, not in all files"}
    return found


def _may_lack_numbers(part: Part) -> bool:
    """Return whether the calibration itself leaves readings without a number: at a ceiling, beyond a curve."""
    return bool(np.any(part.calibration.in_series_ohm)) or part.calibration.curve is not None
