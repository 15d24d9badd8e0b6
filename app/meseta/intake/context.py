"""Metadata that stands beside a file: its name, a sidecar, a table with one row a file."""

from __future__ import annotations

import configparser
import contextlib
import json
import os
import re
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, Final

from meseta.errors import InputError
from meseta.intake.metadata import Plain, canonical
from meseta.intake.opening import OpenContext
from meseta.recipe.intake import IntakeSettings

__all__ = ["batch_context", "beside", "from_name", "sidecar"]

LARGEST_BYTE: Final = 1 << 20
_ENDINGS: Final = (".json", ".toml", ".ini", ".cfg", ".yaml", ".yml")


def from_name(name: str, template: str) -> dict[str, Plain]:
    """Return what a file name says by a template such as "{specimen}_{bias_mV}mV_{n}.csv".

    Raises
    ------
    InputError
        Where the name does not fit the template, or the template is not one.
    """
    words = re.findall(r"\{(\w+)\}", template)
    if not words or len(set(words)) != len(words):
        raise InputError(
            f"'{template}' is not a template", "intake.name_template", "write for example {specimen}_{n}.csv"
        )
    pieces = re.split(r"\{\w+\}", template)
    pattern = "".join(
        re.escape(piece) + (f"(?P<{word}>.+?)" if word else "")
        for piece, word in zip(pieces, [*words, ""], strict=True)
    )
    match = (
        re.fullmatch(pattern, name) or re.fullmatch(pattern, Path(name).name) or re.fullmatch(pattern, Path(name).stem)
    )
    if match is None:
        raise InputError(f"the name does not fit the template {template}", name, "change intake.name_template")
    return {word: _number(text) for word, text in match.groupdict().items()}


def _number(text: str) -> Plain:
    for kind in (int, float):
        try:
            value = kind(text.replace("p", ".") if re.fullmatch(r"\d+p\d+", text) else text)
        except ValueError:
            continue
        if not (isinstance(value, int) and len(text) > 1 and text.startswith("0")):
            return value
    return text


def sidecar(path: Path, known: frozenset[str] | None = None) -> dict[str, Plain]:
    """Return what a file beside the recording says: the same name with .json, .toml, .ini or .yaml.

    Parameters
    ----------
    path : Path
    known : frozenset of str, optional
        Names of all files of the folder that may be sidecars.

    Raises
    ------
    InputError
        Where the sidecar cannot be understood.
    """
    if known is not None and not known:
        return {}
    for ending in _ENDINGS:
        for candidate in (path.with_suffix(ending), path.with_name(path.name + ending)):
            if known is not None and candidate.name not in known:
                continue
            if candidate != path and candidate.is_file() and candidate.stat().st_size <= LARGEST_BYTE:
                return _flat(_parsed(candidate))
    return {}


def _parsed(path: Path) -> Mapping[str, Any]:
    try:
        text = path.read_text(encoding="utf-8-sig")
        if path.suffix == ".json":
            loaded = json.loads(text)
            return loaded if isinstance(loaded, dict) else {}
        if path.suffix == ".toml":
            return tomllib.loads(text)
        if path.suffix in (".yaml", ".yml"):
            return _simple_yaml(text)
        parser = configparser.ConfigParser(interpolation=None, strict=False)
        parser.optionxform = str  # type: ignore[assignment,method-assign]
        parser.read_string(text if re.search(r"(?m)^\s*\[", text) else f"[all]\n{text}")
        return {name: dict(parser[name]) for name in parser.sections()}
    except (ValueError, OSError, configparser.Error, RecursionError) as error:
        raise InputError(
            f"cannot be understood ({str(error)[:80]})", str(path), "correct the file or move it away"
        ) from error


def _simple_yaml(text: str) -> dict[str, Any]:
    """Return the "key: value" lines of a YAML file; nesting, lists and tags are passed over, never executed."""
    found: dict[str, Any] = {}
    for line in text.splitlines():
        match = re.match(r"^\s*([\w][\w .()/-]*?)\s*:\s+([^#&*!|>{\[].*?)\s*(?:\s#.*)?$", line)
        if match:
            found[match[1]] = match[2].strip("\"'")
    return found


def _flat(entries: Mapping[str, Any]) -> dict[str, Plain]:
    """Return plain entries of a nested document, by their last name."""
    found: dict[str, Plain] = {}
    for name, value in entries.items():
        if isinstance(value, Mapping):
            found.update({key: one for key, one in _flat(value).items() if key not in found})
        elif isinstance(value, str):
            found[str(name)] = _number(value)
        elif isinstance(value, int | float | bool):
            found[str(name)] = value
    return found


def _sidecars(folders: Iterable[Path]) -> dict[Path, frozenset[str]]:
    """Return the names of all files that may be sidecars, by folder; each folder is listed once."""
    found = {}
    for folder in folders:
        with contextlib.suppress(OSError):  # one that cannot be listed is looked into file by file
            found[folder] = frozenset(one.name for one in os.scandir(folder) if one.name.endswith(_ENDINGS))
    return found


def batch_context(settings: IntakeSettings, paths: Sequence[Path] = ()) -> OpenContext:
    """Return what is the same for all files of a batch: the table of metadata, and which files have sidecars.

    Raises
    ------
    InputError
        Where the table cannot be read or has no column 'file'.
    """
    sidecars = _sidecars({path.parent for path in paths}) if len(paths) > 1 else {}
    if settings.metadata_table is None:
        return OpenContext({}, sidecars)
    import csv

    path = Path(settings.metadata_table)
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            sample = file.read(4096)
            file.seek(0)
            delimiter = max(",;\t", key=sample.split("\n", 1)[0].count)
            rows = list(csv.DictReader(file, delimiter=delimiter))
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputError(f"cannot be read ({error})", str(path), "correct intake.metadata_table") from error
    if not rows or "file" not in rows[0]:
        raise InputError("has no column 'file'", str(path), "head the column of file names with 'file'")
    table = {}
    for row in rows:
        named = {str(key): _number(value) for key, value in row.items() if key not in (None, "file") and value}
        table[str(row["file"])] = named
    return OpenContext(table, sidecars)


def beside(path: Path, name: str, settings: IntakeSettings, context: OpenContext) -> tuple[dict[str, Plain], list[str]]:
    """Return what stands beside a file, under canonical names, with doubts; the table wins, then the name."""
    entries: dict[str, Plain] = dict(sidecar(path, context.sidecars.get(path.parent)))
    if settings.name_template is not None:
        entries |= from_name(name, settings.name_template)
    if context.table:
        found = next(
            (context.table[key] for key in (name, path.name, path.stem, str(path)) if key in context.table), None
        )
        if found is None:
            return _canonical(entries, path, [f"not in the table {settings.metadata_table}"])
        entries |= found
    return _canonical(entries, path, [])


def _canonical(entries: Mapping[str, Plain], path: Path, doubts: list[str]) -> tuple[dict[str, Plain], list[str]]:
    made, more = canonical(entries, str(path))
    return made, [*doubts, *more]
