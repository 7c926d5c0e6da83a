"""The register's format: what it refuses, said in the trade's words.

The JSON Schema decides; what is written there (titles, examples, keys) is also the matter of the messages, so
that an editor and the check say the same.
"""

from __future__ import annotations

import json
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from loopdoc.register.place import Fault
from loopdoc.register.schema_faults import explained
from loopdoc.register.text import TextFile

if TYPE_CHECKING:
    from jsonschema_rs import Draft202012Validator

_FILE = "register.schema.json"


def schema_text(*, root: bool = True) -> str:
    """The JSON Schema of the root file, or of an included file, as text."""
    text = (files("loopdoc.schemas") / _FILE).read_text(encoding="utf-8")
    if root:
        return text
    schema = json.loads(text)
    included = {**schema, "title": "included file", "$ref": "#/$defs/included"}
    return json.dumps(included, indent=2, ensure_ascii=False) + "\n"


def schema_faults(file: TextFile, *, root: bool) -> tuple[Fault, ...]:
    """What the format refuses in one file, in order of place; one fault for one mistake."""
    failing = {tuple(error.instance_path) for error in _validator(root).iter_errors(file.data)}
    found = [fault for path in failing for fault in explained(file, path, _schema(root))]
    return tuple(sorted(found, key=lambda fault: (fault.place, fault.pointer)))


@cache
def _schema(root: bool) -> dict[str, Any]:
    schema: dict[str, Any] = json.loads(schema_text(root=root))
    return schema


@cache
def _validator(root: bool) -> Draft202012Validator:
    from jsonschema_rs import Draft202012Validator, RegexOptions

    return Draft202012Validator(_schema(root), validate_formats=True, pattern_options=RegexOptions())
