"""The register's format: the JSON Schema, its agreement with the model and the parsers, and what its faults say."""

import copy
import dataclasses
import json
import re
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from loopdoc.register import model
from loopdoc.register.place import Fault
from loopdoc.register.quantity import QuantityError, parse_gain, parse_number_range, parse_quantity, parse_range
from loopdoc.register.schema import failing_paths, schema_faults, schema_text
from loopdoc.register.text import TextFile, read_text
from loopdoc.register.units import UNITS
from loopdoc.rules.policy import Limits

SCHEMA = json.loads(schema_text())
DEFINITIONS = SCHEMA["$defs"]

ROOT = """\
format: 1
site: {name: Tarn Hollow Solvent Recovery, owner: Process control group, language: en, department: Process control,
       technical_reference: A. Meyer, classification: Internal}
revision: {code: B, date: 2026-11-20, status: issued for construction, summary: Second issue,
           prepared_by: Process control, checked_by: Instrumentation, approved_by: {hold: on leave},
           distribution: [Operations, Maintenance]}
history:
  - {code: A, date: 2026-09-01, status: issued for review, summary: First issue for review,
     prepared_by: Process control, checked_by: Instrumentation, approved_by: Operations, distribution: [Operations]}
numbering: "TH-{unit}-{kind}-{serial}"
tags: '(?P<letters>[A-Z]{2,5})-(?P<unit>\\d{2})(?P<serial>\\d{2})(?P<suffix>[A-Z]?)'
include: [units/*.yaml]
units:
  "20": {name: Rectification, purpose: Recovers solvent from the wet feed.}
"""

# Every key of the format once.
UNIT = """\
loops:
  TIC-2014:
    unit: "20"
    service: Rectifier tray 12 temperature
    drawing: D-20-103
    purpose: Holds the composition profile by setting the reboiler steam flow.
    measurement:
      transmitter: TT-2014
      variable: temperature
      sensor: Pt100 class A
      element: thermowell
      characteristic: linear
      range: 60 to 120 degC
      signal: 4-20 mA
      on_fault: reads high
      filter: 2 s
      tolerance: 0.3 degC
      channel: AI-2-07
      supply: 24 V DC over the signal pair
      wiring:
        - {cable: IC-2014, at: JB-2001, terminals: [5, 6, "6S"]}
        - {cable: MC-20-01, pair: 1, at: MP-02, terminals: {hold: awaiting the cabinet's drawing}}
    operating: {low: 80 degC, normal: 84.5 degC, high: 90 degC}
    controller:
      action: reverse
      form: standard
      gain: 1.8
      reset: 9 min
      rate: 0 s
      derivative_filter: 10
      setpoint_weight: 1
      rate_on: measurement
      interval: 1 s
      setpoint: {low: 78 degC, normal: 84.5 degC, high: 92 degC}
      output: {to: FIC-2011, span: 0 to 12 t/h, low: 2 t/h, high: 10.5 t/h}
      modes: {normal: automatic, permitted: [manual, automatic]}
      on_bad_measurement: {mode: manual, output: hold}
      when_not_followed: track
    process: {effect: rises, gain: 5.5 degC per t/h, lag: 9 min, lead: -10 s, dead_time: 1.5 min, integrating: false,
              source: step test 2026-05-14}
    hazard: high
    disturbances:
      steam pressure falls: {size: -2 t/h, at: process input}
      cold reflux: {size: -3 degC, lag: 4 min, dead_time: 90 s, moves: {TT-2031: {size: -8 degC, lag: 5 s}}}
      feed without light ends: {hold: process study}
    alarms:
      high_high: {limit: 97 degC}
      high: {limit: 94 degC, deadband: 0.6 degC, delay: 10 s, priority: medium, cause: Steam valve open,
             consequence: {hold: hazard study}, response: Close FV-2011, time_to_respond: 10 min,
              warns_of: {FIC-3003: high}}
      low: {limit: 80 degC}
      low_low: {limit: 76 degC}
      deviation: {limit: 3 degC}
  PIC-3001:
    unit: "30"
    service: Drum pressure
    measurement: {hold: awaiting data sheet}
    alarms: {hold: alarm review in March}
    controller: {proportional_band: 55.6 %, repeats: 0.11 1/min, on_bad_measurement: {output: 0 %}}
    process:
      branches:
        PV-3001A: {effect: falls, gain: -2.0 %/min per %, integrating: true, lags: [4 s, {hold: step test}],
                   dead_time: 1 s, source: design estimate}
        PV-3001B: {effect: falls, lag: 3 s}
final_elements:
  FV-2011: {unit: "20", kind: control valve, service: Reboiler steam, drawing: D-20-103, opens_on: rising signal,
            output_block: direct, fails: closed, safe: closed, signal: 4-20 mA, channel: AO-1-03,
            supply: instrument air 4 barg, wiring: [{cable: {hold: cable list}, pair: "cores 7, 8", at: MP-03}],
            trip_solenoid: {tag: FY-2011, channel: SDO-1-01, supply: 24 V DC, wiring: {hold: vendor package}},
            characteristic: equal percentage, stroke_time: 6 s, backlash: 0.5 %, resolution: 0.2 %}
instruments:
  PT-2021A: {unit: "20", service: Column pressure, variable: pressure, sensor: diaphragm, element: tapping,
             characteristic: linear, range: 0 to 2.5 barg, signal: 4-20 mA, on_fault: reads high, filter: 1 s,
             tolerance: 0.5 %, channel: SI-1-01, supply: 24 V DC, wiring: [{cable: IC-2021A, at: SP-01}]}
functions:
  FY-2031: {kind: ratio, unit: "20", service: Reflux to feed ratio, inputs: [FT-2001], to: FIC-2031,
            span: 0.2 to 0.8, normal: 0.45}
  LY-3001: {kind: sum, inputs: [FT-3002], weights: {FT-3002: 1.0}, to: FIC-3001}
  PY-3001: {kind: split range, outputs: {PV-3001A: 50 to 100 %, PV-3001B: 50 to 0 %}}
  FY-3002: {kind: lead-lag, inputs: [FT-3002], lead: 30 s, lag: 10 s, to: LY-3001}
  FY-3003: {kind: characteriser, to: FIC-3001, normal_input: 45 %,
            curve: [{at: 0 %, gives: 0 t/h}, {at: 100 %, gives: 12 t/h}]}
interlocks:
  IS-2001:
    unit: "20"
    service: Rectifier overpressure
    drawing: D-20-103
    layer: safety
    initiators: {PT-2021A: {trips: above 1.6 barg, delay: 1 s}, PT-2021B: {hold: vendor package}}
    voting: 2oo3
    actions: {FV-2011: closed, FIC-2011: {mode: manual, output: 0 %}, PM-2001: {hold: motor list}}
    reset: manual, local
    process_safety_time: 90 s
    response_time: 8 s
    proof_test: 12 months
    bypass: {permitted: "for the test of one transmitter at a time", approved_by: Shift supervisor, limit: 8 h}
    cause: Loss of cooling water
    consequence: Relief valve lifts
deviations:
  - {rule: secondary-range-short, at: FIC-2011, reason: Next shutdown, approved_by: Process safety, until: 2027-06-30}
texts:
  "20": {overview: The column runs at constant pressure., start_up: [Open the vent.], shut_down: [Close FV-2011.],
         upsets: {hold: operations workshop}}
"""


