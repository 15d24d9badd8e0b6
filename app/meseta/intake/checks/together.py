"""The calibration check-up of many recordings together: files of one trace each say little one by one."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.assembly import Part, plan_of
from meseta.intake.checks.check_up import check_up
from meseta.intake.checks.findings import Finding
from meseta.intake.recording import Plain, RawChannel, Recording
from meseta.recipe import Recipe
from meseta.traces import ArraySamples
from meseta.work import Work

__all__ = ["MOST_RECORDINGS", "CheckedTogether", "check_together", "spread_over"]

MOST_RECORDINGS: Final = 400
"""So many recordings, spread over all of them, are looked at."""
MOST_SAMPLES: Final = 20_000_000
SINGLE_SAMPLES: Final = 200_000
"""A recording of more samples is no single trace and is looked at by itself."""


@dataclass(frozen=True)
class CheckedTogether:
    """What the check-up says of recordings that are written alike and calibrated alike.

    Attributes
    ----------
    first : str
        Name of the first of them.
    recordings, traces : int
        How many were looked at, and the traces in them.
    findings : tuple of Finding
    """

    first: str
    recordings: int
    traces: int
    findings: tuple[Finding, ...]

    def as_dict(self) -> dict[str, Any]:
        """Return it as plain values."""
        findings = [{"check": one.check, "fine": bool(one.fine), "text": one.text} for one in self.findings]
        return {"first": self.first, "recordings": self.recordings, "traces": self.traces, "findings": findings}


def spread_over(count: int, most: int = MOST_RECORDINGS) -> list[int]:
    """Return at most ``most`` places of ``count``, evenly spread, first and last among them."""
    return np.unique(np.linspace(0, count - 1, min(count, most)).round().astype(int)).tolist() if count else []


@np.errstate(all="ignore")  # the numbers of a damaged recording may be anything
def check_together(recordings: Sequence[Recording], recipe: Recipe, work: Work | None = None) -> list[CheckedTogether]:
    """Check the calibration of recordings: single traces that are written alike together, all others one by one.

    Parameters
    ----------
    recordings : sequence of Recording
        Open, in the order of the record; see :func:`spread_over` where there are many.
    recipe : Recipe
    work : Work, optional

    Returns
    -------
    list of CheckedTogether
        One a recording or group of recordings; those that give no traces are left out, as reading says so.
    """
    work = work or Work()
    groups: dict[Any, list[Recording]] = {}
    for number, recording in enumerate(recordings):
        shared = any(channel.shared for channel in recording.channels)  # an axis of each file's own
        alone = shared or recording.pieces != 1 or recording.samples > SINGLE_SAMPLES
        groups.setdefault(number if alone else _form(recording), []).append(recording)
    checked: list[CheckedTogether] = []
    for done, group in enumerate(groups.values()):
        work.tell("checking the calibration", done, len(groups), "recordings")
        checked += _checked(group, recipe, work.quiet())
    work.tell("checking the calibration", len(groups), len(groups), "recordings")
    return checked


def _checked(group: Sequence[Recording], recipe: Recipe, work: Work) -> list[CheckedTogether]:
    try:
        part = plan_of(pooled(group), recipe)
        if not part.traces:
            return []
        part = _with_samples(part, work)
    except InputError:
        if len(group) == 1:
            return []  # reading lists it among the files that give no traces
        return [one for single in group for one in _checked([single], recipe, work)]
    findings, _ = check_up(part, recipe.alignment)
    return [CheckedTogether(group[0].source.name, len(group), part.traces, findings)]


def _with_samples(part: Part, work: Work) -> Part:
    part = part.stream(work) if part.samples > MOST_SAMPLES else part.load(work)
    part.settle_directions()
    return part


def _form(recording: Recording) -> tuple[Any, ...]:
    """Return what two recordings share that may be looked at as one."""
    channels = tuple(
        (one.name, one.role, one.unit, one.scale, one.offset, str(one.dtype), tuple(one.attributes.items()))
        for one in recording.channels
    )
    return channels, tuple(sorted(recording.metadata)), tuple(recording.table)


def pooled(recordings: Sequence[Recording]) -> Recording:
    """Return single-piece recordings of one form as the pieces of one recording, their samples in memory."""
    first = recordings[0]
    if len(recordings) == 1:
        return first
    lengths = [one.samples for one in recordings]
    columns = zip(*(one.channels for one in recordings), strict=True)
    metadata, told = _alike([one.metadata for one in recordings])
    table = {name: np.concatenate([one.table[name] for one in recordings]) for name in first.table}
    return replace(
        first,
        channels=tuple(_end_to_end(channels) for channels in columns),
        offsets=np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64),
        record_start=np.concatenate([one.record_start for one in recordings]),
        dataset=np.concatenate([one.dataset for one in recordings]),
        metadata=metadata,
        table={**told, **table},
    )


def _end_to_end(channels: Sequence[RawChannel]) -> RawChannel:
    stored = [one.samples.read(0, len(one.samples)) for one in channels]
    return replace(channels[0], samples=ArraySamples(np.concatenate(stored)))


def _alike(told: Sequence[Mapping[str, Plain]]) -> tuple[dict[str, Plain], dict[str, npt.NDArray[Any]]]:
    """Return what all recordings say alike, and what each says for itself as columns."""
    alike, columns = {}, {}
    for name, value in told[0].items():
        values = [one[name] for one in told]
        if all(other == value for other in values):
            alike[name] = value
        elif len({type(other) is str for other in values}) == 1:
            columns[name] = np.array(values)
    return alike, columns
