"""Shared by all tests: the engine's tests run in a Python that cannot import Qt."""

from __future__ import annotations

import importlib.abc
import os
import sys

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "meseta", deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow], max_examples=60
)
settings.load_profile("meseta")


class _NoQt(importlib.abc.MetaPathFinder):
    """Refuses to find any Qt binding, as on a machine where none is installed."""

    def find_spec(self, name, path=None, target=None):
        if name.partition(".")[0] in {"PySide6", "PyQt6", "PyQt5", "PySide2", "pyqtgraph", "qtpy"}:
            raise ModuleNotFoundError(f"{name} is not importable in the engine's tests", name=name)


if os.environ.get("MESETA_WITHOUT_QT"):
    sys.meta_path.insert(0, _NoQt())


@pytest.fixture
def quiet_work():
    """Return a Work of one thread and small blocks, so that several blocks are always exercised."""
    from meseta.work import Work

    return Work(threads=1, block_samples=20_000)