def read(text: str) -> TextFile:
    file = read_text(text.encode("utf-8"), "units/20.yaml")
    assert isinstance(file, TextFile), file
    return file


def faults(text: str, *, root: bool = False) -> tuple[Fault, ...]:
    return schema_faults(read(text), root=root)


@cache
def reference(root: bool) -> jsonschema.Draft202012Validator:
    """The independent validator: jsonschema, with the format `date` asserted as ours asserts it."""
    validator = jsonschema.Draft202012Validator
    return validator(json.loads(schema_text(root=root)), format_checker=validator.FORMAT_CHECKER)


def reference_paths(data: Any, *, root: bool) -> set[tuple[str | int, ...]]:
    return {tuple(error.absolute_path) for error in reference(root).iter_errors(data)}


# ---------------------------------------------------------------- the schema itself


@pytest.mark.parametrize("root", [True, False])
def test_the_schema_is_valid(root: bool) -> None:
    jsonschema.Draft202012Validator.check_schema(json.loads(schema_text(root=root)))


def test_the_file_for_included_files_only_points_at_the_one_schema() -> None:
    folder = Path(__file__).parent.parent / "schemas"
    included = json.loads((folder / "included.schema.json").read_text(encoding="utf-8"))
    file, _, pointer = included["$ref"].partition("#/$defs/")
    assert json.loads((folder / file).read_text(encoding="utf-8"))["$defs"][pointer] == DEFINITIONS["included"]
    assert set(included) == {"$schema", "title", "description", "$ref"}


def described(schema: Any, path: str = "") -> Iterator[tuple[str, dict[str, Any]]]:
    """Every part of the schema that says what may stand at a key, in a list or under a tag, with its path."""
    if isinstance(schema, list):
        for index, part in enumerate(schema):
            yield from described(part, f"{path}/{index}")
    if not isinstance(schema, dict):
        return
    for word, part in schema.items():
        here = f"{path}/{word}"
        if word in ("properties", "$defs"):
            for key, inner in part.items():
                if isinstance(inner, dict):
                    yield f"{here}/{key}", inner
                    yield from described(inner, f"{here}/{key}")
        elif word in ("items", "additionalProperties") and isinstance(part, dict):
            yield here, part
            yield from described(part, here)
        elif word not in ("examples", "enum", "required"):
            yield from described(part, here)


def followed(schema: dict[str, Any]) -> dict[str, Any]:
    if "$ref" not in schema:
        return schema
    return {**followed(DEFINITIONS[schema["$ref"].removeprefix("#/$defs/")]), **schema}


PARTS = dict(described(SCHEMA))


def test_every_key_has_a_description() -> None:
    lacking = [path for path, part in PARTS.items() if not followed(part).get("description", "").endswith(".")]
    assert lacking == []


def test_every_value_has_an_example_that_the_format_takes() -> None:
    defs = {"$schema": SCHEMA["$schema"], "$defs": DEFINITIONS}
    kinds = {f"/$defs/{name}" for name in DEFINITIONS}  # kinds of value; their uses carry the examples
    lacking = [path for path, part in PARTS.items() if path not in kinds and not followed(part).get("examples")]
    assert lacking == []
    for path, part in PARTS.items():
        checker = jsonschema.Draft202012Validator({**defs, **part})
        for shown in followed(part).get("examples", ()):
            assert [error.message for error in checker.iter_errors(shown)] == [], path


