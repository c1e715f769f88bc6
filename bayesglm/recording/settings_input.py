"""From a study file and the command line to `Settings`, with errors people can act on."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from pydantic import ValidationError
from pydantic.fields import FieldInfo

from bayesglm.errors import InputError, nearest
from bayesglm.recording.selection import check_select, parse_select
from bayesglm.recording.settings import Section, Settings


def read_settings(path: Path) -> Settings:
    """Read and validate a study file.

    Parameters
    ----------
    path
        A TOML file.

    Returns
    -------
    Settings

    Raises
    ------
    InputError
        If the file cannot be read, is no TOML, or a key or value is not known.
    """
    try:
        data = tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror}); check the name") from None
    except UnicodeDecodeError:
        raise InputError(f"{path}: found bytes that are no text; save it as UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path}: this is no TOML: {error}; correct that line") from None
    return validate(data, str(path))


def override(settings: Settings, assignments: Sequence[str]) -> Settings:
    """Change settings by what the command line says.

    Parameters
    ----------
    settings
        Settings to start from.
    assignments
        ``KEY=VALUE`` each, with a dotted key and a TOML value; a value that is no TOML is a word.

    Returns
    -------
    Settings

    Raises
    ------
    InputError
        If a key is unknown or a section, or a value is not what its key expects.
    """
    for assignment in assignments:
        key, sign, text = (part.strip() for part in assignment.partition("="))
        place = f"--set {assignment}"
        if not sign or not key or not text:
            raise InputError(f"{place}: expected KEY=VALUE, such as sampling.seed=1")
        leaves = [name for name, field in known_keys() if not _is_section(field)]
        if key not in leaves:
            if any(leaf.startswith(key + ".") for leaf in leaves):
                raise InputError(f"{place}: {key} is a section; set one of the keys in it")
            raise InputError(f"{place}: unknown key {key!r}{_nearest_key(key)}")
        data = settings.model_dump(mode="json")
        *sections, name = key.split(".")
        target = data
        for section in sections:
            target = target[section]
        target[name] = _value(text)
        settings = validate(data, place)
    return settings


def add_selection(settings: Settings, expressions: Sequence[str]) -> Settings:
    """Add selections given on the command line; see `parse_select`."""
    if not expressions:
        return settings
    section = parse_select(expressions, settings.recording.select)
    recording = settings.recording.model_copy(update={"select": section})
    return settings.model_copy(update={"recording": recording})


def validate(data: Mapping[str, Any], place: str) -> Settings:
    """Validate the content of a study file.

    Parameters
    ----------
    data
        Sections, keys and values.
    place
        Where they come from, for the message.

    Returns
    -------
    Settings

    Raises
    ------
    InputError
        Naming place, key, value and what was expected, for the first key that is wrong.
    """
    try:
        # Strict, so that no word passes for a number; through JSON, so that a list is a tuple.
        text = json.dumps(data, default=str)
        settings = Settings.model_validate_json(text, strict=True)
    except ValidationError as error:
        details = error.errors(include_url=False)[0]
        raise InputError(f"{place}: {_explain(dict(details))}") from None
    try:
        check_select(settings.recording.select)
    except InputError as error:
        raise InputError(f"{place}: recording.select: {error}") from None
    return settings


def known_keys(
    section: type[Section] = Settings, prefix: str = ""
) -> Iterator[tuple[str, FieldInfo]]:
    """Yield the dotted name and the field of every section and key."""
    for name, field in section.model_fields.items():
        yield prefix + name, field
        if _is_section(field):
            assert isinstance(field.annotation, type)
            yield from known_keys(field.annotation, f"{prefix}{name}.")


def _is_section(field: FieldInfo) -> bool:
    """Tell a section from a key."""
    return isinstance(field.annotation, type) and issubclass(field.annotation, Section)


def _nearest_key(key: str) -> str:
    """Return the hint at the known key that was meant."""
    # The section the key stands in is known, and not what was meant.
    names = [name for name, _ in known_keys() if not key.startswith(name + ".")]
    leaf = key.rpartition(".")[2]
    # The right key in the wrong section is meant more often than any key that looks like it.
    for name in names:
        if name.rpartition(".")[2] == leaf:
            return f"; did you mean {name!r}?"
    return nearest(key, names) or "; the keys are listed in the settings' documentation"


def _value(text: str) -> Any:
    """Parse a TOML value; anything that is none is a word."""
    try:
        data = tomllib.loads(f"value = {text}")
    except tomllib.TOMLDecodeError:
        return text
    return data["value"] if set(data) == {"value"} else text


def _explain(details: dict[str, Any]) -> str:
    """Return key, value and what was expected, from one error of pydantic."""
    key = ".".join(str(part) for part in details["loc"] if isinstance(part, str))
    message, found = str(details["msg"]), details["input"]
    if details["type"] == "extra_forbidden":
        return f"unknown key {key!r}{_nearest_key(key)}"
    if details["type"] == "model_type":
        return f"{key}: found {found!r}; expected a section, written [{key}]"
    if details["type"] == "value_error":
        return f"{key}: {message.removeprefix('Value error, ')}"
    expected = message.removeprefix("Input should be ")
    if expected == message:
        expected = f"another number of values ({message})"
    field = dict(known_keys()).get(key)
    meaning = f" ({field.description})" if field is not None and field.description else ""
    return f"{key}: found {found!r}; expected {expected}{meaning}"
