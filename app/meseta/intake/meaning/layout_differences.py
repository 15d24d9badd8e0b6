"""How a file differs from a kept layout, in sentences."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Final

from meseta.intake.meaning.roles import MEASURED, split_unit, stem_of, told_role
from meseta.intake.meaning.units import is_unit, parse_unit
from meseta.recipe.intake import ChannelRole
from meseta.recipe.kept_layouts import KeptChannel, KeptLayout

__all__ = ["differences", "listed", "paired", "same_unit", "unlike"]

SHOWN: Final = 6
"""Names that a sentence lists at most."""
ROUNDING: Final = 1e-9
"""Two scales or units are the same where they agree to this share."""


def _bare(name: str) -> str:
    """Return a channel's name without number and unit."""
    return stem_of(split_unit(name)[0] or name)


def paired(kept: Iterable[str], seen: Iterable[str]) -> dict[str, str]:
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


def _by_form(names: Iterable[str], form: Callable[[str], str]) -> dict[str, list[str]]:
    found: dict[str, list[str]] = {}
    for name in names:
        found.setdefault(form(name), []).append(name)
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
    pairs = paired(kept.channels, seen.channels)
    missing = [name for name in kept.channels if name not in pairs.values()]
    new = [name for name in seen.channels if name not in pairs and told_role(name, told) is None]
    if missing:
        said.append(f"it has no {listed(missing)}")
    if new:
        said.append(f"it has {listed(new)} besides")
    for name, of in pairs.items():
        if told_role(name, told) is None:
            said += unlike(name, seen.channels[name], kept.channels[of], pieces > 1)
    return said


def listed(names: Sequence[str]) -> str:
    """Return names as a sentence lists them; of many the first few."""
    shown = ", ".join(f"'{name}'" for name in names[:SHOWN])
    return f"{shown} and {len(names) - SHOWN} more" if len(names) > SHOWN else shown


def unlike(name: str, seen: KeptChannel, kept: KeptChannel, several: bool) -> list[str]:
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
    if same_unit(unit, wanted):
        return ""
    if not unit:
        return f"'{name}' states no unit, where {wanted} was stated"
    return f"'{name}' is in {unit}, where {f'{wanted} was' if wanted else 'no unit was'} stated"


def same_unit(one: str, other: str) -> bool:
    """Return whether two texts are the same unit, however they write it."""
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