def test_the_schema_uses_no_keyword_with_poor_messages() -> None:
    words = set(re.findall(r'"(\w+)": [\[{]', schema_text()))
    assert not words & {"oneOf", "anyOf", "allOf", "not", "patternProperties", "propertyNames"}


def test_every_mapping_is_closed_or_says_what_its_entries_are() -> None:
    open_ones = [
        path
        for path, part in PARTS.items()
        for body in (part, part.get("else", {}), part.get("then", {}))
        if "properties" in body and "additionalProperties" not in body
    ]
    assert open_ones == []


def test_patterns_are_of_the_linear_kind() -> None:
    patterns = set(re.findall(r'"pattern": "((?:[^"\\]|\\.)*)"', schema_text()))
    assert len(patterns) > 5
    for written in patterns:
        pattern = json.loads(f'"{written}"')
        assert not re.search(r"\(\?|\\[0-9]", pattern), "a look-around or back reference needs backtracking"
        # No repeated group holds another repetition: the usual source of exponential search.
        assert not re.search(r"\([^()]*[+*][^()]*\)[+*]", pattern)


def test_the_samples_hold_every_key_and_are_valid() -> None:
    assert faults(ROOT, root=True) == ()
    assert faults(UNIT) == ()
    assert reference_paths(read(ROOT).data, root=True) == set()
    assert reference_paths(read(UNIT).data, root=False) == set()
    written = set(re.findall(r"[\w]+(?=:)", ROOT + UNIT))
    known = {path.split("/")[-1] for path in PARTS if path.split("/")[-2] == "properties"}
    assert known - written == {"policy", *DEFINITIONS["policy"]["properties"]}


# ---------------------------------------------------------------- the schema and the model say the same

RENAMED = {
    # attribute of the model: keys of the register
    ("process", "lags"): {"lag", "lags"},
    ("branch", "lags"): {"lag", "lags"},
    ("initiator", "direction"): {"trips"},
    ("initiator", "limit"): {"trips"},
}
NOT_WRITTEN = {
    # attributes that are the key of the part, or are written otherwise
    "loop": {"tag"},
    "final_element": {"tag"},
    "function": {"tag"},
    "interlock": {"tag"},
    "initiator": {"tag"},
    "action": {"tag", "position"},  # `FV-2011: closed`
    "alarm": {"kind"},
    "disturbance": {"name"},
    "move": {"tag"},
    "plant_unit": {"number"},
    "branch": {"branches"},  # a branch has none of its own
}
CLASSES = {
    "measurement": model.Measurement,
    "operating": model.Operating,
    "setpoint": model.Setpoint,
    "output": model.Output,
    "modes": model.Modes,
    "on_bad_measurement": model.BadMeasurement,
    "controller": model.Controller,
    "process": model.Process,
    "branch": model.Process,
    "alarm": model.Alarm,
    "disturbance": model.Disturbance,
    "move": model.Move,
    "loop": model.Loop,
    "final_element": model.FinalElement,
    "function": model.Function,
    "curve_point": model.CurvePoint,
    "connection": model.Connection,
    "trip_solenoid": model.TripSolenoid,
    "initiator": model.Initiator,
    "action": model.InterlockAction,
    "bypass": model.Bypass,
    "interlock": model.Interlock,
    "site": model.Site,
    "revision": model.Revision,
    "earlier_revision": model.Revision,
    "plant_unit": model.PlantUnit,
    "unit_text": model.UnitText,
    "deviation": model.Deviation,
}


def keys(name: str) -> set[str]:
    part = DEFINITIONS[name]
    body = next(body for body in (part, part.get("else", {}), part.get("then", {})) if "properties" in body)
    return set(body["properties"]) - {"hold"}


def attributes(of: type) -> set[str]:
    return {entry.name for entry in dataclasses.fields(of)} - {"origin"}


@pytest.mark.parametrize("name", CLASSES)
def test_the_keys_are_the_attributes_of_the_model(name: str) -> None:
    expected: set[str] = set()
    for attribute in attributes(CLASSES[name]) - NOT_WRITTEN.get(name, set()):
        expected |= RENAMED.get((name, attribute), {attribute})
    assert keys(name) == expected


def test_the_keys_of_an_instrument_are_its_own_and_those_of_its_measurement() -> None:
    own = attributes(model.Instrument) - {"tag", "measurement"}
    assert keys("instrument") == own | attributes(model.Measurement) - {"transmitter"}


def test_the_sections_are_those_of_the_model() -> None:
    of_model = attributes(model.Register) - {"root", "files", "twice", "holds", "tag_pattern"} | {"tags"}
    assert keys("root") == of_model | {"format", "include"}
    assert keys("included") == keys("root") - {
        "format", "include", "site", "revision", "history", "numbering", "tags", "units", "policy"
    }  # fmt: skip


def test_every_class_of_the_model_that_is_written_is_compared() -> None:
    parts = {
        part
        for part in vars(model).values()
        if isinstance(part, type) and issubclass(part, model.Part) and part is not model.Part
    }
    assert parts == {*CLASSES.values(), model.Instrument}


def test_alarm_kinds_are_those_of_the_model() -> None:
    assert keys("alarms") == {*model.ALARM_ORDER, "deviation"}


