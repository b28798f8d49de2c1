"""Text of the commented settings file that `fluvinv start` writes."""

import re
from collections.abc import Iterator
from numbers import Integral, Real
from typing import Any

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from fluvinv.files.settings import Settings, plain_name
from fluvinv.files.settings_keys import DoneSoFar, section_of, unit_and_usual

_HEAD = [
    "# Settings for fluvinv: `fluvinv check` says what would be done with them, `fluvinv run` does it.",
    "# YAML 1.2 in UTF-8, indented with spaces. A line that begins with # is a comment.",
]


def first_settings_text(dem_path_as_written: str, name: str, guesses: dict[str, tuple[Any, str]]) -> str:
    """Write a settings file that `read_settings` accepts as it is.

    Parameters
    ----------
    dem_path_as_written : str
        Path of the DEM as it shall stand in the file, relative to the file's folder.
    name : str
        Name of the run; characters that a file name cannot hold are replaced.
    guesses : dict
        Dotted key to (value, how the guess was made). Must hold `stream_power.erodibility` or
        `stream_power.reference_celerity_m_per_yr`, which have no default.

    Returns
    -------
    str
        One comment line per key, made from the descriptions and units of the data model.

    Raises
    ------
    KeyError
        A guess for a key that does not exist.
    """
    given = guesses | {"catchment.dem": (dem_path_as_written, ""), "catchment.name": (plain_name(name), "")}
    lines = [*_HEAD, *_lines(Settings, "", given)]
    if given:
        raise KeyError(f"guesses for unknown keys: {sorted(given)}")
    return "\n".join(lines) + "\n"


def _lines(section: type[BaseModel], above: str, given: dict) -> Iterator[str]:
    """Lines of one section; what is used of `given` is taken out of it."""
    indent = "  " * above.count(".")
    for key, field in section.model_fields.items():
        dotted = above + key
        below = section_of(field)
        if not above:
            yield ""
        if below and not isinstance(_default(field), str):
            yield f"{indent}{key}:"
            yield from _lines(below, f"{dotted}.", given)
        else:
            value, reason = given.pop(dotted, (_default(field), ""))
            yield from (indent + line for line in _leaf(key, field, value, reason))


def _default(field: FieldInfo) -> Any:
    """Default of a key as it stands in a file."""
    return field.default.model_dump() if isinstance(field.default, BaseModel) else field.default


def _leaf(key: str, field: FieldInfo, value: Any, reason: str) -> list[str]:
    """Comment line and value line of a key; a key that holds nothing is commented out."""
    if any(isinstance(mark, DoneSoFar) and mark.values == (None,) for mark in field.metadata):
        return [f"# {key}: not done yet in this version ({field.description})"]
    notes = unit_and_usual(field)
    comment = f"# {field.description[:1].upper()}{field.description[1:]}{f' ({notes})' if notes else ''}."
    if reason:
        comment += f" Guess: {_one_line(reason)}."
    return [comment, f"# {key}:" if value is None else f"{key}: {_scalar(value)}"]


def _one_line(text: str) -> str:
    printable = "".join(c if c.isprintable() or c.isspace() else "?" for c in text)
    return " ".join(printable.split()).rstrip(".")


def _scalar(value: Any) -> str:
    """Write a value so that YAML 1.2 reads it back unchanged."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, Integral):
        return str(int(value))
    if isinstance(value, Real):
        return repr(float(value))
    plain = re.fullmatch("[a-z]+(-[a-z]+)*", value) and value not in _NOT_PLAIN
    return value if plain else _quoted(value)


#: Words that mean something other than themselves without quotes, in YAML 1.2 or in older readers.
_NOT_PLAIN = {"null", "true", "false", "yes", "no", "on", "off", "y", "n"}


def _quoted(text: str) -> str:
    """Double-quoted YAML; what does not print is escaped, half surrogates of odd file names included."""
    escaped = (f"\\{c}" if c in '"\\' else c if c.isprintable() else f"\\U{ord(c):08x}" for c in text)
    return f'"{"".join(escaped)}"'
