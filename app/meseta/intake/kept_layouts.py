"""Kept layouts: whether a file still is what the user said files like it are, and if not, how it differs."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Final, cast

from meseta.errors import InputError
from meseta.intake.recording import RawChannel, Recording
from meseta.intake.roles import MEASURED, settle_roles, split_unit, stem_of, told_role
from meseta.intake.units import is_unit, parse_unit
from meseta.recipe import Recipe
from meseta.recipe.intake import ChannelRole, IntakeSettings
from meseta.recipe.kept_layouts import NO_LAYOUT, KeptChannel, KeptLayout
from meseta.recipe.roles import Role

__all__ = [
    "Fit",
    "LayoutError",
    "answered_by",
    "arrangement_of",
    "as_seen",
    "differences",
    "fit_of",
    "kept_layout",
    "nearest_fit",
    "recognised_anew",
]

SHOWN: Final = 6
"""Names that a sentence lists at most."""
ROUNDING: Final = 1e-9
"""Two scales or units are the same where they agree to this share."""


class LayoutError(InputError):
    """A file fits no kept layout any more.

    Attributes
    ----------
    layout : str
        Name of the layout that comes nearest.
    differences : tuple of str
        How the file differs from it, one sentence each.
    seen : KeptLayout
        The file as it was recognised.
    """

    def __init__(
        self, what: str, where: str, remedy: str, layout: str, differences: Sequence[str], seen: KeptLayout
    ) -> None:
        super().__init__(what, where, remedy)
        self.layout, self.differences, self.seen = layout, tuple(differences), seen


@dataclass(frozen=True)
class Fit:
    """How a recording compares with the kept layout that comes nearest.

    Attributes
    ----------
    name : str
        Of the layout.
    differences : tuple of str
        Empty where it fits.
    channels : tuple of RawChannel
        With the answers of the layout where it fits, else as they were.
    """

    name: str
    differences: tuple[str, ...]
    channels: tuple[RawChannel, ...]


# -- what a file looks like -------------------------------------------------------------------------------------------


@lru_cache(maxsize=4096)
def arrangement_of(words: str) -> str:
    """Return how traces stand in a file, in a reader's words without what counts them or parts the columns."""
    words = re.sub(r"^\d+ tables in a zip; the first: ", "", words)
    words = re.sub(r"^\w+-separated, ", "", words)
    words = re.sub(r", \d+ (?:pieces?|blocks?)\b", "", words)
    words = re.sub(r"\b\d+ (column|channel|trace|piece|row|wave|array|group)s?\b", r"\1s", words)
    return words.strip()


def _named(channels: Sequence[RawChannel]) -> dict[str, RawChannel]:
    """Return channels by name; names that come again are numbered."""
    found: dict[str, RawChannel] = {}
    for channel in channels:
        name, number = channel.name, 2
        while name in found:
            name, number = f"{channel.name} ({number})", number + 1
        found[name] = channel
    return found


def _as_recorded(channel: RawChannel) -> KeptChannel:
    """Return what the file says of a channel."""
    return KeptChannel.model_construct(
        role=cast("Role", channel.role),
        unit=channel.unit,
        file_unit=channel.unit,
        file_scale=channel.scale,
        file_offset=channel.offset,
        numbers="whole" if channel.dtype.kind in "biu" else "real",
        shared=channel.shared,
    )


def as_seen(recording: Recording) -> KeptLayout:
    """Return a recording as it was opened, in the form of a layout: what was recognised is the answer."""
    channels = {name: _as_recorded(channel) for name, channel in _named(recording.channels).items()}
    source = recording.source
    return KeptLayout.model_construct(
        reader=source.reader, arrangement=arrangement_of(source.layout), channels=channels
    )


def kept_layout(recording: Recording, settings: IntakeSettings) -> KeptLayout:
    """Return the layout of a recording with what its channels are taken for: by kept layouts, the recipe, recognition.

    Parameters
    ----------
    recording : Recording
        As it was opened.
    settings : IntakeSettings
        They were used to open it.
    """
    fit = fit_of(recording, settings)
    before = _named(recording.channels)
    after = _named(settle_roles(recording.channels if fit is None else fit.channels, settings.channels))
    channels = {}
    for name, channel in after.items():
        said = _as_recorded(before[name])
        own = (channel.scale, channel.offset) == (said.file_scale, said.file_offset)
        answer = {"role": channel.role, "unit": channel.unit}
        channels[name] = said.model_copy(
            update=answer | ({} if own else {"scale": channel.scale, "offset": channel.offset})
        )
    used = {} if fit is None else settings.layouts[fit.name].model_dump(exclude={"reader", "arrangement", "channels"})
    binary = ("binary_type", "binary_order", "binary_header_byte", "binary_channels")
    if not used and recording.source.reader == "binary":
        used = {name: getattr(settings, name) for name in binary}
    layout = used.pop("layout", "auto")
    return KeptLayout(
        reader=recording.source.reader,
        arrangement=arrangement_of(recording.source.layout),
        layout=settings.layout if layout == "auto" else layout,
        channels=channels,
        **used,
    )


