"""The whole recipe: its sections, TOML in and out, presets, ``section.field=value``, and errors in words."""

from __future__ import annotations

import hashlib
import json
import re
import textwrap
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import tomlkit
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from meseta.errors import CallError, RecipeError, nearest
from meseta.recipe.alignment import AlignmentSettings
from meseta.recipe.calibration import CalibrationSettings
from meseta.recipe.curve_files import with_curves_read
from meseta.recipe.cutting import CuttingSettings
from meseta.recipe.fields import FieldInfo, Section
from meseta.recipe.figure import FigureSettings
from meseta.recipe.histogram import (
    CorrelationSettings,
    DisplacementHistogramSettings,
    HistogramSettings,
    LengthSettings,
    TemporalSettings,
)
from meseta.recipe.intake import IntakeSettings
from meseta.recipe.kept_layouts import KeptChannel, KeptLayout, layout_table
from meseta.recipe.noise import NoiseSettings
from meseta.recipe.peaks import PeakSettings
from meseta.recipe.plateaus import PlateauSettings
from meseta.recipe.resampling import ResamplingSettings
from meseta.recipe.selection import SelectionSettings
from meseta.recipe.study import StudySettings
from meseta.resources import resource

__all__ = ["Recipe"]


class Recipe(BaseModel):
    """Every setting of an analysis; frozen.

    Sections are attributes, in the order of the job.  ``Recipe()`` has every default.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    intake: IntakeSettings = Field(default_factory=IntakeSettings, title="Files")
    calibration: CalibrationSettings = Field(default_factory=CalibrationSettings, title="Calibration")
    cutting: CuttingSettings = Field(default_factory=CuttingSettings, title="Traces")
    alignment: AlignmentSettings = Field(default_factory=AlignmentSettings, title="Zero of displacement")
    noise: NoiseSettings = Field(default_factory=NoiseSettings, title="Noise")
    plateaus: PlateauSettings = Field(default_factory=PlateauSettings, title="Plateaus")
    selection: SelectionSettings = Field(default_factory=SelectionSettings, title="Selection")
    histogram: HistogramSettings = Field(default_factory=HistogramSettings, title="Conductance histogram")
    displacement_histogram: DisplacementHistogramSettings = Field(
        default_factory=DisplacementHistogramSettings, title="2D conductance-displacement histogram"
    )
    correlation: CorrelationSettings = Field(default_factory=CorrelationSettings, title="2D correlation histogram")
    temporal: TemporalSettings = Field(default_factory=TemporalSettings, title="Temporal histogram")
    lengths: LengthSettings = Field(default_factory=LengthSettings, title="Length histogram")
    resampling: ResamplingSettings = Field(default_factory=ResamplingSettings, title="Intervals")
    peaks: PeakSettings = Field(default_factory=PeakSettings, title="Peaks")
    figure: FigureSettings = Field(default_factory=FigureSettings, title="Figure")
    study: StudySettings = Field(default_factory=StudySettings, title="Study file")

    # -- in ---------------------------------------------------------------------------------------------------

    @classmethod
    def parse(cls, text: str, where: str = "recipe", folder: Path | None = None) -> Recipe:
        """Return the recipe in a TOML text; settings that it does not name have their defaults.

        Files that it names (a measured amplifier curve) are read once, from ``folder``; without one none is opened.

        Raises
        ------
        RecipeError
            Naming the setting, what was given and what is allowed.
        """
        try:
            document = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            raise RecipeError(f"not valid TOML ({error})", where, "see `meseta recipe` for a complete one") from error
        return cls.build(document if folder is None else with_curves_read(document, folder), where)

    @classmethod
    def build(cls, document: Mapping[str, Any], where: str = "recipe") -> Recipe:
        """Return the recipe made of nested plain values; see :meth:`parse`."""
        try:
            return cls.model_validate(dict(document))
        except ValidationError as error:
            raise _in_words(error, where) from None

    @classmethod
    def load(cls, path: str | Path) -> Recipe:
        """Read a recipe from a TOML file."""
        try:
            text = Path(path).read_text(encoding="utf-8")
        except OSError as error:
            raise RecipeError(f"cannot be read ({error.strerror})", str(path), "check the path") from error
        except UnicodeDecodeError as error:
            raise RecipeError("is not a text file in UTF-8", str(path), "a recipe is a TOML file") from error
        return cls.parse(text, str(path), Path(path).parent)

    @classmethod
    def preset(cls, name: str) -> Recipe:
        """Return a named preset: ``metal``, ``molecule``, or any recipe file in the resources."""
        known = cls.presets()
        if name not in known:
            raise CallError(f"there is no preset '{name}'", "recipe", nearest(name, known))
        return cls.load(resource("recipes", f"{name}.toml"))

    @staticmethod
    def presets() -> list[str]:
        """Return the names of the presets."""
        return sorted(path.stem for path in resource("recipes").glob("*.toml"))

    def with_settings(self, settings: Iterable[str], where: str = "--set") -> Recipe:
        """Return the recipe with ``section.field=value`` settings applied in order.

        Values are TOML values; a bare word is taken as text.
        """
        document = self.model_dump()
        for text in settings:
            name, separator, value = text.partition("=")
            parts = [quoted or bare for quoted, bare in re.findall(r'"([^"]*)"|([^."]+)', name.strip())]
            if not separator or len(parts) < 2:
                raise CallError(f"'{text}' is not a setting", where, "write section.field=value")
            _put(document, parts, _value(value.strip()), name.strip(), where)
        return type(self).build(with_curves_read(document, Path()), where)

    def with_values(self, section: str, **values: Any) -> Recipe:
        """Return the recipe with settings of one section changed."""
        document = self.model_dump()
        document[section].update(values)
        return type(self).build(document, f"[{section}]")

    # -- out --------------------------------------------------------------------------------------------------

    def text(self, comments: bool = False) -> str:
        """Return the recipe as TOML, complete; with ``comments`` every setting says what it is."""
        document = tomlkit.document()
        for name, section in self.sections():
            table = tomlkit.table()
            if comments:
                table.comment(type(self).model_fields[name].title or name)
            for info in section.fields():
                _write(table, info, getattr(section, info.name), comments)
            document[name] = table
        return tomlkit.dumps(document)

    def save(self, path: str | Path) -> None:
        """Write the recipe as TOML."""
        try:
            Path(path).write_text(self.text(), encoding="utf-8")
        except OSError as error:
            raise RecipeError(f"cannot be written ({error.strerror})", str(path), "choose another place") from error

    def sections(self) -> Iterable[tuple[str, Section]]:
        """Yield name and settings of every section in the order of the job."""
        for name in type(self).model_fields:
            yield name, getattr(self, name)

    def key(self, names: Iterable[str], *, with_errors: bool = False) -> str:
        """Return a hash of the named settings (``section`` or ``section.field``).

        Only what differs from the defaults counts, so that a setting added by a later version leaves the keys of
        earlier studies alone.  Of a whole section, settings that only say how well others are known do not count,
        unless ``with_errors``.
        """
        chosen = {}
        for name in names:
            section, _, field = name.partition(".")
            part = getattr(self, section)
            beside = () if field or with_errors else part.errors
            changed = part.model_dump(mode="json", exclude_defaults=True, exclude=set(beside))
            if not field:
                chosen[name] = changed
            elif field in changed:
                chosen[name] = changed[field]
            elif field not in type(part).model_fields:
                # a derived property (the stored grid of a histogram) may stand for the settings it is made of
                chosen[name] = getattr(part, field)
        return hashlib.sha256(json.dumps(chosen, sort_keys=True).encode()).hexdigest()


def _put(document: dict[str, Any], parts: list[str], value: Any, name: str, where: str) -> None:
    section = parts[0]
    if section not in document:
        raise RecipeError(f"there is no section '{section}'", where, nearest(section, document))
    if parts[1] not in document[section]:
        raise RecipeError(f"there is no setting '{name}'", where, nearest(parts[1], document[section]))
    target = document[section]
    for part in parts[1:-1]:
        target = target.setdefault(part, {}) if isinstance(target, dict) else None
        if not isinstance(target, dict):
            raise RecipeError(f"'{name}' is not a table of settings", where, f"set {section}.{parts[1]} itself")
    target[parts[-1]] = value


def _value(text: str) -> Any:
    if text in ("", "none", "unset"):
        return None if text != "none" else "none"
    try:
        return tomllib.loads(f"value = {text}")["value"]
    except tomllib.TOMLDecodeError:
        return text


def _write(table: Any, info: FieldInfo, value: Any, comments: bool) -> None:
    if comments:
        table.add(tomlkit.nl())
        for line in textwrap.wrap(_sentence(info), 96, break_long_words=False):
            table.add(tomlkit.comment(line))
    if info.example and not value:  # the example must be free to be uncommented: no empty table stands in its way
        for line in info.example.splitlines() if comments else ():
            table.add(tomlkit.comment(line))
        return
    if value is None:
        table.add(tomlkit.comment(f"{info.name} is not set: {info.unset or 'not used'}"))
        return
    table[info.name] = _plain(value)


def _plain(value: Any) -> Any:
    if isinstance(value, BaseModel):
        inline = tomlkit.inline_table()
        for name, part in value.model_dump(exclude_none=True).items():
            inline[name] = part
        return inline
    if isinstance(value, dict) and any(isinstance(part, KeptLayout) for part in value.values()):
        tables = tomlkit.table(is_super_table=True)
        for name, part in value.items():
            tables[name] = layout_table(part)
        return tables
    if isinstance(value, dict):
        inline = tomlkit.inline_table()
        for name, part in value.items():
            inline[name] = _plain(part)
        return inline
    if isinstance(value, list | tuple):
        array = tomlkit.array()
        for part in value:
            array.append(_plain(part))
        return array
    return value


def _sentence(info: FieldInfo) -> str:
    range_text = info.range_text()
    bracket = "; ".join(part for part in (f"in {info.unit}" if info.unit else "", range_text) if part)
    return f"{info.title}{f' ({bracket})' if bracket else ''}. {info.help}".strip()


def _in_words(error: ValidationError, where: str) -> RecipeError:
    """Turn the first fault that validation found into one clear line."""
    fault = error.errors(include_url=False)[0]
    place = [str(part) for part in fault["loc"]]
    name = ".".join(place)
    sections = Recipe.model_fields
    if fault["type"] == "extra_forbidden":
        if len(place) == 1:
            return RecipeError(f"there is no section '{name}'", where, nearest(name, sections))
        section = sections.get(place[0])
        known = list(section.annotation.model_fields) if section and section.annotation else []
        if place[:2] == ["intake", "layouts"] and len(place) > 3:
            known = list((KeptChannel if place[3] == "channels" else KeptLayout).model_fields)
        return RecipeError(f"there is no setting '{name}'", where, nearest(place[-1], known))
    if fault["type"] == "value_error":
        return RecipeError(f"[{name}] {fault['ctx']['error']}", where, "change one of them")
    given = fault.get("input")
    allowed = _allowed(place) or str(fault["msg"])
    return RecipeError(f"'{name}' cannot be {given!r}", where, f"allowed: {allowed}")


def _allowed(place: list[str]) -> str:
    section = Recipe.model_fields.get(place[0])
    if section is None or len(place) != 2 or section.annotation is None:
        return ""
    for info in section.annotation.fields():
        if info.name == place[1]:
            words = {"number": "a number", "integer": "a whole number", "text": "text"}.get(info.kind, "")
            unit = f" in {info.unit}" if info.unit else ""
            return " ".join(part for part in (words, info.range_text()) if part) + unit
    return ""
