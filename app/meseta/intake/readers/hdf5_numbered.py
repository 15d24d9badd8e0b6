"""Numbered datasets of a file like HDF5: one dataset a trace."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Final

from natsort import natsorted

from meseta.intake.meaning.roles import SIGNAL_ROLES, guess_role, stem_of
from meseta.intake.readers.hdf5_leaves import Leaf
from meseta.intake.readers.hdf5_sheets import Sheet, joined_leaves

__all__ = ["numbered_sheet"]

_CHANNEL_STEMS: Final = frozenset(
    {
        "ch",
        "chan",
        "channel",
        "channels",
        "ai",
        "adc",
        "input",
        "col",
        "column",
        "analog",
        "var",
        "signal",
        "amp",
        "gain",
    }
)


def numbered_sheet(parent: str, leaves: Sequence[Leaf]) -> Sheet | None:
    """Return the sheet of a group whose datasets are numbered traces; None where they are not.

    Several numbered sets ("G_001", "z_001") are channels of the same traces where their numbers agree.
    """
    sets: dict[str, dict[str, Leaf]] = {}
    for leaf in leaves:
        if leaf.is_vector and leaf.length > 1:
            stem = "" if leaf.name.isdigit() else stem_of(leaf.name)
            sets.setdefault(stem, {})[leaf.name] = leaf
    chosen = {stem: found for stem, found in sets.items() if _are_traces(stem, found)}
    if not chosen:
        return None
    context = parent.rpartition("/")[2]
    columns = {_best_name(stem, context): [found[name] for name in natsorted(found)] for stem, found in chosen.items()}
    return joined_leaves("one dataset a trace", columns, context)


def _best_name(stem: str, context: str) -> str:
    """Return what says more of numbered datasets: their own name, or that of the group they lie in."""
    if not stem or (guess_role(context).role in SIGNAL_ROLES and guess_role(stem).role not in SIGNAL_ROLES):
        return context
    return stem


def _are_traces(stem: str, found: Mapping[str, Leaf]) -> bool:
    if len(found) < 2 or stem in _CHANNEL_STEMS:
        return False
    if not stem:
        return True
    numbers = [name for name in found if name[-1:].isdigit() or name.endswith(")")]
    exact = {guess_role(name).role for name in found}
    return len(numbers) == len(found) and not (len(exact) == len(found) > 1)