def test_policy_tells_the_thresholds_of_the_rules() -> None:
    told = {}
    for limit in dataclasses.fields(Limits):
        meaning, unit, source = (limit.metadata[word] for word in ("meaning", "unit", "source"))
        description = f"{meaning[0].upper()}{meaning[1:]} [{unit}]; default {limit.default:g}, {source}."
        told[limit.name] = {
            "title": "number",
            "description": description,
            "type": "number",
            "minimum": 0,
            "examples": [limit.default],
        }
    assert DEFINITIONS["policy"]["properties"] == told


# ---------------------------------------------------------------- the schema and the parsers say the same

PARSERS = {
    # kind: parser, words that are units
    "quantity": (parse_quantity, (1,)),
    "range": (parse_range, (3,)),
    "gain": (parse_gain, (1, 3)),
}
KNOWN_UNITS = ["%", "degC", "t/h"]
WRITTEN = st.lists(
    st.sampled_from(
        ["1", "0", "07", "-2.5", "+3", ".5", "5.", "1e3", "1e", "1,5", " ", "  ", " to ", " per ", "to", *KNOWN_UNITS]
    ),
    min_size=1,
    max_size=7,
).map("".join)


@pytest.mark.parametrize("kind", PARSERS)
@settings(max_examples=300, deadline=None)
@given(written=WRITTEN)
@example(written="1 %")
@example(written="-2.5  to 1e3 degC")
@example(written="0 t/h per  %")
@example(written="07 %")
def test_patterns_take_what_the_parsers_read(kind: str, written: str) -> None:
    parse, units = PARSERS[kind]
    matches = re.search(DEFINITIONS[kind]["pattern"], written) is not None
    try:
        parse(written)
    except QuantityError:
        # The pattern knows the form only; which units there are is the parser's business.
        words = written.split()
        assert not matches or not all(words[unit] in KNOWN_UNITS for unit in units)
    else:
        assert matches


@settings(max_examples=300, deadline=None)
@given(written=WRITTEN)
def test_the_pattern_of_a_ratio_span_takes_plain_numbers(written: str) -> None:
    def reads(parse: Any) -> bool:
        try:
            parse(written)
        except QuantityError:
            return False
        return True

    if reads(parse_number_range) or reads(parse_range):
        assert re.search(DEFINITIONS["ratio_range"]["pattern"], written)


@pytest.mark.parametrize(("kind", "of"), [("time", "time"), ("frequency", "frequency")])
def test_the_units_in_a_pattern_are_those_of_their_kind(kind: str, of: str) -> None:
    for unit in UNITS.values():
        assert (re.search(DEFINITIONS[kind]["pattern"], f"9 {unit.symbol}") is not None) == (unit.kind == of), unit


# ---------------------------------------------------------------- what the faults say

LOOP = 'loops:\n  TIC-2014:\n    unit: "20"\n    service: Tray 12\n    measurement: {transmitter: TT-2014}\n'


def loop(line: str) -> str:
    """An included file with one loop and one more line in it, which is line 6."""
    return f"{LOOP}    {line}\n"


