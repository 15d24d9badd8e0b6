"""The building blocks of recipe sections: a field that carries its own title, unit and help."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, ClassVar, Literal, Self, get_args, get_origin

from pydantic import BaseModel, ConfigDict, Field, JsonValue, model_validator
from pydantic.fields import FieldInfo as PydanticField

__all__ = ["FieldInfo", "Section", "setting"]


def setting(
    default: Any,
    title: str,
    help: str = "",
    *,
    unit: str = "",
    unset: str = "",
    factory: Any = None,
    example: str = "",
    **limits: Any,
) -> Any:
    """Declare a setting.

    Parameters
    ----------
    default : object
        Value where the user gives none; None means "not set".
    title : str
        Name as a form shows it.
    help : str
        One or two sentences: what it does and how to judge it.
    unit : str
        Unit of the number ("V", "nm", "G0"), as printed.
    unset : str
        What happens where the value is None ("taken from the recording").
    factory : callable, optional
        Makes the default of a mutable field.
    example : str
        Lines of TOML that a commented recipe shows, for what no sentence can say.
    **limits
        ``ge``, ``gt``, ``le``, ``lt``: the allowed range.
    """
    extra: dict[str, JsonValue] = {"unit": unit, "unset": unset, "example": example}
    if factory is not None:
        return Field(default_factory=factory, title=title, description=help, json_schema_extra=extra, **limits)
    return Field(default, title=title, description=help, json_schema_extra=extra, **limits)


@dataclass(frozen=True)
class FieldInfo:
    """All that forms, help and messages need to know of one setting.

    Attributes
    ----------
    name : str
        Name within its section.
    kind : str
        "number", "integer", "truth", "choice", "text", "list", "table".
    choices : tuple of str
        Allowed words of a choice.
    low, high : float or None
        Allowed range; ``low_open`` and ``high_open`` tell whether the end itself is excluded.
    """

    name: str
    title: str
    help: str
    unit: str
    unset: str
    default: Any
    kind: str
    choices: tuple[str, ...]
    optional: bool
    low: float | None
    high: float | None
    low_open: bool
    high_open: bool
    example: str = ""

    def range_text(self) -> str:
        """Return the allowed values in words, without the unit."""
        if self.kind == "choice":
            return " | ".join(self.choices)
        if self.low is None and self.high is None:
            return {"truth": "true | false"}.get(self.kind, "")
        low = "" if self.low is None else f"{'above' if self.low_open else 'from'} {self.low:g}"
        high = "" if self.high is None else f"{'below' if self.high_open else 'to'} {self.high:g}"
        return " ".join(part for part in (low, high) if part)


class Section(BaseModel):
    """Base of every recipe section: frozen, nothing unknown allowed."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False, validate_default=True)

    ordered: ClassVar[tuple[tuple[str, str], ...]] = ()
    """Pairs of settings of which the first, where both are set, must be less than the second."""
    errors: ClassVar[tuple[str, ...]] = ()
    """Settings that say how well others are known: they change nothing that is made by this section."""

    @model_validator(mode="after")
    def _ends_in_order(self) -> Self:
        for low, high in self.ordered:
            below, above = getattr(self, low), getattr(self, high)
            if below is not None and above is not None and below >= above:
                raise ValueError(f"{low} ({below:g}) must be less than {high} ({above:g})")
        return self

    @classmethod
    def fields(cls) -> Iterator[FieldInfo]:
        """Yield the settings of this section in the order of the form."""
        for name, field in cls.model_fields.items():
            yield _describe(name, field)


def _describe(name: str, field: PydanticField) -> FieldInfo:
    annotation, optional = field.annotation, False
    arguments = get_args(annotation)
    if type(None) in arguments:
        optional = True
        annotation = next(argument for argument in arguments if argument is not type(None))
    kind, choices = _kind(annotation)
    limits: dict[str, Any] = {}
    for part in field.metadata:
        for word in ("ge", "gt", "le", "lt"):
            if getattr(part, word, None) is not None:
                limits[word] = getattr(part, word)
    extra = field.json_schema_extra if isinstance(field.json_schema_extra, dict) else {}
    return FieldInfo(
        name=name,
        title=field.title or name,
        help=field.description or "",
        unit=str(extra.get("unit", "")),
        unset=str(extra.get("unset", "")),
        default=field.get_default(call_default_factory=True),
        kind=kind,
        choices=choices,
        optional=optional,
        low=limits.get("ge", limits.get("gt")),
        high=limits.get("le", limits.get("lt")),
        low_open="gt" in limits,
        high_open="lt" in limits,
        example=str(extra.get("example", "")),
    )


def _kind(annotation: Any) -> tuple[str, tuple[str, ...]]:
    if get_origin(annotation) is Literal:
        return "choice", tuple(str(word) for word in get_args(annotation))
    names: dict[Any, str] = {bool: "truth", int: "integer", float: "number", str: "text"}
    if annotation in names:
        return names[annotation], ()
    origin = get_origin(annotation)
    return ("list" if origin in (list, tuple) else "table"), ()
