"""Layouts of files that are kept under a name: what the user answered, and what the file itself said then."""

from __future__ import annotations

from typing import Any, Literal

import tomlkit
from pydantic import BaseModel, ConfigDict

from meseta.recipe.roles import Role

__all__ = ["NO_LAYOUT", "Arrangement", "BinaryType", "KeptChannel", "KeptLayout", "check_layout_name", "layout_table"]

NO_LAYOUT = "none"
"""``intake.use_layout`` where kept layouts are left aside."""
LONGEST_NAME = 80
Arrangement = Literal["auto", "one_trace_a_file", "wide", "long", "rows", "columns"]
BinaryType = Literal["int16", "int32", "uint16", "float32", "float64"]


class KeptChannel(BaseModel):
    """One channel of a kept layout.

    ``role``, ``unit``, ``scale`` and ``offset`` are the answer: value = stored * scale + offset, in ``unit``.  Scale
    and offset that are not set are those that the file itself states, 1 and 0 where it states none.  The rest is what
    the file said when the layout was kept; a file that says something else does not fit any more.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    role: Role
    unit: str = ""
    scale: float | None = None
    offset: float | None = None
    file_unit: str | None = None
    """Unit that the file stated, empty where it stated none; not set, a file that states one must state ``unit``."""
    file_scale: float = 1.0
    file_offset: float = 0.0
    numbers: Literal["whole", "real"] | None = None
    """Stored as whole or as real numbers; not set, both fit."""
    shared: bool | None = None
    """Whether it is one axis for all traces; not set, both fit."""


class KeptLayout(BaseModel):
    """What files of one origin are: every channel that they have, and how traces stand in them.

    ``reader`` and ``arrangement`` (in words, as the file check gives them) are empty where any fits.  ``layout`` and
    the ``binary_`` settings are those of the ``[intake]`` section that the files are read with.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    reader: str = ""
    arrangement: str = ""
    layout: Arrangement = "auto"
    binary_type: BinaryType | None = None
    binary_order: Literal["little", "big"] = "little"
    binary_header_byte: int = 0
    binary_channels: list[str] = []
    channels: dict[str, KeptChannel] = {}


def check_layout_name(name: str) -> str:
    """Return a name under which a layout may be kept.

    Raises
    ------
    ValueError
        Where it is empty, too long, of several lines, or the word that stands for no layout.
    """
    plain = " ".join(name.split())
    if not plain or plain != name or len(name) > LONGEST_NAME or not name.isprintable() or name == NO_LAYOUT:
        raise ValueError(f"'{plain[:LONGEST_NAME]}' is no name for a layout: one line, and not '{NO_LAYOUT}'")
    return name


def layout_table(layout: KeptLayout) -> Any:
    """Return a layout as a TOML table: its own settings, then one line a channel; defaults are left out."""
    table = tomlkit.table()
    for name, value in layout.model_dump(exclude={"channels"}, exclude_defaults=True).items():
        table[name] = value
    channels = tomlkit.table()
    for name, channel in layout.channels.items():
        line = tomlkit.inline_table()
        line.update(channel.model_dump(exclude_defaults=True))
        channels[name] = line
    table["channels"] = channels
    return table
