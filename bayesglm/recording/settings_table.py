"""The table of all settings, made from the models that validate them.

``docs/settings.md`` is this text; a test holds the two together. It is written anew with

    python -m bayesglm.recording.settings_table > docs/settings.md
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from types import NoneType, UnionType
from typing import Any, Final, Literal, Union, get_args, get_origin

from annotated_types import Ge, Gt, Le, Lt
from pydantic.fields import FieldInfo

from bayesglm.recording.settings import Section, Settings

_HEAD: Final = """\
# Settings

Every key of `study.toml`, with its type, default and meaning. An unknown key is an error that
names the nearest known one. Each key can also be set on the command line with its section's name
before it, such as `--set sampling.seed=1`. A key without a default is simply left out of the file.

This page is written by `python -m bayesglm.recording.settings_table > docs/settings.md`; change
the descriptions in `bayesglm/recording/settings.py`, not here.
"""

_WORDS: Final[dict[type, str]] = {
    str: "text",
    float: "number",
    int: "whole number",
    bool: "true or false",
}


def settings_table() -> str:
    """Return the settings as Markdown: one table a section, in the order of the file.

    Returns
    -------
    str
        Ends with a line feed.
    """
    parts = [_HEAD]
    for name, section in _sections(Settings, ""):
        rows = [
            f"| `{key}` | {_type(field)} | {_default(field)} | {field.description} |"
            for key, field in section.model_fields.items()
            if not _is_section(field)
        ]
        if rows:
            head = "| key | type | default | meaning |\n|---|---|---|---|"
            parts.append("\n".join([f"## `[{name}]`", "", _purpose(section), "", head, *rows, ""]))
    return "\n".join(parts)


def _sections(section: type[Section], prefix: str) -> Iterator[tuple[str, type[Section]]]:
    """Yield the dotted name and the model of every section, each before those inside it."""
    for name, field in section.model_fields.items():
        inner = field.annotation
        if isinstance(inner, type) and issubclass(inner, Section):
            yield prefix + name, inner
            yield from _sections(inner, f"{prefix}{name}.")


def _is_section(field: FieldInfo) -> bool:
    return isinstance(field.annotation, type) and issubclass(field.annotation, Section)


def _purpose(section: type[Section]) -> str:
    """Return the first line of the model's docstring."""
    return (section.__doc__ or "").strip().split("\n")[0]


def _type(field: FieldInfo) -> str:
    """Say in words what a key takes, with its limits."""
    limits = {Gt: "above", Ge: "at least", Lt: "below", Le: "at most"}
    told = [
        f"{word} {getattr(limit, kind.__name__.lower()):g}"
        for limit in field.metadata
        for kind, word in limits.items()
        if isinstance(limit, kind)
    ]
    return ", ".join([_type_words(field.annotation), *told])


def _type_words(annotation: Any) -> str:
    origin, inner = get_origin(annotation), get_args(annotation)
    if origin is Literal:
        return " or ".join(f'`"{value}"`' for value in inner)
    if origin in (Union, UnionType):
        return " or ".join(_type_words(one) for one in inner if one is not NoneType)
    if origin is tuple:
        n = "list of" if inner[-1] is Ellipsis else {2: "two", 3: "three"}[len(inner)]
        return f"{n} {_WORDS[inner[0]]}s"
    return _WORDS[annotation]


def _default(field: FieldInfo) -> str:
    """Write a default as it would stand in the file; nothing where there is none."""
    if field.default is None:
        return ""
    return f"`{json.dumps(field.default, ensure_ascii=False)}`"


if __name__ == "__main__":
    sys.stdout.write(settings_table())
