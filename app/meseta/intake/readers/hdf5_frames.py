"""Data frames that pandas writes into HDF5 files: columns of one type lie together in a block, their names beside it.

Two forms: "fixed", with datasets ``block0_values`` and ``block0_items`` (the names), and "table", with one compound
dataset whose fields ``values_block_0`` hold several columns each.  The layout is that of pandas' ``to_hdf``
(documentation of pandas, "IO tools: HDF5"), its bookkeeping that of PyTables ("User's guide: file format").
"""

from __future__ import annotations

import re
import string
from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import Any, Final

import numpy as np

from meseta.intake.meaning.metadata import plain_value
from meseta.intake.readers.hdf5_samples import Layer
from meseta.intake.readers.hdf5_stored import Column
from meseta.intake.readers.hdf5_tree import Node, Tree

__all__ = ["without_frames"]

MOST_COLUMNS: Final = 64
_LISTED: Final = re.compile(r"\(lp\d+\n((?:V[^\n]*\np\d+\na)+)\.")
"""A list of words as pandas writes it into an attribute; it is matched as text and never loaded."""
_WORD: Final = re.compile(r"V([^\n]*)\np\d+\na")
_NO_NAME: Final = "N."
"""What stands where a name would, and none was given."""
_BOOKKEEPING: Final = frozenset(
    {"CLASS", "VERSION", "PYTABLES_FORMAT_VERSION", "FLAVOR", "EXTDIM", "NROWS", "transposed"}
)
"""Attributes that say how the file is written."""
_OF_FRAMES: Final = frozenset(
    (
        "encoding",
        "errors",
        "pandas_type",
        "pandas_version",
        "ndim",
        "nblocks",
        "table_type",
        "index_cols",
        "values_cols",
        "non_index_axes",
        "data_columns",
        "nan_rep",
        "levels",
        "info",
    )
)


def without_frames(tree: Tree) -> Tree:
    """Return what lies in a file with the blocks of data frames as columns under their names.

    Index trees, the lists of names, and attributes that only say how the file is written are left away.
    """
    indexes = {path for path, found in tree.attributes.items() if plain_value(found.get("CLASS")) == "TINDEX"}
    frames = {path for path, found in tree.attributes.items() if "pandas_type" in found}
    nodes: list[Node] = []
    for node in tree.nodes:
        if not any(node.path.startswith(f"{path}/") for path in indexes):
            found = _unfolded(tree, node) if node.parent in frames else [node]
            nodes += [replace(one, attributes=_telling(one.attributes)) for one in found]

    def lists_names(path: str) -> bool:
        parent, _, name = path.rpartition("/")
        return parent in frames and re.fullmatch(r"axis\d+|block\d+_items", name) is not None

    return replace(
        tree,
        nodes=nodes,
        attributes={path: _telling(found) for path, found in tree.attributes.items() if path not in indexes},
        values={path: value for path, value in tree.values.items() if not lists_names(path)},
        texts={path: text for path, text in tree.texts.items() if not lists_names(path)},
    )


def _telling(attributes: Mapping[str, Any]) -> dict[str, Any]:
    """Return the attributes of a group without those that say how the file is written."""
    is_frame = "pandas_type" in attributes
    if not (is_frame or "CLASS" in attributes):
        return dict(attributes)
    skipped = _BOOKKEEPING | _OF_FRAMES if is_frame else _BOOKKEEPING
    return {
        name: value
        for name, value in attributes.items()
        if name not in skipped
        and not (is_frame and name.endswith(("_variety", "_nan_rep")))
        and (name != "TITLE" or plain_value(value))
    }


def _unfolded(tree: Tree, node: Node) -> Iterator[Node]:
    if node.dtype.names is not None:
        yield from _fields(node)
    elif (block := re.fullmatch(r"(block\d+)_values", node.leaf)) and len(node.shape) == 2:
        yield from _block(tree, node, block[1])
    elif node.leaf in ("axis1", "index"):
        yield from _rows_named(node)
    elif node.leaf == "values" and (name := _name(tree.attributes[node.parent])):
        yield _renamed(node, name)
    else:
        yield node


def _block(tree: Tree, node: Node, block: str) -> Iterator[Node]:
    """Yield the columns of a block under their names; the block itself where it has no names, or too many."""
    items = f"{node.parent}/{block}_items"
    single = tree.values.get(items)
    names = [str(plain_value(single))] if single is not None else [str(one) for one in tree.texts.get(items, ())]
    axis = 1 if plain_value(node.attributes.get("transposed", 1)) else 0
    if len(names) > MOST_COLUMNS or len(names) != node.shape[axis] or len(set(names)) != len(names):
        yield node
        return
    for place, name in enumerate(names):
        layer = Layer(node.dataset, axis, place)
        yield Node(f"{node.parent}/{name}", layer, layer.shape, node.dtype, {}, name)


def _rows_named(node: Node) -> Iterator[Node]:
    """Yield what the rows are called, unless that is only their number."""
    name, count = _name(node.attributes), node.shape[0]
    is_number = (
        node.dtype.kind in "iu"
        and len(node.shape) == 1
        and (int(node.dataset[0:1][0]), int(node.dataset[count - 1 : count][0])) == (0, count - 1)
    )
    if name or not is_number:
        yield _renamed(node, name or "index")


def _fields(node: Node) -> Iterator[Node]:
    """Yield the plain fields of a table, and each column of those that hold several."""
    dtype = node.dtype
    plain = [name for name in dtype.names or () if dtype[name].shape == () and name != "index"]
    if plain:
        fields = np.dtype([(name, dtype[name]) for name in plain])
        yield Node(node.path, node.dataset, node.shape, fields, node.attributes)
    for name in dtype.names or ():
        if name == "index" and dtype[name].kind in "biuf":
            column = Column(node.dataset, name)
            yield from _rows_named(Node(f"{node.path}/index", column, node.shape, dtype[name], {}))
        width = dtype[name].shape
        if len(width) == 1 and dtype[name].base.kind in "biuf" and width[0] <= MOST_COLUMNS:
            names = _listed(node.attributes.get(f"{name}_kind"), width[0])
            for place, one in enumerate(names or _lettered(name, width[0])):
                layer = Layer(Column(node.dataset, name), 1, place)
                yield Node(f"{node.path}/{one}", layer, node.shape, dtype[name].base, {}, one)


def _listed(value: Any, count: int) -> list[str]:
    """Return the words of a list of so many; nothing where it is written in another way."""
    found = _LISTED.fullmatch(str(plain_value(value) or ""))
    words = [word.encode("latin-1", "replace").decode("raw_unicode_escape", "replace") for word in
             _WORD.findall(found[1])] if found else []  # fmt: skip
    return words if len(words) == count == len(set(words)) else []


def _lettered(name: str, count: int) -> list[str]:
    """Return names for columns without any; numbers would make them traces."""
    letters = string.ascii_lowercase
    return [f"{name} {letters[n // 26 - 1] if n >= 26 else ''}{letters[n % 26]}" for n in range(count)]


def _name(attributes: Mapping[str, Any]) -> str:
    name = str(plain_value(attributes.get("name")) or "")
    return "" if name == _NO_NAME or "\n" in name else name


def _renamed(node: Node, name: str) -> Node:
    return Node(f"{node.parent}/{name}", node.dataset, node.shape, node.dtype, {}, name)