# text of an included file: place, message, remedy
SAID = {
    # the words to choose from
    loop("controller: {action: revers}"): (
        "6:26", "`action` of the controller is `revers`", "write `direct` or `reverse`"),
    loop("controller: {modes: {normal: auto}}"): (
        "6:34", "`normal` of the modes is `auto`", "write `automatic`"),
    loop("controller: {modes: {permitted: [manual, out]}}"): (
        "6:46", "entry 2 of `permitted` is `out`",
        "write `manual`, `automatic`, `cascade`, `initialisation`, `remote output` or `out of service`"),
    loop("hazard: 5"): (
        "6:13", "`hazard` of the loop is the number 5", "write `high`, `low`, `both` or `none`"),
    loop("hazard: true"): (
        "6:13", "`hazard` of the loop is `true`", "write `high`, `low`, `both` or `none`"),
    # unknown keys
    loop("controler: {action: direct}"): (
        "6:5", "`controler` is not a key of a loop", "write `controller`"),
    loop("Hazard: high"): ("6:5", "`Hazard` is not a key of a loop", "write `hazard`"),
    loop("controller: {Ti: 9 min}"): ("6:18", "`Ti` is not a key of the controller", "write `reset`"),
    loop("controller: {Ti: 9 min, reset: 9 min}"): (
        "6:18", "`Ti` is not a key of the controller", "remove it; `reset` says the same"),
    loop("controller: {dead-time: 2 s}"): (
        "6:18", "`dead-time` is not a key of the controller",
        "write one of `action`, `form`, `gain`, `proportional_band`, `reset`, `repeats`, `rate`, `derivative_filter`, "
        "`setpoint_weight`, `rate_on`, `interval`, `setpoint`, `output`, `modes`, `on_bad_measurement` or "
        "`when_not_followed`, or remove it"),
    loop("process: {dead-time: 2 s}"): ("6:15", "`dead-time` is not a key of the process", "write `dead_time`"),
    loop('"hazard ": high'): ("6:5", "the key `hazard` has a stray space", "write `hazard`"),
    loop("'x` \u00e9': 1"): (
        "6:5", "`x' é` is not a key of a loop",
        "write one of `unit`, `service`, `drawing`, `purpose`, `measurement`, `operating`, `controller`, `process`, "
        "`hazard`, `disturbances` or `alarms`, or remove it"),
    loop("hold: scope"): (
        "6:5", "`hold` is not a key of a loop", "hold its values one by one, as in `unit: {hold: reason}`"),
    # keys in the wrong place
    loop("range: 60 to 120 degC"): ("6:5", "`range` is not a key of a loop", "move it into `measurement`"),
    loop("gain: 1.8"): ("6:5", "`gain` is not a key of a loop", "move it into `controller` or `process`"),
    loop("high: {limit: 94 degC}"): ("6:5", "`high` is not a key of a loop", "move it into `alarms`"),
    loop("controller: {hazard: high}"): (
        "6:18", "`hazard` is not a key of the controller", "move it up, to the loop"),
    loop("controller: {to: FV-2011, output: {low: 0 %}}"): (
        "6:18", "`to` is not a key of the controller", "move it into `output`"),
    "site: {name: Tarn Hollow}": (
        "1:1", "`site` is not a key of the file", "move it to the root file, register.yaml"),
    'TIC-2014: {unit: "20", service: Tray 12, measurement: {}}': (
        "1:1", "`TIC-2014` is not a key of the file", "move it into `loops`"),
    "loop: {}": ("1:1", "`loop` is not a key of the file", "write `loops`"),
    # missing keys
    'loops:\n  TIC-2014:\n    unit: "20"\n    measurement: {}\n': (
        "2:3", "the loop has no `service`", "add it, as in `service: Reboiler steam flow`"),
    'loops:\n  TIC-2014:\n    unit: "20"\n    servce: x\n    measurement: {}\n': (
        "4:5", "`servce` is not a key of a loop", "write `service`"),
    loop("alarms: {high: {priority: low}}"): (
        "6:14", "the high alarm has no `limit`", "add it, as in `limit: 94 degC`"),
    "interlocks: {IS-2001: {layer: safety, initiators: {PT-1: {trips: above 1 barg}}}}": (
        "1:14", "the interlock has no `actions`",
        "add it, as in `actions: {FV-2011: closed, FIC-2011: {mode: manual, output: 0 %}}`"),
    "deviations:\n  - {rule: margin-low, at: TIC-2014, reason: x, until: 2027-01-31}\n": (
        "2:5", "deviation 1 has no `approved_by`", "add it, as in `approved_by: Process safety`"),
    # wrong types
    'loops:\n  TIC-2014: {unit: 20, service: x, measurement: {}}\n': (
        "2:20", "`unit` of the loop is the number 20", 'write `"20"` in quotes'),
    loop("alarms: [{limit: 94 degC}]"): (
        "6:13", "`alarms` of the loop is a list",
        "write a mapping, such as `high: {limit: 94 degC}`, or `{hold: reason}`"),
    loop("alarms: 94 degC"): (
        "6:13", "`alarms` of the loop is `94 degC`",
        "write a mapping, such as `high: {limit: 94 degC}`, or `{hold: reason}`"),
    loop("purpose: [a, b]"): (
        "6:14", "`purpose` of the loop is a list",
        "write text such as `Holds the composition profile by setting the reboiler steam flow.`, or `{hold: reason}`"),
    loop("operating: {low: {value: 80 degC}}"): (
        "6:22", "`low` of the operating band is a mapping", "write a value such as `80 degC`, or `{hold: reason}`"),
    loop("process: {integrating: yes}"): (
        "6:28", "`integrating` of the process is `yes`", "write `true` or `false`"),
    loop("process: {integrating: 'true'}"): (
        "6:28", "`integrating` of the process is in quotes", "write `true` without quotes"),
    loop("controller: {gain: '1.8'}"): (
        "6:24", "`gain` of the controller is in quotes", "write `1.8` without quotes"),
    loop("controller: {gain: 1.8 %}"): (
        "6:24", "`gain` of the controller is `1.8 %`",
        "write a number without a unit, such as `1.8`, or `{hold: reason}`"),
    loop("process: {lags: 9 min}"): ("6:21", "`lags` of the process is not a list", "write `[9 min]`"),
    'texts: {"20": {start_up: [Open the vent., ]}}\nloops: [x]': (
        "2:8", "`loops` is a list",
        'write a mapping, such as `TIC-2014: {unit: "20", service: Rectifier tray 12 temperature, '
        "measurement: {transmitter: TT-2014}}`"),
    'texts: {"20": {start_up: [Open the vent., 3]}}': (
        "1:43", "entry 2 of `start_up` is the number 3", 'write `"3"` in quotes'),
    'texts: {"007": {overview: 7}, "7": {}}': (
        "1:27", "`overview` of the unit's narrative is the number 7", 'write `"7"` in quotes'),
    "interlocks: {IS-1: {layer: process, initiators: {}, actions: {FV-1: open}}}": (
        "1:49", "`initiators` of the interlock is empty",
        "write a mapping, such as `PT-2021A: {trips: above 1.6 barg}`, or `{hold: reason}`"),
    # empty values
    loop("hazard:"): (
        "6:12", "`hazard` of the loop is empty", "write `high`, `low`, `both` or `none`, or leave the key out"),
    loop("drawing: ''"): (
        "6:14", "`drawing` of the loop has no text", "write text such as `D-20-103`, or `{hold: reason}`"),
    loop("alarms: {high: {limit: }}"): (
        "6:28", "`limit` of the high alarm is empty", "write a value such as `94 degC`, or `{hold: reason}`"),
    # quantities
    loop("operating: {low: 80}"): (
        "6:22", "`low` of the operating band is the number 80, without a unit",
        "write a value such as `80 degC`, or `{hold: reason}`"),
    loop("operating: {low: '84,5 degC'}"): (
        "6:22", "`low` of the operating band: `84,5 degC` has a decimal comma", "write `84.5 degC`"),
    loop("controller: {reset: 9 degC}"): (
        "6:25", "`reset` of the controller is `9 degC`", "write a time such as `9 min`, or `{hold: reason}`"),
    loop("controller: {output: {to: FIC-1, span: 0-12 t/h}}"): (
        "6:44", "`span` of the output: `0-12 t/h` joins its ends with `-`", "write `0 to 12 t/h`"),
    loop("process: {gain: 5.5 degC}"): (
        "6:21", "`gain` of the process: `5.5 degC` does not say per what",
        "write the change of the measurement per change of what moves it, such as `5.5 degC per t/h` or "
        "`0.9 %/min per t/h`, or `{hold: reason}`"),
    "functions: {FY-1: {kind: ratio, span: 0.2-0.8}}": (
        "1:39", "`span` of the function: `0.2-0.8` joins its ends with `-`", "write `0.2 to 0.8`"),
    "functions: {FY-1: {kind: ratio, span: 0.2-0.8 t/h}}": (
        "1:39", "`span` of the function: `0.2-0.8 t/h` joins its ends with `-`", "write `0.2 to 0.8 t/h`"),
    "functions: {FY-1: {kind: split range, outputs: {PV-1: 50 %}}}": (
        "1:55", "the output range PV-1: `50 %` is one value where a range is wanted",
        "write both ends, such as `50 to 100 %`, or `{hold: reason}`"),
    "functions: {FY-1: {kind: sum, weights: {FT-1: half}}}": (
        "1:47", "the weight FT-1 is `half`", "write a number without a unit, such as `1.0`, or `{hold: reason}`"),
    "deviations: [{rule: a, at: b, reason: c, approved_by: d, until: 2027-02-30}]": (
        "1:65", "`until` of deviation 1 is `2027-02-30`", "write a date such as `2027-06-30`, or `{hold: reason}`"),
    # holds
    loop("hazard: {hold: }"): (
        "6:20", "`hold` of the hazard is empty", "write a reason such as `awaiting vendor data`"),
    loop("alarms: {high: {hold: study, limit: 94 degC}}"): (
        "6:14", "`high` of the alarms is held and has `limit` as well",
        "keep `{hold: reason}` alone, or remove `hold`"),
    loop("process: {dead_time: {hold: step test, value: 2 s}}"): (
        "6:15", "`dead_time` of the process is held and has `value` as well",
        "keep `{hold: reason}` alone, or remove `hold`"),
    loop("measurement2: {hold: x}"): ("6:5", "`measurement2` is not a key of a loop",
        "write one of `unit`, `service`, `drawing`, `purpose`, `measurement`, `operating`, `controller`, `process`, "
        "`hazard`, `disturbances` or `alarms`, or remove it"),
    # one or the other
    loop("controller: {reset: 9 min, repeats: 0.11 1/min}"): (
        "6:32", "the controller has both `reset` and `repeats`", "keep one of them"),
    loop("controller: {proportional_band: 50 %, gain: 2}"): (
        "6:18", "the controller has both `gain` and `proportional_band`", "keep one of them"),
    loop("process: {lag: 3 s, lags: [3 s]}"): (
        "6:25", "the process has both `lag` and `lags`", "keep one of them"),
}  # fmt: skip


