"""What the schema expects at each place of a register, with references followed and the hold left aside."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

Path = tuple[str | int, ...]
Schema = Mapping[str, Any]

_ELSEWHERE = frozenset({"$ref", "if", "then", "else", "$defs"})
_ANYTHING: Schema = {}


@dataclass(frozen=True, slots=True)
class Expected:
    """What may stand at one place."""

    title: str
    """What a value there is called, such as `range` or `controller`."""
    types: tuple[str, ...]
    """JSON types of the value."""
    is_free_text: bool
    """Any text will do."""
    options: tuple[Any, ...]
    """The words to choose from; empty where the value is free."""
    keys: Mapping[str, Schema]
    """Schemas of the known keys of a mapping."""
    entry: Schema | None
    """Schema of the entries by tag or number; None where the keys are fixed."""
    item: Schema | None
    """Schema of the entries of a list."""
    required: tuple[str, ...]
    excludes: Mapping[str, frozenset[str]]
    """For a key, those that may not stand beside it."""
    examples: tuple[Any, ...]
    may_be_held: bool

    @property
    def is_mapping(self) -> bool:
        """A mapping in its own right; a value or a list that may be held knows only the key `hold`."""
        return self.entry is not None or not self.keys.keys() <= {"hold"}


@dataclass(frozen=True, slots=True)
class Format:
    """The schema of one kind of file, read for its messages."""

    schema: Schema
    _known: dict[int, tuple[Schema, Expected]] = field(default_factory=dict, repr=False, compare=False)

    def expected(self, schema: Schema | None = None) -> Expected:
        """What a part of the schema (where not given, the whole) expects."""
        written = self.schema if schema is None else schema
        # The part is kept beside its answer, so that no other part can come to have its id.
        if id(written) not in self._known:
            self._known[id(written)] = (written, self._read(written))
        return self._known[id(written)][1]

    def below(self, outer: Expected, step: str | int) -> Expected:
        """What is expected one step further down."""
        schema = outer.item if isinstance(step, int) else outer.keys.get(step, outer.entry)
        if schema is None:
            schema = self.definition("reason") if step == "hold" else _ANYTHING
        return self.expected(schema)

    def definition(self, name: str) -> Schema:
        return self.schema["$defs"][name]  # type: ignore[no-any-return]

    def _read(self, schema: Schema) -> Expected:
        may_be_held = False
        while "$ref" in schema or "if" in schema:
            inner: Schema
            if "$ref" in schema:
                inner = self.definition(schema["$ref"].removeprefix("#/$defs/"))
            elif "$ref" in schema["then"]:  # held, or what is wanted
                inner = schema["else"]
                may_be_held = True
            else:  # a mapping or a word
                inner = {**schema["then"], **schema["else"]}
            own = {key: part for key, part in schema.items() if key not in _ELSEWHERE}
            schema = {**inner, **own}
        keys = schema.get("properties", {})
        entry, types = schema.get("additionalProperties"), schema.get("type", "string")
        return Expected(
            title=schema.get("title", "value"),
            types=(types,) if isinstance(types, str) else tuple(types),
            is_free_text=schema.get("pattern") == r"\S",
            options=tuple(schema.get("enum", ())),
            keys=keys,
            entry=entry if isinstance(entry, Mapping) else None,
            item=schema.get("items"),
            required=tuple(schema.get("required", ())),
            excludes={
                key: frozenset(name for name, allowed in part["properties"].items() if allowed is False)
                for key, part in schema.get("dependentSchemas", {}).items()
            },
            examples=tuple(schema.get("examples", ())),
            may_be_held=may_be_held or "hold" in keys,
        )
