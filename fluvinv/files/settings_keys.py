"""What a settings key is: its default, unit, limits and meaning as data, and the words made from them."""

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import NoneType, UnionType
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from pydantic import AfterValidator, BaseModel, Field
from pydantic.fields import FieldInfo
from pydantic_core import PydanticCustomError

from fluvinv.errors import InputError, SettingsError

NOT_YET = "not done yet in this version"


def problem(message: str) -> PydanticCustomError:
    """Wrap the text of a finding so that it reaches the user word for word, with the line of its key."""
    return PydanticCustomError("fluvinv", "{message}", {"message": message})


@contextmanager
def naming_keys(names: Mapping[str, str]) -> Iterator[None]:
    """Say where a key stands in errors that begin with it.

    Science names keys in its messages and knows no files; `names` maps a dotted key to what the user finds it by.
    """
    try:
        yield
    except (SettingsError, InputError) as error:
        key, colon, rest = str(error).partition(":")
        if key not in names:
            raise
        raise type(error)(f"{names[key]}{colon}{rest}") from error


def shown(value: Any) -> str:
    """Name a value as its author wrote it, short enough for one line of a message."""
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a mapping"
    if isinstance(value, list):
        return "a list"
    text = f"{value:.12g}" if isinstance(value, float) else repr(value)
    return text if len(text) <= 60 else text[:56] + "..." + text[-1]


@dataclass(frozen=True)
class DoneSoFar:
    """Marks a key of which this version serves only some of the promised values."""

    values: tuple

    def check(self, value: Any) -> Any:
        """Refuse a value that is promised but not served yet."""
        if value in self.values:
            return value
        if self.values == (None,):
            raise problem(f"this key is {NOT_YET}; take it out.")
        accepted = " or ".join(map(shown, self.values))
        raise problem(f"{shown(value)} is {NOT_YET}; expected {accepted}.")


def done_so_far(promised: Any, *values: Any) -> Any:
    """Type of a key that shall take `promised` and takes `values` so far."""
    mark = DoneSoFar(values)
    return Annotated[promised, mark, AfterValidator(mark.check)]


def key(default: Any, description: str, unit: str = "", usual: str = "", **limits: Any) -> Any:
    """Describe one key: `unit` and `usual` (the usual range) go into comments and messages."""
    extra = {"unit": unit, "usual": usual}
    return Field(default, description=description, json_schema_extra=extra, **limits)


def section_of(field: FieldInfo) -> type[BaseModel] | None:
    """The data class of a key that holds further keys, else None."""
    annotation = field.annotation
    return annotation if isinstance(annotation, type) and issubclass(annotation, BaseModel) else None


def all_keys(section: type[BaseModel], above: tuple = ()) -> Iterator[tuple[tuple, FieldInfo]]:
    """Walk every key below a section, sections included, in the order of the file."""
    for name, field in section.model_fields.items():
        path = (*above, name)
        yield path, field
        if section_of(field):
            yield from all_keys(section_of(field), path)


def unit_and_usual(field: FieldInfo) -> str:
    """Unit and usual range of a key, or nothing."""
    extra = field.json_schema_extra or {}
    return "; ".join(extra[name] for name in ("unit", "usual") if extra.get(name))


def expectation(field: FieldInfo) -> str:
    """What a key accepts, in words made from its type and limits."""
    section = section_of(field)
    if section:
        return "a mapping with keys out of " + ", ".join(section.model_fields)
    done = next((mark for mark in field.metadata if isinstance(mark, DoneSoFar)), None)
    if done:
        return " or ".join("nothing" if v is None else shown(v) for v in done.values)
    notes = unit_and_usual(field)
    words = " or ".join(_kinds(field.annotation, field.metadata))
    return f"{words} ({notes})" if notes else words


def _kinds(annotation: Any, marks: list) -> list[str]:
    """Words for each alternative of a type."""
    origin, parts = get_origin(annotation), get_args(annotation)
    if origin is Annotated:
        return _kinds(parts[0], [m for mark in parts[1:] for m in getattr(mark, "metadata", [mark])])
    if origin is Literal:
        return [shown(value) for value in parts]
    if origin in (Union, UnionType):
        return [words for part in parts if part is not NoneType for words in _kinds(part, marks)]
    names = {float: "a number", int: "a whole number", bool: "true or false", Path: "the path of a file"}
    if annotation not in (float, int):
        return [names.get(annotation, "text")]
    limits = {name: getattr(m, name) for m in marks for name in ("gt", "ge", "lt", "le") if hasattr(m, name)}
    words = {"gt": "above", "ge": "from", "lt": "and below", "le": "to"}
    return [" ".join([names[annotation], *(f"{words[name]} {limit:.12g}" for name, limit in limits.items())])]