def interlock(initiator: str, action: str) -> str:
    return f"interlocks: {{IS-1: {{layer: safety, initiators: {{PT-1: {initiator}}}, actions: {{FV-1: {action}}}}}}}"


WORDS = "write `closed`, `open`, `stopped` or `started`, or a mapping such as `{mode: manual, output: 0 %}`"
SAID |= {
    interlock('{trips: "> 1.6 barg"}', "closed"): (
        "1:63", "`trips` of the initiator PT-1 is `> 1.6 barg`", "write `above 1.6 barg`"),
    interlock('{trips: "<=1.6 barg"}', "closed"): (
        "1:63", "`trips` of the initiator PT-1 is `<=1.6 barg`", "write `below 1.6 barg`"),
    interlock('{trips: "below 1,5 barg"}', "closed"): (
        "1:63", "`trips` of the initiator PT-1: `1,5 barg` has a decimal comma", "write `below 1.5 barg`"),
    interlock("{trips: 1.6 barg}", "closed"): (
        "1:63", "`trips` of the initiator PT-1 is `1.6 barg`",
        "write a trip such as `above 1.6 barg`, or `{hold: reason}`"),
    interlock("above 1.6 barg", "closed"): (
        "1:55", "the initiator PT-1 is `above 1.6 barg`",
        "write a mapping, such as `{trips: above 1.6 barg, delay: 1 s}`, or `{hold: reason}`"),
    interlock("{trips: above 1.6 barg}", "shut"): ("1:97", "the action FV-1 is `shut`", WORDS),
    interlock("{trips: above 1.6 barg}", "3"): ("1:97", "the action FV-1 is the number 3", WORDS),
    interlock("{trips: above 1.6 barg}", "[closed]"): ("1:97", "the action FV-1 is a list", WORDS),
    interlock("{trips: above 1.6 barg}", "{}"): ("1:97", "the action FV-1 is empty", WORDS),
    interlock("{trips: above 1.6 barg}", "{mod: manual}"): (
        "1:98", "`mod` is not a key of the action FV-1", "write `mode`"),
    interlock("{trips: above 1.6 barg}", "{hold: x, mode: manual}"): (
        "1:107", "the action FV-1 has both `hold` and `mode`", "keep one of them"),
}  # fmt: skip


