"""What a channel of a recording may be."""

from __future__ import annotations

from typing import Literal

__all__ = ["ROLES", "Role"]

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
