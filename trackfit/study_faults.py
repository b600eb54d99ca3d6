"""Faults of a study file in words: which key, on which line, the rule, the value, the near word."""

import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from types import NoneType
from typing import Annotated, Any, get_args, get_origin

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from trackfit.study_lines import KeyPath, line_of
from trackfit.study_table import Table
from trackfit.study_values import nearest

RULES: Mapping[str, str] = {
    "rule": "{rule}",
    "missing": "required, and missing",
    "extra_forbidden": "unknown key",
    "literal_error": "must be one of {expected}",
    "string_type": "must be text in quotes",
    "string_too_short": "must not be empty",
    "string_too_long": "must be one character",
    "float_type": "must be a number",
    "int_type": "must be a whole number",
    "bool_type": "must be true or false",
    "tuple_type": "must be a list in [ ]; the header of a list of tables has two brackets [[ ]]",
    "dict_type": "must be a table",
    "model_type": "must be a table",
    "finite_number": "must be a finite number",
    "greater_than": "must be greater than {gt}",
    "greater_than_equal": "must be at least {ge}",
    "less_than": "must be less than {lt}",
    "less_than_equal": "must be at most {le}",
}
"""The rule a study breaks, by the type of pydantic's error."""

_SHOWN_LENGTH = 70


@dataclass(frozen=True)
class Fault:
    """One broken rule of a study file.

    ``path`` counts list entries from 0; the text counts them from 1.
    """

    path: KeyPath
    rule: str
    value: str = ""
    hint: str = ""

    def text(self, file: str, lines: Mapping[KeyPath, int]) -> str:
        """Return ``FILE:LINE: key.path: rule, got VALUE; did you mean "..."?``."""
        got = f", got {self.value}" if self.value else ""
        meant = f'; did you mean "{self.hint}"?' if self.hint else ""
        return f"{file}:{line_of(lines, self.path)}: {key_text(self.path)}: {self.rule}{got}{meant}"


def key_text(path: KeyPath) -> str:
    """Write a path as a reader would: ``preference[1].layer``, entries counted from 1.

    Examples
    --------
    >>> key_text(("preference", 0, "layer"))
    'preference[1].layer'
    """
    text = ""
    for part in path:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}"
    return text.removeprefix(".")


def value_text(raw: Any, path: KeyPath) -> str:
    """Write the value at a path as TOML would, cut short; empty where nothing or a table stands."""
    for part in path:
        try:
            raw = raw[part]
        except (KeyError, IndexError, TypeError):
            return ""
    if isinstance(raw, dict):
        return "a table"
    text = str(raw) if isinstance(raw, float) else json.dumps(raw, default=str, ensure_ascii=False)
    return text if len(text) <= _SHOWN_LENGTH else text[: _SHOWN_LENGTH - 3] + "..."


def faults_of(error: ValidationError, raw: Mapping[str, Any], root: type[Table]) -> list[Fault]:
    """Turn pydantic's errors into faults."""
    return [_fault(details, raw, root) for details in error.errors(include_url=False)]


def _fault(details: ErrorDetails, raw: Mapping[str, Any], root: type[Table]) -> Fault:
    kind, context = details["type"], details.get("ctx", {})
    path: KeyPath = tuple(details["loc"])
    if context.get("key"):
        path = (*path, context["key"])
    shown = {name: f"{x:g}" if isinstance(x, float) else x for name, x in context.items()}
    if kind == "literal_error":
        shown["expected"] = context["expected"].replace("'", '"').replace(" or ", ", ")
    return Fault(
        path,
        RULES[kind].format_map(shown),
        "" if kind in ("missing", "extra_forbidden") else value_text(raw, path),
        _hint(kind, context, path, raw, root),
    )


def _hint(
    kind: str, context: Mapping[str, Any], path: KeyPath, raw: Mapping[str, Any], root: type[Table]
) -> str:
    if kind == "extra_forbidden":
        return near_key(str(path[-1]), path[:-1], root)
    if kind == "literal_error":
        choices = [part.strip(" '") for part in context["expected"].replace(" or ", ",").split(",")]
        return nearest(value_text(raw, path).strip('"'), [c for c in choices if c])
    return str(context.get("hint", ""))


def near_key(word: str, path: KeyPath, root: type[Table]) -> str:
    """Return the key of the table at ``path`` most like ``word``, or where else that key lives."""
    model = model_at(root, path)
    near = nearest(word, keys_of(model)) if model else ""
    if near:
        return near
    homes = [header for header, table in tables(root) if word in keys_of(table)]
    return f"{word} in {homes[0]}" if homes else ""


def plain_type(annotation: Any) -> Any:
    """Strip ``Annotated`` and ``| None`` from a type."""
    if get_origin(annotation) is Annotated:
        return plain_type(get_args(annotation)[0])
    inner = [kind for kind in get_args(annotation) if kind is not NoneType]
    optional = len(inner) == 1 and NoneType in get_args(annotation)
    return plain_type(inner[0]) if optional else annotation


def _inner(annotation: Any) -> tuple[Any, str]:
    """Return the type of a key's tables, and how their header is bracketed."""
    plain = plain_type(annotation)
    if get_origin(plain) is dict:
        return plain_type(get_args(plain)[1]), "[{}.NAME]"
    if get_origin(plain) is tuple:
        return plain_type(get_args(plain)[0]), "[[{}]]"
    return plain, "[{}]"


def _is_table(kind: Any) -> bool:
    return isinstance(kind, type) and issubclass(kind, BaseModel)


def keys_of(table: type[BaseModel]) -> dict[str, FieldInfo]:
    """Return the keys of a table as the file writes them."""
    return {field.alias or name: field for name, field in table.model_fields.items()}


def model_at(root: type[BaseModel], path: KeyPath) -> type[BaseModel] | None:
    """Return the schema of the table at a path, or None where the schema has no table."""
    if not path:
        return root
    first, *rest = path
    field = keys_of(root).get(str(first))
    if field is None:
        return None
    kind, header = _inner(field.annotation)
    if not _is_table(kind):
        return None
    return model_at(kind, tuple(rest if header == "[{}]" else rest[1:]))


def tables(root: type[BaseModel], above: str = "") -> Iterator[tuple[str, type[BaseModel]]]:
    """Yield each table of the schema with its header, such as ``[layers.NAME]``, in order."""
    for name, field in keys_of(root).items():
        kind, brackets = _inner(field.annotation)
        if _is_table(kind):
            header = brackets.format(f"{above}{name}")
            yield header, kind
            yield from tables(kind, above=header.strip("[]") + ".")
