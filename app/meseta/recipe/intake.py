"""Section ``[intake]``: how files are understood."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import BaseModel, ConfigDict, model_validator

from meseta.recipe.fields import Section, setting
from meseta.recipe.kept_layouts import NO_LAYOUT, Arrangement, BinaryType, KeptLayout, check_layout_name
from meseta.recipe.roles import ROLES, Role

__all__ = ["ROLES", "ChannelRole", "IntakeSettings"]

_EXAMPLE = """\
[intake.layouts."rig 2"]
reader = "text"
arrangement = "columns"
[intake.layouts."rig 2".channels]
"Piezo (V)" = {role = "piezo", unit = "V", file_unit = "V"}
"Out (mV)" = {role = "amplifier", unit = "mV", file_unit = "mV"}
"Lab temp" = {role = "ignore"}"""


class ChannelRole(BaseModel):
    """What one channel or column of a recording is.

    ``role`` names the quantity, ``unit`` its unit as people write it ("nA", "V", "G0"), ``scale`` and ``offset``
    turn stored numbers into that unit: value = stored * scale + offset.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    role: Role
    unit: str = ""
    scale: float = 1.0
    offset: float = 0.0


class IntakeSettings(Section):
    """How files become channels."""

    channels: dict[str, ChannelRole] = setting(
        None,
        "Channels",
        "Channel or column name -> role, unit, scale, offset. What is not named here is recognised from names, "
        "attributes and unit rows; the file check says what was recognised and why. On top of a kept layout it "
        "corrects the channels that it names, or allows one more.",
        factory=dict,
    )
    reader: str | None = setting(
        None, "Reader", "Reader to use for every file.", unset="chosen by the content of each file"
    )
    layout: Arrangement = setting(
        "auto",
        "Layout",
        "How traces stand in a table: one file a trace, one column a trace (wide), stacked (long), or in the rows or "
        "columns of a 2D array.",
    )
    name_template: str | None = setting(
        None,
        "File-name template",
        "Metadata in file names, for example '{specimen}_{bias_mV}mV_{n}.csv'. The words become columns of the trace "
        "table.",
        unset="file names carry no metadata",
    )
    metadata_table: str | None = setting(
        None,
        "Metadata table",
        "CSV with one row a file: column 'file', any other columns.",
        unset="no table",
    )
    binary_type: BinaryType | None = setting(
        None, "Binary: numbers", "Type of the numbers in a file without a header.", unset="no headerless file is read"
    )
    binary_order: Literal["little", "big"] = setting(
        "little", "Binary: byte order", "'little' for files written on common computers."
    )
    binary_header_byte: int = setting(
        0, "Binary: header", "Bytes before the numbers; they are passed over.", unit="bytes", ge=0
    )
    binary_channels: list[str] = setting(
        None,
        "Binary: channels",
        "Names of the channels that take turns from number to number; what they are is said under Channels.",
        factory=list,
    )
    specimen: str | None = setting(
        None, "Specimen", "Device, tip or chip of all files.", unset="taken from metadata, else unknown"
    )
    session: str | None = setting(
        None, "Session", "Measuring session of all files.", unset="taken from metadata, else unknown"
    )
    use_layout: str | None = setting(
        None,
        "Kept layout to use",
        "Name of the kept layout that every file must fit; 'none' recognises every file anew.",
        unset="the kept layout that a file fits; without kept layouts, files are recognised",
    )
    layouts: dict[str, KeptLayout] = setting(
        None,
        "Kept layouts",
        "Name -> what files of one origin are: reader, arrangement, and every channel with role, unit, scale, offset "
        "and what the file itself states. Where there are any, each file must fit one: one that does not is an error "
        "that says how it differs. Kept by `meseta peek FILE --keep-layout NAME --recipe-out RECIPE` and by the file "
        "check of the window. Gain, bias and other constants are no part of it; they stay under [calibration].",
        factory=dict,
        example=_EXAMPLE,
    )

    @model_validator(mode="after")
    def _layouts_named(self) -> Self:
        for name in self.layouts:
            check_layout_name(name)
        used = self.use_layout
        if used not in (None, NO_LAYOUT) and used not in self.layouts:
            known = ", ".join(f"'{name}'" for name in self.layouts) or "none is kept"
            raise ValueError(f"use_layout: there is no layout '{used}' among the kept ones ({known})")
        return self

    def layouts_in_use(self) -> dict[str, KeptLayout]:
        """Return the kept layouts of which every file must fit one; empty where files are recognised."""
        if self.use_layout is None:
            return self.layouts
        return {} if self.use_layout == NO_LAYOUT else {self.use_layout: self.layouts[self.use_layout]}
