"""Reading a settings file: YAML 1.2 to `Settings`, and every finding as one message with its line."""

import difflib
import re
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import Any

from pydantic import ValidationError
from ruamel.yaml import YAML, events
from ruamel.yaml.error import YAMLError

from fluvinv.errors import SettingsError
from fluvinv.files.settings import Settings, build_settings
from fluvinv.files.settings_keys import all_keys, expectation, naming_keys, shown

_LARGEST = 1_000_000  # bytes
_DEEPEST = 20  # levels; our own tree has three

# The core schema of YAML 1.2.2, section 10.3.2: what an unquoted word means.
_CONSTANTS = {"": None, "~": None} | {
    form: value
    for word, value in {"null": None, "true": True, "false": False}.items()
    for form in (word, word.capitalize(), word.upper())
}
_INTEGER = re.compile(r"[-+]?[0-9]{1,18}|0o[0-7]{1,18}|0x[0-9a-fA-F]{1,15}")
_FLOAT = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
_NOT_FINITE = re.compile(r"[-+]?\.(inf|Inf|INF)|\.(nan|NaN|NAN)")

#: Line and column of a finding, and what makes its message.
_Finding = tuple[tuple[int, int], Callable[[], str]]
_NOWHERE = (0, 0)

_OTHER_YAML = "found a %YAML line, expected YAML 1.2; take the line out."

_KNOWN = dict(all_keys(Settings))


def read_settings(path: str | Path) -> Settings:
    """Read and check a settings file.

    Parameters
    ----------
    path : path of a YAML 1.2 file in UTF-8
        Input paths in it are resolved against its folder; no other file is looked at.

    Raises
    ------
    SettingsError
        With the first finding in file order, its line, what was found and what is expected.
    """
    with open_settings(path) as settings:
        return settings


@contextmanager
def open_settings(path: str | Path) -> Iterator[Settings]:
    """Read settings as `read_settings` does; errors that begin with a key tell its line as long as they are open."""
    path = Path(path)
    document = _read_document(path.name, _read_text(path))
    findings = list(document.findings)
    try:
        settings = build_settings(document.values, path.absolute().parent, path.stem)
    except ValidationError as error:
        # One value can fail several alternatives of its type: one finding per key is enough.
        errors: dict[tuple, dict] = {}
        for e in error.errors(include_url=False):
            errors.setdefault(_known_part(e), e)
        findings += [(document.place(key, e), partial(_message, key, e)) for key, e in errors.items()]
    if findings:
        raise _first_of(path.name, findings)
    places = {key: _where(path.name, document.places.get(key, _NOWHERE)) for key in _KNOWN}
    with naming_keys({_dotted(key): f"{place}: {_dotted(key)}" for key, place in places.items()}):
        yield settings


def _first_of(name: str, findings: list[_Finding]) -> SettingsError:
    """Report the first finding in file order; what has no place (a key that is missing) comes last."""
    place, message = min(findings, key=lambda f: (f[0] == _NOWHERE, f[0]))
    more = len(findings) - 1
    rest = f"\n{more} more {'finding' if more == 1 else 'findings'} after this one." if more else ""
    return SettingsError(f"{_where(name, place)}: {message()}{rest}")


def _where(name: str, place: tuple[int, int]) -> str:
    return name if place == _NOWHERE else f"{name}, line {place[0]}"


def _read_text(path: Path) -> str:
    """Text of the file, or a SettingsError that says what it is instead."""
    try:
        with path.open("rb") as stream:
            content = stream.read(_LARGEST + 1)
    except FileNotFoundError:
        raise SettingsError(f"{path}: no such settings file. `fluvinv start DEM` writes one.") from None
    except IsADirectoryError:
        raise SettingsError(f"{path}: found a folder, expected a settings file (YAML).") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "not a possible file name"
        raise SettingsError(f"{path}: the settings file cannot be read ({reason}).") from None
    if len(content) > _LARGEST:
        raise SettingsError(f"{path.name}: more than 1 MB, expected a settings file (YAML).")
    save = "expected UTF-8. Save the file again as UTF-8"
    if content.startswith((b"\xff\xfe", b"\xfe\xff")) or b"\0" in content:
        raise SettingsError(f"{path.name}: found UTF-16 text or binary data, {save}.")
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise SettingsError(f"{path.name}, line {line}: found a byte that is not UTF-8, {save}.") from None
    if not text.strip():
        raise SettingsError(f"{path.name}: the file is empty. `fluvinv start DEM` writes a settings file.")
    return text