@pytest.mark.parametrize("text", SAID)
def test_a_fault_says_what_is_wrong_and_what_to_write(text: str) -> None:
    (fault,) = faults(text)
    assert (f"{fault.place.line}:{fault.place.column}", fault.message, fault.remedy) == SAID[text]


ROOT_SAID = {
    "site: {name: x}\nformat: 2\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\n": (
        "2:9", "`format` is the number 2", "write `1`, or use a later loopdoc"),
    "site: {name: x}\nformat: '1'\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\n": (
        "2:9", "`format` is in quotes", "write `1` without quotes"),
    "site: {name: x}\nformat: 1\nrevision: {code: 0, date: 2026-01-31, status: as built}\nunits: {}\n": (
        "3:18", "`code` of the revision is the number 0", 'write `"0"` in quotes'),
    "site: {name: x}\nformat: 1\nrevision: {code: A, date: 31 Jan 2026, status: as built}\nunits: {}\n": (
        "3:27", "`date` of the revision is `31 Jan 2026`", "write a date such as `2026-11-20`, or `{hold: reason}`"),
    "site: {name: x}\nformat: 1\nrevision: {code: A, date: 2026-01-31}\nunits: {}\n": (
        "3:1", "the revision has no `status`", "add it, as in `status: issued for construction`"),
    "format: 1\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\n": (
        "1:1", "the register has no `site`",
        "add it, as in `site: {name: Tarn Hollow Solvent Recovery, owner: Process control group}`"),
    "site: Tarn Hollow\nformat: 1\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\n": (
        "1:7", "`site` is `Tarn Hollow`",
        "write a mapping, such as `{name: Tarn Hollow Solvent Recovery, owner: Process control group}`"),
    "site: {name: x}\nformat: 1\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {20: {}}\n": (
        "4:9", "the unit has no `name`", "add it, as in `name: Rectification`"),
    "site: {name: x}\nformat: 1\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\ninclude: a.yaml": (
        "5:10", "`include` is not a list", "write `[a.yaml]`"),
    "site: {name: x}\nformat: 1\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\npurpose: x": (
        "5:1", "`purpose` is not a key of the register",
        "write one of `format`, `site`, `revision`, `history`, `numbering`, `tags`, `include`, `units`, `policy`, "
        "`loops`, `final_elements`, `instruments`, `functions`, `interlocks`, `deviations` or `texts`, or remove it"),
    "site: {name: x}\nformat: 1\nrevision: {code: A, date: 2026-01-31, status: as built}\nunits: {}\nhistory: none": (
        "5:10", "`history` is `none`",
        "write a list, such as `[{code: A, date: 2026-09-01, summary: First issue for review}]`"),
    "[format, 1]": ("1:1", "the register is a list",
        "write a mapping, such as `{format: 1, site: {name: Tarn Hollow Solvent Recovery}, "
        'revision: {code: B, date: 2026-11-20, status: issued for review}, units: {"20": {name: Rectification}}}`'),
}  # fmt: skip


@pytest.mark.parametrize("text", ROOT_SAID)
def test_a_fault_of_the_root_file(text: str) -> None:
    (fault,) = faults(text, root=True)
    assert (f"{fault.place.line}:{fault.place.column}", fault.message, fault.remedy) == ROOT_SAID[text]


def test_the_pointer_names_the_value() -> None:
    (fault,) = faults('loops: {"A/B~1": {unit: "20", service: "", measurement: {}}}')
    assert fault.pointer == "/loops/A~1B~01/service"
    (unknown,) = faults("loop: {}")
    assert unknown.pointer == "/loop"
    (missing,) = faults(loop("alarms: {high: {}}"))
    assert missing.pointer == "/loops/TIC-2014/alarms/high"


def test_long_values_are_shortened_and_stay_on_one_line() -> None:
    (fault,) = faults(loop("hazard: |") + "      one\n" + "      two ` three\n" * 40)
    assert fault.message.startswith("`hazard` of the loop is `one two ' three two")
    assert fault.message.endswith("…`")
    assert len(fault.message) < 100


def test_faults_come_in_order_of_place() -> None:
    text = loop("hazard: 5") + '  FIC-2011: {unit: 20, service: "", measurement: {range: 1}, hazard: up}\n'
    places = [fault.place for fault in faults(text)]
    assert places == sorted(places)
    assert len(places) == 5


# ---------------------------------------------------------------- a corpus of broken registers

JARGON = re.compile(
    r"\b(schema|instance|propert(y|ies)|string|object|array|boolean|null|integer|pattern|enum|type|required|"
    r"additional|keyword|regex|valid|element_type|None|True|False)\b"
)
VALUES = (None, True, 3, 1.5, "", "x", " ", [], {}, ["x"], {"a": 1}, {"hold": "r"}, {"hold": ""}, {"hold": 1})


