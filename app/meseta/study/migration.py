"""From older schemas to the present one, one step at a time; each step is a function of the open file."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping

import h5py
import numpy as np

from meseta.study.columns import write_array, write_attribute, write_text
from meseta.study.strict import group, read_array, read_text

__all__ = ["migrate"]


def migrate(root: h5py.Group, schema: int, target: int) -> None:
    """Bring a study from ``schema`` to ``target``, step by step."""
    for number in range(schema, target):
        _STEPS[number](root)
        root.attrs["schema"] = number + 1


def _tables_for_decisions(root: h5py.Group) -> None:
    """Bring schema 1 to 2: decisions as tables, history, how recordings are kept, versions."""
    from meseta.recipe import Recipe
    from meseta.selection import Decisions
    from meseta.study.history import History
    from meseta.study.parts import FROM_RAW, write_decisions, write_history

    decisions = Decisions.parse(json.loads(read_text(root, "decisions")))
    del root["decisions"]
    write_decisions(root, decisions)
    write_history(root, History.begun("study of schema 1"))
    write_text(root, "versions", json.dumps({"meseta": str(root.attrs["written_by"])}))
    write_attribute(root, "made", "")
    sources = group(root, "sources")
    write_array(sources, "raw", np.full(len(read_array(sources, "name")), "none"))
    recipe = Recipe.parse(read_text(root, "recipe"))
    write_attribute(group(root, "traces"), "recipe_key", recipe.key(FROM_RAW))


_STEPS: Mapping[int, Callable[[h5py.Group], None]] = {1: _tables_for_decisions}