@dataclass
class _Document:
    """Plain values of a settings file, the place of every key, and findings on the way."""

    name: str
    values: Any = None
    places: dict[tuple, tuple[int, int]] = field(default_factory=dict)
    findings: list[_Finding] = field(default_factory=list)

    def place(self, key: tuple, error: dict) -> tuple[int, int]:
        """Place of the key that an error of the data model is about, or of the section it belongs in."""
        if error["type"] == "missing":
            return _NOWHERE
        above = (key[:n] for n in range(len(key), 0, -1))
        return next((self.places[part] for part in above if part in self.places), _NOWHERE)

    def refuse(self, event: Any, message: str) -> SettingsError:
        """Error at the place of an event."""
        return SettingsError(f"{self.name}, line {_place(event)[0]}: {message}")

    def node(self, event: Any, stream: Iterator, path: tuple) -> Any:
        """Value of the node that begins with `event`."""
        # Anchors could blow a small file up, and tags could ask for code to run: settings need neither.
        if event.anchor is not None:
            raise self.refuse(event, "found an anchor or alias (& or *), expected the value itself.")
        if event.tag is not None:
            raise self.refuse(event, "found a tag (!), expected a plain value; put text in quotes.")
        if len(path) > _DEEPEST:
            raise self.refuse(event, f"found more than {_DEEPEST} levels, expected at most three.")
        if isinstance(event, events.ScalarEvent):
            return _scalar(event.value) if event.style is None else event.value
        if isinstance(event, events.SequenceStartEvent):
            return self._sequence(stream, path)
        return self._mapping(stream, path)

    def _sequence(self, stream: Iterator, path: tuple) -> list:
        items = []
        while not isinstance(event := next(stream), events.SequenceEndEvent):
            items.append(self.node(event, stream, (*path, len(items))))
        return items

    def _mapping(self, stream: Iterator, path: tuple) -> dict:
        values = {}
        while not isinstance(event := next(stream), events.MappingEndEvent):
            if not isinstance(event, events.ScalarEvent) or event.anchor or event.tag:
                raise self.refuse(event, "found a key that is not plain text.")
            key = (*path, event.value)
            first = self.places.setdefault(key, _place(event))
            value = self.node(next(stream), stream, key)
            if event.value in values:
                message = f"{_dotted(key)}: found twice, first in line {first[0]}; take one out."
                self.findings.append((_place(event), partial(str, message)))
            else:
                values[event.value] = value
        return values


def _place(event: Any) -> tuple[int, int]:
    """Line and column, both from 1."""
    return event.start_mark.line + 1, event.start_mark.column + 1


def _scalar(word: str) -> Any:
    """Meaning of an unquoted word."""
    if word in _CONSTANTS:
        return _CONSTANTS[word]
    if _INTEGER.fullmatch(word):
        return int(word, {"o": 8, "x": 16}.get(word[1:2], 10))
    if _FLOAT.fullmatch(word):
        return float(word)
    if _NOT_FINITE.fullmatch(word):
        return float(word.replace(".", ""))
    return word


def _read_document(name: str, text: str) -> _Document:
    """Parse the one document of the file, which must be a mapping."""
    document = _Document(name)
    try:
        _fill(document, YAML(typ="safe", pure=True).parse(text))
    except SettingsError:  # a ValueError too
        raise
    except (YAMLError, ValueError, AssertionError) as error:  # the last two: an odd %YAML line
        line, message = _syntax(text, error)
        raise SettingsError(f"{name}, line {line}: {message}") from None
    return document


