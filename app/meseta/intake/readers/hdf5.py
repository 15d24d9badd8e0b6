"""HDF5 files of any nesting, MAT v7.3 among them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path
from typing import Any, Final

import numpy as np
from natsort import natsorted

from meseta.errors import InputError
from meseta.intake.meaning.metadata import Plain, canonical, canonical_entry, plain_value
from meseta.intake.meaning.roles import SIGNAL_ROLES
from meseta.intake.readers.contents import Contents, channel_constants, columns_of, make_channel
from meseta.intake.readers.hdf5_frames import without_frames
from meseta.intake.readers.hdf5_layout import sheet_of
from meseta.intake.readers.hdf5_leaves import Leaf, leaves_of
from meseta.intake.readers.hdf5_numbered import numbered_sheet
from meseta.intake.readers.hdf5_sheets import Sheet, joined_leaves, joined_sheets
from meseta.intake.readers.hdf5_tree import Tree, open_file, walk
from meseta.intake.recording import RawChannel
from meseta.recipe.intake import IntakeSettings

__all__ = ["Hdf5Reader", "understood"]

_VERSIONS: Final = (
    "raw", "filtered", "smoothed", "processed", "calibrated", "corrected", "analysis", "analysed", "analyzed",
    "results", "backup", "copy",
)  # fmt: skip
"""Words of a path that say that it holds other versions of the same samples."""
_SIGNATURE: Final = b"\x89HDF\r\n\x1a\n"


class Hdf5Reader:
    """Reads HDF5 files."""

    name = "HDF5"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the signature stands where the format allows it (0, 512, 1024, 2048 ...)."""
        return any(head[at : at + 8] == _SIGNATURE for at in (0, 512, 1024, 2048, 4096, 8192))

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the content of the file; samples are read from it block by block."""
        try:
            with ExitStack() as stack:
                file = open_file(path)
                stack.callback(file.close)
                tree = walk(file, path)
                stack.callback(tree.close)
                contents = understood(without_frames(tree), path, settings)
                return replace(contents, close=stack.pop_all().close)
        except (OSError, RuntimeError) as error:
            raise InputError(
                f"is damaged ({str(error)[:80]})", str(path), "copy the file again from its origin"
            ) from error


def understood(tree: Tree, path: Path, settings: IntakeSettings) -> Contents:
    """Return how traces stand in a tree of named arrays, whatever the file that they came from.

    Raises
    ------
    InputError
        Where it holds no samples.
    """
    leaves = [leaf for node in tree.nodes for leaf in leaves_of(node, settings.channels)]
    by_parent: dict[str, list[Leaf]] = {}
    for leaf in leaves:
        by_parent.setdefault(leaf.parent, []).append(leaf)
    sheet, parents = _best_sheet(by_parent, settings.layout)
    if sheet is None or not sheet.channels:
        reason = f" ({tree.refused[0]})" if tree.refused else ""
        raise InputError(f"holds no samples that can be read{reason}", str(path), "see `meseta peek` on another file")
    doubts = [*tree.refused, *sheet.doubts, *_left_out(by_parent, parents, sheet.layout)]
    channels, constants, channel_doubts = _channels(sheet, path)
    metadata, more = _metadata(tree, parents, path)
    rows = _piece_rows(tree, parents, sheet, path)
    texts = {name.rpartition("/")[2]: text for name, text in tree.texts.items() if len(text) == len(sheet.names)}
    table = {**_canonical_table({**texts, **sheet.table}, path), **columns_of(rows)}
    return Contents(
        layout=f"{sheet.layout}, {len(sheet.names)} piece{'s' if len(sheet.names) > 1 else ''}",
        channels=channels,
        offsets=sheet.offsets,
        record_start=sheet.starts,
        dataset=np.array(sheet.names, np.str_),
        metadata={**metadata, **constants},
        table=table,
        doubts=tuple(dict.fromkeys([*doubts, *channel_doubts, *more])),
    )


def _best_sheet(by_parent: Mapping[str, Sequence[Leaf]], layout: str) -> tuple[Sheet | None, list[str]]:
    """Return the sheet that explains most samples, and the groups it is made of.

    Numbered datasets are traces, unless nothing says what they are and datasets of other groups do say so.
    """
    numbered = {parent: found for parent, leaves in by_parent.items() if (found := numbered_sheet(parent, leaves))}
    if not numbered:
        return _not_numbered(by_parent, layout)
    traces = _numbered(numbered, by_parent)
    if traces[0] is None or _has_signal(traces[0]):
        return traces
    others = {parent: leaves for parent, leaves in by_parent.items() if parent not in numbered}
    other = _not_numbered(others, layout)
    return other if other[0] is not None and _has_signal(other[0]) else traces


def _not_numbered(by_parent: Mapping[str, Sequence[Leaf]], layout: str) -> tuple[Sheet | None, list[str]]:
    everywhere = [leaf for leaves in by_parent.values() for leaf in leaves if leaf.may_cut and leaf.is_vector]
    sheets = {
        parent: found for parent, leaves in by_parent.items() if (found := sheet_of(parent, leaves, layout, everywhere))
    }
    families: dict[tuple[int, str, frozenset[str]], list[str]] = {}
    for parent, sheet in sheets.items():
        names = frozenset(channel[0] for channel in sheet.channels)
        families.setdefault((parent.count("/"), _version_of(parent), names), []).append(parent)
    if not families:
        return None, []

    parents = natsorted(max(families.values(), key=lambda members: _weight([sheets[one] for one in members])))
    if len(parents) == 1:
        return sheets[parents[0]], parents
    layout_text = "one group a trace" if all(len(sheets[p].names) == 1 for p in parents) else "several groups"
    return joined_sheets([sheets[parent] for parent in parents], layout_text), parents


def _version_of(parent: str) -> str:
    """Return the word of a path that says that it holds another version of the same samples; empty without one."""
    return next((word for word in parent.lower().split("/") if word in _VERSIONS), "")


def _weight(sheets: Sequence[Sheet]) -> tuple[int, int]:
    """Return how much groups with the same channels explain: channels with a known role, then samples."""
    known = sum(_says_something(channel) for channel in sheets[0].channels)
    return known, sum(int(sheet.offsets[-1]) for sheet in sheets)


def _says_something(channel: tuple[Any, ...]) -> bool:
    return _role_of(channel) != "other"


def _has_signal(sheet: Sheet) -> bool:
    """Return whether a channel is known to be conductance, current, or the like."""
    return any(_role_of(channel) in SIGNAL_ROLES for channel in sheet.channels)


def _role_of(channel: tuple[Any, ...]) -> str:
    name, samples, dtype, attributes, _, context = channel
    return make_channel(name, samples, dtype, attributes, context=context).role


def _numbered(numbered: Mapping[str, Sheet], by_parent: Mapping[str, Sequence[Leaf]]) -> tuple[Sheet | None, list[str]]:
    """Return numbered datasets as traces; groups with the same numbers are channels of the same traces."""
    parents = natsorted(numbered)
    if len(parents) == 1:
        return numbered[parents[0]], parents
    columns = {
        parent.rpartition("/")[2]: [leaf for _, leaf in natsorted((leaf.name, leaf) for leaf in by_parent[parent])]
        for parent in parents
    }
    names = [[leaf.name for leaf in leaves] for leaves in columns.values()]
    if all(one == names[0] for one in names) and all(len(numbered[p].channels) == 1 for p in parents):
        return joined_leaves("one dataset a trace, one group a channel", columns, ""), parents
    alike = [
        p for p in parents if [c[0] for c in numbered[p].channels] == [c[0] for c in numbered[parents[0]].channels]
    ]
    return joined_sheets([numbered[p] for p in alike], "one dataset a trace, several groups"), alike


def _left_out(by_parent: Mapping[str, Sequence[Leaf]], parents: Sequence[str], layout: str) -> list[str]:
    """Return what no channel is made of, but for what the layout names as what traces are cut by."""
    names = [
        f"{leaf.parent}/{leaf.name}"
        for parent, leaves in by_parent.items()
        for leaf in leaves
        if parent not in parents and f"'{leaf.name}'" not in layout
    ]
    if not names:
        return []
    shown = ", ".join(names[:5]) + (" ..." if len(names) > 5 else "")
    return [f"not used: {shown}"]


def _channels(sheet: Sheet, path: Path) -> tuple[tuple[RawChannel, ...], dict[str, Plain], list[str]]:
    """Return the channels, the constants among their attributes, and the doubts about those."""
    made, constants, doubts = [], {}, []
    for name, samples, dtype, attributes, shared, context in sheet.channels:
        channel = make_channel(name, samples, dtype, attributes, context=context, shared=shared)
        made.append(channel)
        found, uncertain = channel_constants(attributes, f"{path}, {name}")
        if channel.role == "amplifier_high_gain":
            renamed = {"gain_volt_per_ampere": "high_gain_volt_per_ampere", "offset_volt": "high_gain_offset_volt"}
            found = {renamed.get(key, key): value for key, value in found.items()}
        constants.update({key: value for key, value in found.items() if key not in sheet.table})
        doubts += uncertain
    return tuple(made), constants, doubts


def _metadata(tree: Tree, parents: Sequence[str], path: Path) -> tuple[dict[str, Plain], list[str]]:
    """Return attributes of the groups above the channels, and single values beside them."""
    above: dict[str, Any] = {}
    for parent in _common_ancestors(parents):
        above.update(tree.attributes.get(parent, {}))
    aside = {
        name.rpartition("/")[2]: value
        for name, value in tree.values.items()
        if len(parents) == 1 or not any(name.startswith(f"{parent}/") for parent in parents)
    }
    for group, attributes in tree.attributes.items():
        if group.rpartition("/")[2].lower() in (
            "metadata",
            "meta",
            "parameters",
            "settings",
            "info",
            "calibration",
            "setup",
        ):
            above.update(attributes)
    return canonical({**above, **aside}, str(path))


def _common_ancestors(parents: Sequence[str]) -> list[str]:
    """Return the groups that lie above (or are) all of the parents, the root first."""
    first = parents[0].split("/")
    chains = ["/".join(first[:depth]) for depth in range(1, len(first) + 1)]
    return [chain for chain in chains if all(p == chain or p.startswith(f"{chain}/") for p in parents)]


def _piece_rows(tree: Tree, parents: Sequence[str], sheet: Sheet, path: Path) -> list[dict[str, Plain]]:
    """Return what each group, and those above it that are not above all, say of the pieces in it."""
    if len(parents) < 2 or len(parents) != len(sheet.pieces_of):
        return []
    singles: dict[str, dict[str, Any]] = {}
    for name, value in tree.values.items():
        parent, _, leaf = name.rpartition("/")
        singles.setdefault(parent, {})[leaf] = value
    common = set(_common_ancestors(parents))
    rows = []
    for parent, count in zip(parents, sheet.pieces_of, strict=True):
        words = parent.split("/")
        chain = [step for n in range(len(words)) if (step := "/".join(words[: n + 1])) not in common]
        said = [{**tree.attributes.get(step, {}), **singles.get(step, {})} for step in chain]
        row = canonical({name: value for one in said for name, value in one.items()}, f"{path}, {parent}")[0]
        rows += [row] * count
    return rows


def _canonical_table(table: Mapping[str, Any], path: Path) -> dict[str, Any]:
    """Return per-trace columns under canonical names, in canonical units."""
    found = {}
    for name, column in table.items():
        if column.dtype.kind in "biuf":
            key, one, _ = canonical_entry(name, 1.0, str(path))
            factor = one if isinstance(one, float) and key != name else 1.0
            found[key] = column.astype(np.float64) * factor if factor != 1.0 else column
        else:
            words = [plain_value(value) for value in column]
            key = canonical_entry(name, str(words[0]), str(path))[0]
            found[key] = np.array([str(canonical_entry(name, str(word), str(path))[1]) for word in words], np.str_)
    return found
