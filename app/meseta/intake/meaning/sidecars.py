"""Sidecars: files of metadata beside a recording, of the same name, as JSON, TOML, INI or plain YAML.

Nothing in them is executed, and nothing is passed over in silence: what is no plain value is named in a doubt.
"""

from __future__ import annotations

import configparser
import contextlib
import json
import os
import re
import tomllib
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any, Final

from meseta.errors import InputError
from meseta.intake.files import SIDECAR_ENDINGS
from meseta.intake.meaning.metadata import Plain, as_written

__all__ = ["sidecar", "sidecars_in"]

LARGEST_BYTE: Final = 1 << 20
_NAMED: Final = 5
"""Entries that a doubt names one by one."""
Entries = Iterator[tuple[str, Any]]


def sidecars_in(folders: Iterable[Path]) -> dict[Path, frozenset[str]]:
    """Return the names of all files that may be sidecars, by folder; each folder is listed once."""
    found = {}
    for folder in folders:
        with contextlib.suppress(OSError):  # one that cannot be listed is looked into file by file
            found[folder] = frozenset(one.name for one in os.scandir(folder) if one.name.endswith(SIDECAR_ENDINGS))
    return found


def sidecar(path: Path, known: frozenset[str] | None = None) -> tuple[dict[str, Plain], list[str]]:
    """Return what the file beside a recording says, and doubts: the same name with .json, .toml, .ini or .yaml.

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
        return {}, []
    beside = dict.fromkeys(
        one for end in SIDECAR_ENDINGS for one in (path.with_suffix(end), path.with_name(path.name + end))
    )
    there = [
        one for one in beside if one != path and (known is None or one.name in known) and one.is_file()
    ]  # fmt: skip
    if not there:
        return {}, []
    first, *others = there
    doubts = [f"{one.name} is not read: {first.name} is the file of metadata that counts" for one in others]
    if first.stat().st_size > LARGEST_BYTE:
        return {}, [*doubts, f"{first.name} is not read as a file of metadata: it is larger than 1 MB"]
    entries, more = _plain(_parsed(first))
    return entries, [*doubts, *(f"{first.name}: {doubt}" for doubt in more)]


def _parsed(path: Path) -> Entries:
    """Return (name, value) of every entry; the value is None where it is no plain one."""
    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError("is no text in UTF-8", str(path), "save it in UTF-8 or move it away") from error
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", str(path), "check its permissions") from error
    try:
        if path.suffix == ".json":
            return iter(list(_flat(_document(json.loads(text, parse_constant=str)))))
        if path.suffix == ".toml":
            return iter(list(_flat(tomllib.loads(text))))
        if path.suffix in (".yaml", ".yml"):
            return iter(list(_simple_yaml(text)))
        parser = configparser.ConfigParser(interpolation=None, strict=False)
        parser.optionxform = str  # type: ignore[assignment,method-assign]
        parser.read_string(text if re.search(r"(?m)^\s*\[", text) else f"[all]\n{text}")
        return iter([pair for name in parser.sections() for pair in parser[name].items()])
    except (ValueError, configparser.Error, RecursionError) as error:
        raise InputError(
            f"cannot be understood ({str(error)[:80]})", str(path), "correct the file or move it away"
        ) from error


def _document(loaded: Any) -> Mapping[str, Any]:
    if not isinstance(loaded, dict):
        raise ValueError("names with values are due, in {}")
    return loaded


def _flat(entries: Mapping[str, Any]) -> Entries:
    """Yield the entries of a nested document by their last name."""
    for name, value in entries.items():
        if isinstance(value, Mapping):
            yield from _flat(value)
        elif value is None or isinstance(value, str | int | float | bool):
            yield str(name), "" if value is None else value
        elif hasattr(value, "isoformat"):  # dates and times of TOML
            yield str(name), value.isoformat()
        else:
            yield str(name), None


def _simple_yaml(text: str) -> Entries:
    """Yield the "key: value" lines of a YAML file; lists, tags, anchors and texts over several lines have no value."""
    inside = -1
    for line in text.splitlines():
        depth = len(line) - len(line.lstrip())
        if inside >= 0 and (not line.strip() or depth > inside):
            continue  # a text over several lines
        inside = depth if re.search(r":\s*(?:[&!]\S+\s+)*[|>][-+\d]*\s*(?:#.*)?$", line) else -1
        match = re.match(r"""^\s*(?:"([^"]+)"|'([^']+)'|([^\W\d][^:#"'{}\[\]]*?))\s*:(?:\s+(.*?))?\s*$""", line)
        if match is None:
            continue
        name = match[1] or match[2] or match[3]
        value = re.sub(r"(?:^|\s+)#.*$", "", match[4] or "").strip()
        value = re.sub(r"^(?:(?:&[\w-]+|!!(?:str|int|float))\s+)+(?=\S)", "", value)
        quoted = re.fullmatch(r"""(["'])(.*?)\1(?:\s+#.*)?""", match[4] or "")
        if quoted:
            yield name, quoted[2]
        elif value[:1] in ("&", "*", "!", "|", ">", "{", "[", "%", "@", "`", '"', "'"):
            yield name, None
        elif value not in ("", "~", "null"):
            yield name, value


def _plain(entries: Entries) -> tuple[dict[str, Plain], list[str]]:
    """Return the plain entries, the first of a name, and doubts: what is no plain value, and what contradicts."""
    found: dict[str, Plain] = {}
    passed, twice = [], []
    for name, value in entries:
        one = as_written(name, value) if isinstance(value, str) else value
        one = str(one) if isinstance(one, int) and abs(one) >= 1 << 63 else one
        if one is None:
            passed.append(name)
        elif one == "":
            continue
        elif found.setdefault(name, one) != one:
            twice.append(name)
    doubts = [f"{_listed(passed)} not used, as no plain value stands there"] if passed else []
    doubts += [f"'{name}' stands there more than once: {found[name]} is used" for name in dict.fromkeys(twice)]
    return found, doubts


def _listed(names: list[str]) -> str:
    shown = ", ".join(f"'{name}'" for name in names[:_NAMED])
    return f"{shown} and {len(names) - _NAMED} more are" if len(names) > _NAMED else (
        f"{shown} is" if len(names) == 1 else f"{shown} are"
    )  # fmt: skip
