"""Section ``[intake]``: how files are understood."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict

from meseta.recipe.fields import Section, setting

__all__ = ["ROLES", "ChannelRole", "IntakeSettings"]

Role = Literal[
    "conductance",
    "log_conductance",
    "current",
    "voltage",
    "amplifier",
    "amplifier_high_gain",
    "resistance",
    "displacement",
    "piezo",
    "time",
    "bias",
    "range_code",
    "trace_number",
    "trigger",
    "phase",
    "other",
    "ignore",
]
ROLES: tuple[str, ...] = Role.__args__  # type: ignore[attr-defined]


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
        "attributes and unit rows; the file check says what was recognised and why.",
        factory=dict,
    )
    reader: str | None = setting(
        None, "Reader", "Reader to use for every file.", unset="chosen by the content of each file"
    )
    layout: Literal["auto", "one_trace_a_file", "wide", "long", "rows", "columns"] = setting(
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
    binary_type: Literal["int16", "int32", "uint16", "float32", "float64"] | None = setting(
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
