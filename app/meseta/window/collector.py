"""Cyclic garbage is collected on the window's thread alone, a little at a time, and thoroughly when nothing runs.

A collection that a worker sets off stops every thread for as long as it looks at all lasting objects, a tenth of a
second or more while ten thousand files are read; and a widget must never be destroyed from another thread.
"""

from __future__ import annotations

import gc

from PySide6.QtCore import QObject, QTimer

from meseta.window.jobs import JobRunner

__all__ = ["Collector"]

LOOK_EVERY_MS = 250
YOUNG = 2_000
"""So many new objects are worth a look."""
ROUNDS = 40
"""So many looks at the young pass before all are looked at, and then only when nothing runs."""


class Collector(QObject):
    """Takes over from the interpreter's own collector until it is closed."""

    def __init__(self, jobs: JobRunner) -> None:
        super().__init__(jobs)
        self._jobs, self._rounds = jobs, 0
        self._timer = QTimer(self)
        self._timer.setInterval(LOOK_EVERY_MS)
        self._timer.timeout.connect(self._look)
        self._timer.start()
        gc.disable()

    def _look(self) -> None:
        if gc.get_count()[0] >= YOUNG:
            gc.collect(0)
            self._rounds += 1
        if self._rounds >= ROUNDS and not self._jobs.busy:
            self._rounds = 0
            gc.collect()

    def close(self) -> None:
        """Hand back to the interpreter's own collector."""
        self._timer.stop()
        gc.enable()