def _fill(document: _Document, stream: Iterator) -> None:
    """Take the events of the parser one by one, so that a hostile file is refused before it is read."""
    next(stream)  # start of the stream
    start = next(stream)
    if isinstance(start, events.StreamEndEvent):
        raise SettingsError(f"{document.name}: the file holds comments only. `fluvinv start DEM` writes one.")
    if start.version not in (None, (1, 2)):
        raise document.refuse(start, _OTHER_YAML)
    document.values = document.node(next(stream), stream, ())
    next(stream)  # end of the document
    after = next(stream)
    if isinstance(after, events.DocumentStartEvent):
        raise document.refuse(after, "found a second document (---), expected one; take the line out.")
    if not isinstance(document.values, dict):
        found = shown(document.values)
        raise SettingsError(f"{document.name}: found {found}, expected a mapping with keys such as catchment.")


def _syntax(text: str, error: Exception) -> tuple[int, str]:
    """Line and plain words for text that is not YAML."""
    if hasattr(error, "position"):
        line = text[: error.position].count("\n")
        return line + 1, "found a control character, expected plain text."
    if not hasattr(error, "problem_mark"):
        line = text[: text.find("%YAML") + 1].count("\n")
        return line + 1, _OTHER_YAML
    line, found = error.problem_mark.line, error.problem
    if "\\t" in found:
        return line + 1, "found a tab, expected spaces; YAML is indented with spaces only."
    # An opening quote or bracket that is never closed is found only at the end of the file.
    context = error.context or ""
    if "end" in found and any(word in context for word in ("quoted", "flow sequence", "flow mapping")):
        return error.context_mark.line + 1, "a quote or bracket is opened here and never closed."
    if "mapping values" in found:
        return line + 1, "found a second colon or a wrong indentation; put text that holds a colon in quotes."
    return line + 1, "not valid YAML; look at indentation, colons, quotes and brackets here and just above."


def _dotted(key: tuple) -> str:
    text = ".".join(str(part) for part in key)
    text = text if text.isprintable() else repr(text)
    return text if len(text) <= 80 else text[:77] + "..."


def _known_part(error: dict) -> tuple:
    """Key of a finding, without the alternatives of its type that pydantic appends."""
    loc = error["loc"]
    if error["type"] == "extra_forbidden":
        return loc
    return next(loc[:n] for n in range(len(loc), -1, -1) if loc[:n] in _KNOWN or n == 0)


def _message(key: tuple, error: dict) -> str:
    """One finding of the data model in our words."""
    if error["type"] == "extra_forbidden":
        return f"{_dotted(key)}: unknown key; {_nearest(key)}"
    if error["type"] == "fluvinv":
        return f"{_dotted(key)}: {error['ctx']['message']}"
    expected = expectation(_KNOWN[key])
    if error["type"] == "missing":
        return f"{_dotted(key)} is missing, expected {expected}."
    value = error["input"]
    return f"{_dotted(key)}: found {shown(value)}{_quotes(value, expected)}, expected {expected}."


def _quotes(value: Any, expected: str) -> str:
    """Hint for a value that only its quotes, or the lack of them, make wrong."""
    if isinstance(value, str) and value and not isinstance(_scalar(value), str):
        return " (text; take the quotes away)"
    if isinstance(value, (int, float)) and expected in ("text", "the path of a file"):
        return " (not text; put it in quotes)"
    return ""


def _nearest(key: tuple) -> str:
    """Hint for an unknown key: the same name elsewhere, or the nearest one at its level."""
    elsewhere = next((known for known in _KNOWN if known[-1] == key[-1]), None)
    if elsewhere:
        return f"did you mean {_dotted(elsewhere)}?"
    level = {known[-1]: known for known in _KNOWN if known[:-1] == key[:-1]}
    near = difflib.get_close_matches(key[-1][:80], level, n=1, cutoff=0.6)
    if not near:
        names = {known[-1]: known for known in _KNOWN}
        near = difflib.get_close_matches(key[-1][:80], names, n=1, cutoff=0.8)
        level = level | names if near else level
    if near:
        return f"did you mean {_dotted(level[near[0]])}?"
    return f"known here: {', '.join(level)}."
