"""Symbol and colour of groups, and how a new group is made."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from meseta.colours import GROUPS
from meseta.window.session import Session

if TYPE_CHECKING:
    from meseta.selection import Decisions

__all__ = ["symbol_of", "with_new_group"]


def symbol_of(session: Session, name: str) -> str:
    """Return the character that stands for a group."""
    group = session.document.decisions.groups.get(name)
    characters = {style.symbol: style.character for style in GROUPS}
    return characters.get(group.symbol, "●") if group is not None else "●"


def with_new_group(session: Session, name: str, mask: npt.NDArray[np.bool_]) -> Decisions:
    """Return the decisions with a group of the traces in a mask, in the next free style."""
    traces, decisions = session.traces, session.document.decisions
    members = [] if traces is None else traces.identities(np.flatnonzero(mask))
    taken = {group.symbol for other, group in decisions.groups.items() if other != name}
    style = next((one for one in GROUPS if one.symbol not in taken), GROUPS[len(decisions.groups) % len(GROUPS)])
    return decisions.with_group(name, members, style.light, style.symbol)
