"""Kept layouts: whether a file still is what the user said files like it are, and if not, how it differs."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import cast

from meseta.errors import InputError
from meseta.intake.meaning.layout_differences import differences, listed, paired, same_unit, unlike
from meseta.intake.meaning.roles import MEASURED, settle_roles, told_role
from meseta.intake.meaning.units import parse_unit
from meseta.intake.recording import RawChannel, Recording
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
    "fit_of",
    "kept_layout",
    "nearest_fit",
    "recognised_anew",
]


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
            f"fits layouts {listed([best.name, *unlike])}, which read it in different ways",
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
        (a.role, a.scale, a.offset) == (b.role, b.scale, b.offset) and same_unit(a.unit, b.unit)
        for a, b in zip(one.channels, other.channels, strict=True)
    )


def _answered(recording: Recording, name: str, layout: KeptLayout) -> tuple[RawChannel, ...]:
    """Return the channels with the answers of a layout that fits."""
    pairs = paired(layout.channels, _named(recording.channels))
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
    for name, of in paired(kept.channels, seen.channels).items():
        one = kept.channels[of]
        if not unlike(name, seen.channels[name], one, several=False):
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
