"""What a run prints of the physics of its peaks."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from meseta import typeset

__all__ = ["spread_lines"]


def spread_lines(spread: Sequence[dict[str, Any]]) -> list[str]:
    """Return, one line a peak, what all defensible analyses gave.

    Parameters
    ----------
    spread : sequence of dict
        ``summary["all_analyses"]``.
    """
    lines = []
    for row in spread:
        low, high, lowest, highest, chosen = (
            math.nan if row[name] is None else float(row[name])
            for name in ("low_g0", "high_g0", "lowest_g0", "highest_g0", "chosen_g0")
        )
        lines.append(
            f"peak {row['peak']}: {typeset.conductance(chosen, 4)} as chosen; {row['analyses']} analyses can be "
            f"defended, nine tenths {typeset.interval(low, high, 'G0', 4)}, all "
            f"{typeset.interval(lowest, highest, 'G0', 4)}"
        )
    return lines
