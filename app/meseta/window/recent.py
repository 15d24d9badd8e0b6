"""The files opened lately."""

from __future__ import annotations

import json
from pathlib import Path

from PySide6.QtCore import QSettings

__all__ = ["RecentFiles"]

KEPT = 10


class RecentFiles:
    """A short list of what was opened, the latest first."""

    def __init__(self, settings: QSettings) -> None:
        self._settings = settings

    def entries(self) -> list[list[str]]:
        """Return the paths of each opening."""
        try:
            stored = json.loads(str(self._settings.value("recent", "[]")))
        except ValueError:
            return []
        return [[str(path) for path in paths] for paths in stored if isinstance(paths, list) and paths]

    def add(self, paths: list[str]) -> None:
        """Put an opening at the top."""
        absolute = [str(Path(path).absolute()) for path in paths][:200]
        entries = [absolute, *(other for other in self.entries() if other != absolute)]
        self._settings.setValue("recent", json.dumps(entries[:KEPT]))

    @staticmethod
    def title(paths: list[str]) -> str:
        """Return an entry as the menu shows it."""
        first = Path(paths[0])
        more = f" and {len(paths) - 1} more" if len(paths) > 1 else ""
        return f"{first.name}{more}    {first.parent}"