# -- fitting ----------------------------------------------------------------------------------------------------------


def _bare(name: str) -> str:
    """Return a channel's name without number and unit."""
    return stem_of(split_unit(name)[0] or name)


def _paired(kept: Iterable[str], seen: Iterable[str]) -> dict[str, str]:
    """Return seen -> kept name: the same, else the only ones of all that agree but for number, unit and case.

    Of inputs that are told apart by numbers ("AI0", "AI1") none is taken for another.
    """
    wanted, there = tuple(dict.fromkeys(kept)), tuple(dict.fromkeys(seen))
    pairs = {name: name for name in there if name in wanted}
    for form in (str.lower, _bare):
        left, right = _by_form(wanted, form), _by_form(there, form)
        for key, names in right.items():
            if len(names) == len(left.get(key, ())) == 1:
                pairs.setdefault(names[0], left[key][0])
    return pairs


def _by_form(names: Iterable[str], form: object) -> dict[str, list[str]]:
    found: dict[str, list[str]] = {}
    for name in names:
        found.setdefault(form(name), []).append(name)  # type: ignore[operator]
    return found


def differences(
    kept: KeptLayout, seen: KeptLayout, pieces: int, told: Mapping[str, ChannelRole] | None = None
) -> list[str]:
    """Return how a file differs from a kept layout, one sentence each; nothing where it fits.

    Parameters
    ----------
    kept : KeptLayout
    seen : KeptLayout
        The file: :func:`as_seen`, or what it would be kept as.
    pieces : int
        Of the recording.  In a single one nothing shows how several would stand.
    told : mapping, optional
        ``intake.channels`` of the recipe: what it names is stated anew, so that it cannot differ.
    """
    said, told = [], told or {}
    if kept.reader and kept.reader != seen.reader:
        said.append(f"it is read as {seen.reader}, not as {kept.reader}")
    one = pieces == 1 and "2D" not in seen.arrangement and "2D" not in kept.arrangement
    if kept.arrangement and kept.arrangement != seen.arrangement and not one:
        said.append(f"traces stand as '{seen.arrangement}', not as '{kept.arrangement}'")
    pairs = _paired(kept.channels, seen.channels)
    missing = [name for name in kept.channels if name not in pairs.values()]
    new = [name for name in seen.channels if name not in pairs and told_role(name, told) is None]
    if missing:
        said.append(f"it has no {_listed(missing)}")
    if new:
        said.append(f"it has {_listed(new)} besides")
    for name, of in pairs.items():
        if told_role(name, told) is None:
            said += _unlike(name, seen.channels[name], kept.channels[of], pieces > 1)
    return said


def _listed(names: Sequence[str]) -> str:
    shown = ", ".join(f"'{name}'" for name in names[:SHOWN])
    return f"{shown} and {len(names) - SHOWN} more" if len(names) > SHOWN else shown


def _unlike(name: str, seen: KeptChannel, kept: KeptChannel, several: bool) -> list[str]:
    """Return how a channel differs from the kept one of its name."""
    said = [_other_unit(name, seen.file_unit or "", kept)]
    if kept.role in MEASURED:
        said += [_other_scale(name, seen, kept)]
        if kept.numbers not in (None, seen.numbers):
            said.append(f"'{name}' holds {seen.numbers} numbers, not {kept.numbers} ones")
    if several and kept.shared not in (None, seen.shared):
        ways = ("has values of its own for each trace", "is one axis for all traces")
        said.append(f"'{name}' {ways[bool(seen.shared)]}: it was the other way")
    return [sentence for sentence in said if sentence]


def _other_unit(name: str, unit: str, kept: KeptChannel) -> str:
    wanted = kept.file_unit if kept.file_unit is not None else (kept.unit if unit else "")
    if _same_unit(unit, wanted):
        return ""
    if not unit:
        return f"'{name}' states no unit, where {wanted} was stated"
    return f"'{name}' is in {unit}, where {f'{wanted} was' if wanted else 'no unit was'} stated"


def _same_unit(one: str, other: str) -> bool:
    if one == other:
        return True
    if not (is_unit(one) and is_unit(other)):
        return False
    first, second = parse_unit(one), parse_unit(other)
    return first.dimension == second.dimension and abs(first.factor / second.factor - 1.0) < ROUNDING


def _other_scale(name: str, seen: KeptChannel, kept: KeptChannel) -> str:
    """Return how stored numbers are converted in another way; a file's own conversion may change where it was taken."""
    now, then = (seen.file_scale, seen.file_offset), (kept.file_scale, kept.file_offset)
    if kept.scale is None and kept.offset is None:
        if (now == (1.0, 0.0)) == (then == (1.0, 0.0)):
            return ""
    elif all(abs(a - b) <= ROUNDING * max(abs(a), abs(b)) for a, b in zip(now, then, strict=True)):
        return ""
    return f"'{name}' states {_conversion(*now)}, where it stated {_conversion(*then)}"


