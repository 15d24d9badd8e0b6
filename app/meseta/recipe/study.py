"""Section ``[study]``: what the study file holds."""

from __future__ import annotations

from meseta.recipe.fields import Section, setting

__all__ = ["StudySettings"]


class StudySettings(Section):
    """Recordings in the study file."""

    copy_below_megabyte: float = setting(
        200.0,
        "Copy recordings below",
        "Recordings that are smaller than this in all are copied into the study, as recorded. Larger ones are linked: "
        "the study knows their names and checksums, and finds them in the folder that you point to.",
        unit="MB",
        ge=0,
    )
