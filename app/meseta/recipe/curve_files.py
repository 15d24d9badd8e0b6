"""Measured amplifier curves in files of two columns, volts and ampere, read once into a recipe."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any, Final

from meseta.errors import RecipeError

__all__ = ["read_curve", "with_curves_read"]

LARGEST_BYTE: Final = 1 << 20
UNITS: Final = ("V", "A", "volt", "volts", "ampere", "amperes")


def read_curve(path: Path) -> list[tuple[float, float]]:
    """Return the points of a curve file: two numbers a line, apart by commas, semicolons, tabs or spaces.

    Lines that begin with ``#`` and lines without numbers before the first point are passed over; units in brackets
    there must be V and A, as nothing is converted.

    Raises
    ------
    RecipeError
        Where the file cannot be read or a line is no point.
    """
    where = str(path)
    try:
        if path.stat().st_size > LARGEST_BYTE:
            raise RecipeError("is too large for an amplifier curve", where, "give at most a few thousand points")
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise RecipeError(f"cannot be read ({error.strerror})", where, "check the path of the curve") from error
    except UnicodeDecodeError as error:
        raise RecipeError("is not a text file in UTF-8", where, "a curve has two columns, volts and ampere") from error
    points: list[tuple[float, float]] = []
    for number, line in enumerate(text.splitlines(), 1):
        cells = [cell for cell in re.split(r"[\s,;]+", line.strip()) if cell]
        if not cells or cells[0].startswith("#"):
            continue
        try:
            volt, ampere = (float(cell) for cell in cells)
        except ValueError:
            if points:
                raise RecipeError(
                    f"line {number} is not two numbers: {line.strip()[:40]!r}", where, "give volts and ampere in a line"
                ) from None
            _check_units(line, where)
            continue
        points.append((volt, ampere))
    if not points:
        raise RecipeError("holds no points", where, "give volts and ampere in a line")
    return points


def _check_units(heading: str, where: str) -> None:
    for unit in re.findall(r"[\[(]\s*([^\s\])]+)\s*[\])]", heading):
        if unit not in UNITS:
            raise RecipeError(f"its unit '{unit}' is neither V nor A", where, "write volts and ampere")


def with_curves_read(document: dict[str, Any], folder: Path) -> dict[str, Any]:
    """Return a recipe's plain values with the file named as ``calibration.amplifier_curve`` read into it.

    Only for recipes that the user hands over; a recipe out of a study never opens a file.
    """
    section = document.get("calibration")
    if not isinstance(section, dict) or not isinstance(named := section.get("amplifier_curve"), str):
        return document
    return {**document, "calibration": {**section, "amplifier_curve": read_curve(folder / named)}}
