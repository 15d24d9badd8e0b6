"""Settings in prose: every value that a sentence quotes is remembered, so that what is left can be stated as well."""

from __future__ import annotations

from typing import Any

from meseta import typeset
from meseta.recipe import FieldInfo, Recipe

__all__ = ["Stated", "value_text"]


def value_text(value: Any, info: FieldInfo) -> str:
    """Return a setting's value as printed, with its unit; what happens instead where it is not set."""
    if value is None:
        return info.unset or "not set"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int):
        return _with_unit(typeset.integer(value), info.unit)
    if isinstance(value, float):
        digits = max(len(f"{value:.4g}".split("e")[0].replace(".", "").replace("-", "").strip("0")), 1)
        return _with_unit(typeset.number(value, digits), info.unit)
    if isinstance(value, dict):
        return "; ".join(f"{name}: {_plain(entry)}" for name, entry in value.items()) or "none"
    if isinstance(value, list | tuple):
        return "; ".join(_plain(entry) for entry in value) or "none"
    return str(value).replace("_", " ") if value in info.choices else str(value)


def _with_unit(text: str, unit: str) -> str:
    return f"{text}{typeset.THIN_SPACE}{typeset.unit_text(unit)}" if unit else text


def _plain(entry: Any) -> str:
    if hasattr(entry, "model_dump"):
        values = entry.model_dump(exclude_defaults=True)
        return ", ".join(f"{name} {value}" for name, value in values.items())
    return str(entry)


class Stated:
    """The values of a recipe, quoted one by one while a text is written.

    Attributes
    ----------
    names : set of str
        ``section.field`` of every setting quoted so far.
    """

    def __init__(self, recipe: Recipe) -> None:
        self.recipe = recipe
        self.names: set[str] = set()

    def __call__(self, name: str) -> str:
        """Return the value of ``section.field`` as text and remember that it was stated."""
        return value_text(self.value(name), self._info(name))

    def value(self, name: str) -> Any:
        """Return the value of ``section.field`` itself and remember that it was stated."""
        self.names.add(name)
        section, field = name.split(".")
        return getattr(getattr(self.recipe, section), field)

    def _info(self, name: str) -> FieldInfo:
        section, field = name.split(".")
        return next(info for info in getattr(self.recipe, section).fields() if info.name == field)

    def rest(self, section: str, title: str = "") -> str:
        """Return one sentence that states the settings of a section that are not yet stated; "" where none is left.

        Settings that are not set (taken from the recording, or unused) and empty lists are left to the table of all
        settings.
        """
        parts = []
        for info in getattr(self.recipe, section).fields():
            name = f"{section}.{info.name}"
            value = getattr(getattr(self.recipe, section), info.name)
            if name not in self.names and value not in (None, [], {}, ()):
                parts.append(f"{info.title[:1].lower()}{info.title[1:]} {self(name)}")
        return f"Other settings{f' of the {title}' if title else ''}: {'; '.join(parts)}." if parts else ""
