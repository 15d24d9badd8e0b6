"""What is the same for all recordings of a batch that are written alike, worked out once.

A question (what are the roles, the calibration, the drive?) is put to a recording whose samples cannot be had, and
whose entries of metadata are noted as they are looked up.  Where that gives an answer, it holds for every recording
that is like it and has the same in those entries; where the answer takes a sample, or the number of them, each
recording is asked on its own.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable, Iterator, Mapping
from dataclasses import replace
from typing import Any, Final, TypeVar, cast

import numpy as np
import numpy.typing as npt

from meseta.errors import MesetaError
from meseta.intake.recording import Plain, RawChannel, Recording

__all__ = ["Memory"]

MOST_KINDS: Final = 256
MOST_ANSWERS: Final = 8
"""Answers to one question that are remembered: for metadata that differ from file to file none is worth it."""
Answer = TypeVar("Answer")
Entries = tuple[tuple[str, Plain | None], ...]


class _NeedsSamplesError(Exception):
    """The answer to a question takes samples."""


class _Withheld:
    """Samples of the channel at a place of a recording: only their type is told."""

    def __init__(self, place: int, dtype: np.dtype[Any]) -> None:
        self.place, self._none = place, np.empty(0, dtype)

    def __len__(self) -> int:
        raise _NeedsSamplesError

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        if (start, stop) != (0, 0):
            raise _NeedsSamplesError
        return self._none


class _WithheldOffsets:
    """Bounds of pieces: only how many there are is told."""

    def __init__(self, count: int) -> None:
        self._count = count

    def __len__(self) -> int:
        return self._count

    def __getitem__(self, place: object) -> Any:
        raise _NeedsSamplesError

    def __array__(self, *_: Any, **__: Any) -> npt.NDArray[Any]:
        raise _NeedsSamplesError


class _Noting(Mapping[str, Plain]):
    """Metadata that note which entries are looked up."""

    def __init__(self, entries: Mapping[str, Plain]) -> None:
        self._entries, self.asked = entries, dict[str, Plain | None]()

    def __getitem__(self, name: str) -> Plain:
        self.asked[name] = self._entries.get(name)
        return self._entries[name]

    def __iter__(self) -> Iterator[str]:
        raise _NeedsSamplesError

    def __len__(self) -> int:
        raise _NeedsSamplesError


class Memory:
    """Answers that hold for all recordings of a batch that are alike (:attr:`Recording.like`), for one recipe."""

    def __init__(self) -> None:
        self._answers: dict[tuple[object, Hashable], list[tuple[Entries, Any]] | None] = {}

    def ask(self, question: Hashable, recording: Recording, answer_of: Callable[[Recording], Answer]) -> Answer:
        """Return what ``answer_of`` gives of a recording.

        Parameters
        ----------
        question : hashable
            Names what is asked, with all that the answer depends on beside the recording.
        recording : Recording
        answer_of : callable
            Its answer is a plain value, a channel, a tuple of channels, or a frozen dataclass with channels as fields.
        """
        if recording.like is None:
            return answer_of(recording)
        key = (recording.like, question)
        known = self._answers.get(key, [])
        if known is None:
            return answer_of(recording)
        metadata = recording.metadata
        for entries, answer in known:
            if all(metadata.get(name) == value for name, value in entries):
                return cast("Answer", _bound(answer, recording))
        found = None if len(known) >= MOST_ANSWERS else _answer_without_samples(recording, answer_of)
        if len(self._answers) >= MOST_KINDS:
            self._answers = {}
        self._answers[key] = None if found is None else [*known, found]
        return answer_of(recording) if found is None else cast("Answer", _bound(found[1], recording))


def _answer_without_samples(recording: Recording, answer_of: Callable[[Recording], Any]) -> tuple[Entries, Any] | None:
    channels = tuple(
        channel.with_samples(_Withheld(place, channel.dtype)) for place, channel in enumerate(recording.channels)
    )
    noting = _Noting(recording.metadata)
    hollow = replace(
        recording,
        channels=channels,
        offsets=cast("Any", _WithheldOffsets(len(recording.offsets))),
        metadata=noting,
        like=None,
    )
    try:
        answer = answer_of(hollow)
    except (_NeedsSamplesError, MesetaError):  # an error is raised anew, for each recording with its own name
        return None
    return tuple(noting.asked.items()), answer


def _bound(answer: Any, recording: Recording) -> Any:
    """Return an answer with the samples of a recording in the place of those that were withheld."""
    if isinstance(answer, RawChannel):
        samples = answer.samples
        return (
            answer.with_samples(recording.channels[samples.place].samples) if isinstance(samples, _Withheld) else answer
        )
    if isinstance(answer, tuple):
        return tuple([_bound(one, recording) for one in answer])
    fields = getattr(answer, "__dict__", None)
    if fields is None:
        return answer
    own = {name: _bound(value, recording) for name, value in fields.items() if isinstance(value, RawChannel)}
    if not own:
        return answer
    other = object.__new__(type(answer))
    other.__dict__.update(fields, **own)
    return other
