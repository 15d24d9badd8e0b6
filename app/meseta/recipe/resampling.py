"""Section ``[resampling]``: where intervals come from."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["ResamplingSettings"]


class ResamplingSettings(Section):
    """Bootstrap over what was replicated."""

    replicates: int = setting(1000, "Replicates", "Number of resampled data sets.", ge=20, le=100000)
    seed: int = setting(1, "Seed", "Of the random numbers; the same seed gives the same interval.", ge=0)
    scheme: Literal["auto", "traces", "blocks", "specimens", "sessions"] = setting(
        "auto",
        "Resample",
        "'auto': whole specimens where there are 5 or more, else moving blocks of traces; 'sessions': whole sessions; "
        "'traces': independent traces (too narrow on a record with memory).",
    )
    block_traces: int | None = setting(
        None, "Block length", "Consecutive traces a block.", unit="traces", ge=1, unset="from the data"
    )
