"""Where icons, figure styles, recipes, help and the bundled recordings lie, in a checkout or installed."""

from __future__ import annotations

import importlib.resources
from pathlib import Path

__all__ = ["resource", "sample"]


def _folder(name: str) -> Path:
    checkout = Path(__file__).parents[2] / name
    if (checkout.parent / "pyproject.toml").exists() and checkout.is_dir():
        return checkout
    return Path(str(importlib.resources.files("meseta") / name))


def resource(*parts: str) -> Path:
    """Return the path of a file in ``resources/``."""
    return _folder("resources").joinpath(*parts)


def sample(*parts: str) -> Path:
    """Return the path of a bundled recording in ``sample_traces/``."""
    return _folder("sample_traces").joinpath(*parts)