def paths(data: Any, at: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    """Paths of every value in the data, the whole left out."""
    steps = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    for step, value in steps:
        yield (*at, step)
        yield from paths(value, (*at, step))


def value_at(data: Any, path: tuple[str | int, ...]) -> Any:
    for step in path:
        data = data[step]
    return data


def check_corpus(data: Any, *, root: bool) -> tuple[Fault, ...]:
    """Both validators refuse the same values, and each refused value is told in the trade's words."""
    failing = failing_paths(data, root=root)
    assert failing == reference_paths(data, root=root)
    text = json.dumps(data)
    found = schema_faults(read(text), root=root)
    assert bool(found) == bool(failing)
    for fault in found:
        words = re.sub(r"`[^`]*`", "", f"{fault.message} {fault.remedy}")
        assert not JARGON.search(words), fault
        assert fault.message
        assert fault.remedy
        assert not re.search("[\x00-\x1f\x7f-\x9f]", fault.message + fault.remedy)
    assert len({fault.pointer for fault in found}) <= len(found) <= len({(f.pointer, f.message) for f in found})
    return found


@pytest.mark.parametrize("value", VALUES, ids=json.dumps)
@pytest.mark.parametrize("root", [True, False])
def test_every_leaf_replaced_at_once(root: bool, value: Any) -> None:
    data = read(ROOT if root else UNIT).data
    leaves = [path for path in paths(data) if not isinstance(value_at(data, path), dict | list)]
    for path in leaves:
        value_at(data, path[:-1])[path[-1]] = copy.deepcopy(value)
    found = check_corpus(data, root=root)
    pointers = {"".join(f"/{step}" for step in path).removesuffix("/hold") for path in leaves}
    # one mistake, one fault: no leaf is told twice
    told = [fault.pointer.removesuffix("/hold") for fault in found]
    assert len(told) == len(set(told))
    if not isinstance(value, dict):
        assert set(told) <= pointers


PART_PATHS = [
    (root, path)
    for root in (True, False)
    for data in [read(ROOT if root else UNIT).data]
    for path in paths(data)
    if isinstance(value_at(data, path), dict | list)
]


@pytest.mark.parametrize(("root", "path"), PART_PATHS)
def test_every_part_replaced_by_something_else(root: bool, path: tuple[str | int, ...]) -> None:
    # Only the section at hand, so that the slow reference stays quick.
    whole = read(ROOT if root else UNIT).data
    assert isinstance(whole, dict)
    kept = {"format", "site", "revision", "units"} if root else set()
    base = {name: part for name, part in whole.items() if name == path[0] or name in kept}
    for value in (None, 3, "x", [], {}, ["x"], {"a": 1}, {"hold": "r"}):
        data = copy.deepcopy(base)
        value_at(data, path[:-1])[path[-1]] = value
        found = check_corpus(data, root=root)
        if not isinstance(value, dict):
            assert len(found) <= 1, found


@pytest.mark.parametrize("root", [True, False])
def misspelt(data: Any, depth: int) -> Any:
    """The data with every key at one depth misspelt; tags and numbers of units, not in small letters, are left."""
    if isinstance(data, list):
        return [misspelt(item, depth - 1) for item in data]
    if not isinstance(data, dict) or "hold" in data:
        return data
    if depth == 0:
        return {f"{key}q" if key.islower() else key: value for key, value in data.items()}
    return {key: misspelt(value, depth - 1) for key, value in data.items()}


@pytest.mark.parametrize("depth", range(6))
@pytest.mark.parametrize("root", [True, False])
def test_every_key_of_one_depth_misspelt_at_once(root: bool, depth: int) -> None:
    whole = read(ROOT if root else UNIT).data
    data = misspelt(whole, depth)
    found = check_corpus(data, root=root)
    assert bool(found) == (data != whole)
    for fault in found:
        (written,) = re.findall(r"`(\w+)q` is not a key of", fault.message)
        assert fault.remedy == f"write `{written}`"


NAMES = sorted(
    {path.rpartition("/")[2] for path in PARTS if "/properties/" in path} | {"20", "007", "TIC-2014", "a/b~"}
)
ANY = st.recursive(
    st.none() | st.booleans() | st.integers(-5, 5) | st.floats(-1, 1) | st.sampled_from(
        ["", "x", "closed", "manual", "1 s", "0 %", "0 to 1 %", "1 % per %", "2026-11-20", "above 1 barg", "`",
         "é\u00a0"]
    ),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(NAMES), inner, max_size=5),
    max_leaves=25,
)  # fmt: skip


@settings(max_examples=200, deadline=None)
@given(data=ANY, root=st.booleans())
def test_no_data_raise_and_both_validators_agree(data: Any, root: bool) -> None:
    check_corpus(data, root=root)


@settings(max_examples=100, deadline=None)
@given(part=ANY, name=st.sampled_from(sorted(keys("included"))))
def test_no_section_raises_and_both_validators_agree(part: Any, name: str) -> None:
    check_corpus({name: {"TIC-2014": part}}, root=False)
    check_corpus({name: [part]}, root=False)


def test_a_mapping_of_very_many_unknown_keys_is_told_in_time() -> None:
    many = {f"key_{n}": n for n in range(20_000)}
    found = schema_faults(read(json.dumps(many)), root=False)
    assert len(found) == len(many)


def test_a_sentence_cut_by_a_comma_in_braces_is_told_as_such() -> None:
    text = read_text(
        b'loops:\n  LI-1001:\n    unit: "10"\n    service: Level\n    measurement: {}\n'
        b"    alarms:\n      high: {limit: 85 %, cause: Feed is too high, or the outlet is shut.}\n",
        "units/10.yaml",
    )
    assert isinstance(text, TextFile)
    (fault,) = schema_faults(text, root=False)
    assert (fault.place.line, fault.place.column) == (7, 52)
    assert fault.remedy == "put the text before it in quotes: inside `{...}` a comma ends a value"
