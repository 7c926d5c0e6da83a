"""The register's format: what it refuses, said in the trade's words.

The JSON Schema decides; what is written there (titles, examples, keys) is also the matter of the messages, so
that an editor and the check say the same.
"""

from __future__ import annotations

import json
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from loopdoc.register.expected import Format, Path
from loopdoc.register.place import Fault
from loopdoc.register.schema_faults import explained
from loopdoc.register.text import Data, TextFile

if TYPE_CHECKING:
    from jsonschema_rs import Draft202012Validator

_FILE = "register.schema.json"


def schema_text(*, root: bool = True) -> str:
    """The JSON Schema of the root file, or of an included file, as text."""
    if root:
        return (files("loopdoc.schemas") / _FILE).read_text(encoding="utf-8")
    return json.dumps(_schema(root), indent=2, ensure_ascii=False) + "\n"


@cache
def _schema(root: bool) -> dict[str, Any]:
    """The JSON Schema of the root file, or of an included file."""
    if root:
        schema: dict[str, Any] = json.loads(schema_text())
        return schema
    schema = _schema(True)
    told = {word: schema["$defs"]["included"][word] for word in ("title", "description")}
    return {**schema, **told, "$ref": "#/$defs/included"}


def schema_faults(file: TextFile, *, root: bool) -> tuple[Fault, ...]:
    """What the format refuses in one file, in order of place; one fault for one mistake."""
    format_ = _format(root)
    found = [fault for path in failing_paths(file.data, root=root) for fault in explained(file, path, format_)]
    return tuple(sorted(found, key=lambda fault: (fault.place, fault.pointer)))


def failing_paths(data: Data, *, root: bool) -> set[Path]:
    """Paths of the values at which the schema refuses the data, each once."""
    return refused_paths(data, _validator(root))


def refused_paths(data: Data, validator: Draft202012Validator) -> set[Path]:
    """Paths of the values at which a validator refuses the data, each once."""
    paths = {tuple(error.instance_path) for error in validator.iter_errors(data)}
    # The validator's paths turn keys made of digits (`"20"`, `"007"`) into numbers; its pointers, which cost
    # ten times as much, do not.
    if any(_has_number_for_key(data, path) for path in paths):
        return {_path(data, error["instanceLocation"]) for error in validator.evaluate(data).errors()}
    return paths


def _has_number_for_key(data: Any, path: Path) -> bool:
    for step in path:
        if isinstance(step, int) and isinstance(data, dict):
            return True
        data = data[step]
    return False


def _path(data: Any, pointer: str) -> Path:
    """The path of a JSON Pointer (RFC 6901) into the data."""
    path: list[str | int] = []
    for token in pointer.split("/")[1:]:
        step = int(token) if isinstance(data, list) else token.replace("~1", "/").replace("~0", "~")
        path.append(step)
        data = data[step]
    return tuple(path)


@cache
def _format(root: bool) -> Format:
    return Format(_schema(root))


@cache
def _validator(root: bool) -> Draft202012Validator:
    return validator_of(_schema(root))


def validator_of(schema: Any) -> Draft202012Validator:
    """A validator of one of the project's schemas, with the format `date` asserted."""
    from jsonschema_rs import Draft202012Validator, RegexOptions

    return Draft202012Validator(schema, validate_formats=True, pattern_options=RegexOptions())