def _conversion(scale: float, offset: float) -> str:
    return "no scale" if (scale, offset) == (1.0, 0.0) else f"stored x {scale:g} + {offset:g}"


def nearest_fit(
    recording: Recording, layouts: Mapping[str, KeptLayout], told: Mapping[str, ChannelRole] | None = None
) -> list[Fit]:
    """Return the layouts that fit a recording, in their order; where none does, the one that comes nearest."""
    seen = as_seen(recording)
    compared = [
        Fit(name, tuple(differences(layout, seen, recording.pieces, told)), recording.channels)
        for name, layout in layouts.items()
    ]
    fitting = [replace(one, channels=_answered(recording, one.name, layouts[one.name])) for one in compared
               if not one.differences]  # fmt: skip
    return fitting or [min(compared, key=lambda one: len(one.differences))]


def fit_of(recording: Recording, settings: IntakeSettings) -> Fit | None:
    """Return the kept layout that a recording fits; None where none is in use and files are recognised.

    Raises
    ------
    LayoutError
        Where it fits none, saying how it differs from the nearest; or several that read it in different ways.
    """
    layouts = settings.layouts_in_use()
    if not layouts:
        return None
    found = nearest_fit(recording, layouts, settings.channels)
    best = found[0]
    where = recording.source.name
    if best.differences:
        others = "" if len(layouts) == 1 else "any kept layout; the nearest is "
        raise LayoutError(
            f"does not fit {others}layout '{best.name}': {'; '.join(best.differences)}",
            where,
            "read files of another layout apart, correct intake.layouts, or keep what this file is: "
            "meseta peek FILE --keep-layout NAME --recipe-out RECIPE",
            best.name,
            best.differences,
            as_seen(recording),
        )
    unlike = [one.name for one in found[1:] if not _means_the_same(one, best)]
    if unlike:
        raise LayoutError(
            f"fits layouts {_listed([best.name, *unlike])}, which read it in different ways",
            where,
            "choose one with intake.use_layout",
            best.name,
            (),
            as_seen(recording),
        )
    return best


def _means_the_same(one: Fit, other: Fit) -> bool:
    """Return whether two layouts that a recording fits read it alike."""
    return all(
        (a.role, a.scale, a.offset) == (b.role, b.scale, b.offset) and _same_unit(a.unit, b.unit)
        for a, b in zip(one.channels, other.channels, strict=True)
    )


def _answered(recording: Recording, name: str, layout: KeptLayout) -> tuple[RawChannel, ...]:
    """Return the channels with the answers of a layout that fits."""
    pairs = _paired(layout.channels, _named(recording.channels))
    return tuple(
        _with_answer(channel, name, layout.channels[pairs[own]]) if own in pairs else channel
        for own, channel in _named(recording.channels).items()
    )


def _with_answer(channel: RawChannel, name: str, answer: KeptChannel) -> RawChannel:
    if answer.unit and answer.role in MEASURED:
        parse_unit(answer.unit, f"intake.layouts, '{name}', '{channel.name}'")
    return replace(
        channel,
        role=answer.role,
        unit=answer.unit,
        scale=channel.scale if answer.scale is None else answer.scale,
        offset=channel.offset if answer.offset is None else answer.offset,
        ground=f"layout {name}",
        confidence=1.0,
        doubts=(),
    )


def answered_by(layout: KeptLayout, told: Mapping[str, ChannelRole]) -> list[str]:
    """Return the entries of ``intake.channels`` that a layout holds: those that name a channel of it."""
    return [key for key, role in told.items() if any(told_role(name, {key: role}) for name in layout.channels)]


def _answers_of(kept: KeptLayout, seen: KeptLayout) -> dict[str, ChannelRole]:
    """Return what a layout says of those channels of a file that are as they were, for ``intake.channels``."""
    found = {}
    for name, of in _paired(kept.channels, seen.channels).items():
        one = kept.channels[of]
        if not _unlike(name, seen.channels[name], one, several=False):
            scale, offset = (1.0 if one.scale is None else one.scale), (0.0 if one.offset is None else one.offset)
            found[name] = ChannelRole(role=one.role, unit=one.unit, scale=scale, offset=offset)
    return found


def recognised_anew(recipe: Recipe, seen: KeptLayout, name: str = "") -> Recipe:
    """Return a recipe with which a file that fits no layout is recognised anew, to be kept then.

    Parameters
    ----------
    recipe : Recipe
    seen : KeptLayout
        The file, as :class:`LayoutError` has it.
    name : str
        Of the layout to be corrected: what it says of channels that are as they were is taken over, so that nobody
        need repeat it; the rest is left to be recognised.
    """
    kept = recipe.intake.layouts.get(name)
    channels = ({} if kept is None else _answers_of(kept, seen)) | recipe.intake.channels
    plain = {key: one.model_dump() for key, one in channels.items()}
    return recipe.with_values("intake", use_layout=NO_LAYOUT, channels=plain)
