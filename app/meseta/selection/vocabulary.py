"""The quantities that rules can ask for: name, kind, words for the sentence, and how each is found."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.segmentation.results import PLATEAU_KINDS
from meseta.selection.facts import Facts
from meseta.traces import PHASE_KINDS

__all__ = ["QUANTITIES", "Asked", "Quantity"]

EVERYTHING = (float("-inf"), float("inf"))


@dataclass(frozen=True)
class Asked:
    """The arguments of a quantity, sorted by what they are."""

    bounds: tuple[float, float] = EVERYTHING
    place: tuple[float, float] = EVERYTHING
    text: str = ""
    word: str = ""


@dataclass(frozen=True)
class Quantity:
    """One quantity of a trace.

    Attributes
    ----------
    name : str
    kind : str
        "number", "truth" or "text".
    title : str
        How a sentence says it; ``{span}``, ``{word}`` and ``{text}`` stand for the arguments.  For a truth: the
        statement that holds where it is true.
    denied : str
        For a truth: the statement that holds where it is false.
    unit : str
        Unit of the number as printed; "drive" stands for the drive's own unit.
    find : callable
        (Facts, Asked) -> (traces,) array.
    takes : frozenset of str
        Allowed arguments: "span" (a conductance window), "place" (a second span: the displacement of the sample or the
        plateau's middle, from the zero, in the drive's unit), "word", "text".
    needs : str
        The argument that must be there ("span", "text", "word" or "").
    words : tuple of str
        Allowed words where it takes a word.
    """

    name: str
    kind: str
    title: str
    find: Callable[[Facts, Asked], npt.NDArray[Any]]
    unit: str = ""
    denied: str = ""
    takes: frozenset[str] = frozenset()
    needs: str = ""
    words: tuple[str, ...] = ()


def _measure(name: str, title: str, unit: str) -> Quantity:
    return Quantity(name, "number", title, lambda facts, _: getattr(facts.measures, name), unit)


def _fact(name: str, title: str, denied: str) -> Quantity:
    return Quantity(name, "truth", title, lambda facts, _: getattr(facts.measures, name), denied=denied)


def _column(name: str, title: str, unit: str = "") -> Quantity:
    return Quantity(name, "number", title, lambda facts, _: facts.traces.table[name].astype(np.float64), unit)


def _text(name: str, title: str) -> Quantity:
    return Quantity(name, "text", title, lambda facts, _: facts.traces.table[name])


def _plateau_count(facts: Facts, asked: Asked) -> npt.NDArray[Any]:
    return facts.count_plateaus(facts.chosen_plateaus(asked.bounds, asked.word, asked.place))


def _plateau_longest(facts: Facts, asked: Asked) -> npt.NDArray[Any]:
    return facts.longest_plateau(facts.chosen_plateaus(asked.bounds, asked.word, asked.place))


_WINDOW: Final = frozenset({"span", "place", "word"})

_ALL = (
    # what was measured on the trace
    _measure("highest_g0", "the highest conductance before the rupture", "G0"),
    _measure("lowest_g0", "the lowest conductance", "G0"),
    _measure("drive_span", "the span of the drive", "drive"),
    _measure("rupture_drive", "the drive at the rupture", "drive"),
    _measure("crossing_length", "the length by level crossing", "drive"),
    _measure("tunnelling_slope", "the slope of the tunnelling decay", "decades per drive unit"),
    _measure("apparent_barrier_ev", "the apparent barrier of the tunnelling decay", "eV"),
    _measure("floor_noise_g0", "the noise at the floor", "G0"),
    _measure("saturated_samples", "the number of saturated samples", ""),
    _measure("missing_samples", "the number of missing samples", ""),
    _fact("rupture_found", "a rupture was found", "no rupture was found"),
    _fact("reaches_floor", "the trace reaches the floor", "the trace does not reach the floor"),
    _fact("reforms", "the contact closes again after the rupture", "the contact stays open after the rupture"),
    Quantity(
        "displacement_span_nm",
        "number",
        "the displacement span",
        lambda facts, _: facts.in_nm(facts.measures.drive_span),
        "nm",
    ),
    Quantity(
        "rupture_displacement_nm",
        "number",
        "the displacement at the rupture",
        lambda facts, _: facts.in_nm(facts.measures.rupture_drive),
        "nm",
    ),
    # plateaus
    Quantity(
        "plateaus",
        "number",
        "the number of {word}plateaus{span}",
        _plateau_count,
        takes=_WINDOW,
        words=PLATEAU_KINDS,
    ),
    Quantity(
        "longest_plateau_nm",
        "number",
        "the length of the longest {word}plateau{span}",
        lambda facts, asked: facts.in_nm(_plateau_longest(facts, asked)),
        "nm",
        takes=_WINDOW,
        words=PLATEAU_KINDS,
    ),
    Quantity(
        "longest_plateau_drive",
        "number",
        "the length of the longest {word}plateau{span}",
        _plateau_longest,
        "drive",
        takes=_WINDOW,
        words=PLATEAU_KINDS,
    ),
    Quantity(
        "last_plateau_nm",
        "number",
        "the length of the last plateau",
        lambda facts, _: facts.of_last_plateau(facts.plateaus.length_nm),
        "nm",
    ),
    Quantity(
        "last_plateau_drive",
        "number",
        "the length of the last plateau",
        lambda facts, _: facts.of_last_plateau(facts.plateaus.length_drive),
        "drive",
    ),
    Quantity(
        "last_plateau_g0",
        "number",
        "the conductance of the last plateau",
        lambda facts, _: facts.of_last_plateau(facts.plateaus.level_g0),
        "G0",
    ),
    Quantity(
        "samples_inside",
        "number",
        "the number of samples{span}",
        lambda facts, asked: facts.samples_inside(asked.bounds, asked.place),
        takes=frozenset({"span", "place"}),
        needs="span",
    ),
    # place and time in the record
    Quantity("trace", "number", "the trace number", lambda facts, _: np.arange(facts.traces.traces, dtype=np.float64)),
    Quantity("place", "number", "the place in the record (0 first, 1 last)", lambda facts, _: facts.place()),
    Quantity("hours", "number", "the time since the first trace", lambda facts, _: facts.hours(), "h"),
    _column("time_second", "the time", "s"),
    _column("record_start", "the first sample in the recording"),
    Quantity("samples", "number", "the number of samples", lambda facts, _: facts.traces.lengths.astype(np.float64)),
    Quantity(
        "duration_second",
        "number",
        "the duration",
        lambda facts, _: facts.traces.lengths * facts.traces.table["sample_interval_second"],
        "s",
    ),
    _column("bias_volt", "the bias", "V"),
    # where the trace comes from
    _text("direction", "the direction"),
    _text("specimen", "the specimen"),
    _text("session", "the session"),
    _text("dataset", "the dataset"),
    Quantity("file", "text", "the file", lambda facts, _: facts.file()),
    Quantity(
        "has_phase",
        "truth",
        "the trace has a {word}phase",
        lambda facts, asked: facts.has_phase(asked.word),
        denied="the trace has no {word}phase",
        takes=frozenset({"word"}),
        needs="word",
        words=PHASE_KINDS,
    ),
    # what was decided by hand
    Quantity(
        "in_group",
        "truth",
        "the trace is in the group {text}",
        lambda facts, asked: facts.members(asked.text),
        denied="the trace is not in the group {text}",
        takes=frozenset({"text"}),
        needs="text",
    ),
    Quantity(
        "traces_since",
        "number",
        "the number of traces since {text}",
        lambda facts, asked: facts.traces_since(asked.text),
        takes=frozenset({"text"}),
        needs="text",
    ),
    Quantity(
        "seconds_since",
        "number",
        "the time since {text}",
        lambda facts, asked: facts.seconds_since(asked.text),
        "s",
        takes=frozenset({"text"}),
        needs="text",
    ),
)

QUANTITIES: Final[Mapping[str, Quantity]] = {quantity.name: quantity for quantity in _ALL}
"""Every quantity by its name.  ``known(name)`` and ``column("name")`` are understood beside these."""
