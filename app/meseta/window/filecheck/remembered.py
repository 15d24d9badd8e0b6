"""Layouts of files that were kept lately, in the user's settings, so that the next new study can begin with them."""

from __future__ import annotations

import json
from collections.abc import Mapping

from pydantic import ValidationError
from PySide6.QtCore import QSettings

from meseta.recipe.kept_layouts import KeptLayout, check_layout_name

__all__ = ["RememberedLayouts"]

KEPT = 30
_KEY = "layouts"


class RememberedLayouts:
    """Kept layouts by name, those used last at the end."""

    def __init__(self, settings: QSettings) -> None:
        self._settings = settings

    def entries(self) -> dict[str, KeptLayout]:
        """Return what is remembered; what cannot be understood is left out."""
        try:
            stored = json.loads(str(self._settings.value(_KEY, "{}")))
        except ValueError:
            return {}
        found = {}
        for name, plain in stored.items() if isinstance(stored, dict) else ():
            try:
                found[check_layout_name(name)] = KeptLayout.model_validate(plain)
            except (ValidationError, ValueError):
                continue  # written by another version
        return found

    def add(self, layouts: Mapping[str, KeptLayout]) -> None:
        """Remember layouts that were used."""
        if layouts:
            self._store({name: one for name, one in self.entries().items() if name not in layouts} | dict(layouts))

    def forget(self, name: str) -> None:
        """Remember a layout no longer."""
        self._store({other: one for other, one in self.entries().items() if other != name})

    def _store(self, layouts: Mapping[str, KeptLayout]) -> None:
        latest = dict(list(layouts.items())[-KEPT:])
        plain = {name: one.model_dump(mode="json", exclude_defaults=True) for name, one in latest.items()}
        self._settings.setValue(_KEY, json.dumps(plain))
