"""The shot record, format 1: what one line of the open format may hold, and how it is checked.

`parse_record` turns a decoded JSON object into a `ShotRecord` or an `Amendment`. Settings and readings stay as they
were stated; `nightfold.settings` brings them into canonical form. `record_schema` is the JSON Schema of both.
"""

from __future__ import annotations

import json
import math
import re
import unicodedata
from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    StrictBool,
    StrictFloat,
    StrictInt,
    StrictStr,
    TypeAdapter,
    ValidationError,
    WithJsonSchema,
)

from nightfold.errors import RecordError

_FORBIDDEN = re.compile("[\x00-\x1f\x7f\ud800-\udfff]")
_NUL = re.compile("[\x00\ud800-\udfff]")
LONGEST_NAME = 200


def clean_name(text: Any) -> str:
    """Return a name in Unicode form NFC, without spaces around it.

    Raises
    ------
    ValueError
        If it is no text, empty, longer than 200 characters, or holds control characters.
    """
    if type(text) is not str:
        raise ValueError("a name (text)")
    name = text if text.isascii() else unicodedata.normalize("NFC", text)
    name = name.strip()
    if not name or len(name) > LONGEST_NAME or _FORBIDDEN.search(name):
        raise ValueError(f"a name of 1 to {LONGEST_NAME} printable characters")
    return name


def clean_text(text: Any) -> str:
    """Return free text in Unicode form NFC.

    Raises
    ------
    ValueError
        If it is no text, or holds NUL or half a surrogate pair.
    """
    if type(text) is not str:
        raise ValueError("text")
    if _NUL.search(text):
        raise ValueError("text without NUL and without half surrogate pairs")
    return text if text.isascii() else unicodedata.normalize("NFC", text)


def _named(definition: str) -> dict[str, Any]:
    return {"x-definition": definition}  # resolved in record_schema: pydantic knows no such definition yet


_PRINTABLE = r"[^\u0000-\u001f\u007f]*"
_NAME_SCHEMA = {"type": "string", "maxLength": LONGEST_NAME, "pattern": rf"^{_PRINTABLE}\S{_PRINTABLE}$"}
_REASON_SCHEMA = {"anyOf": [{"type": "string", "pattern": r"\S"}, {"type": "null"}]}
Name = Annotated[str, BeforeValidator(clean_name), WithJsonSchema(_NAME_SCHEMA)]
Text = Annotated[str, BeforeValidator(clean_text)]
_Number = StrictInt | StrictFloat


class Quantity(BaseModel):
    """A setting with its unit."""

    model_config = ConfigDict(extra="forbid")
    value: _Number | StrictStr | StrictBool | list[_Number]
    unit: StrictStr | None = None


class Reading(BaseModel):
    """A number read from a shot, with standard uncertainty and unit."""

    model_config = ConfigDict(extra="forbid")
    value: _Number | None
    stderr: Annotated[_Number, Field(ge=0), WithJsonSchema({"type": "number", "minimum": 0})] | None = None
    unit: StrictStr | None = None


class Step(BaseModel):
    """One step of a sequence."""

    model_config = ConfigDict(extra="forbid")
    name: Name
    duration: Annotated[
        Any, WithJsonSchema({"anyOf": [_named("Quantity"), {"type": "number"}, {"type": "null"}]})
    ] = None
    settings: Annotated[dict[Name, Any], WithJsonSchema(_named("Settings"))] = {}


class SequenceSteps(BaseModel):
    """A sequence stated with its steps."""

    model_config = ConfigDict(extra="forbid")
    name: Name
    steps: list[Step]


class Frame(BaseModel):
    """Where a camera frame of the shot lies."""

    model_config = ConfigDict(extra="forbid")
    camera: Name
    role: Name
    path: Text


def _plain_object(value: Any) -> Any:
    try:
        json.dumps(value, ensure_ascii=False).encode()
    except (TypeError, ValueError, RecursionError):
        raise ValueError("an object that JSON can hold") from None
    return value


def _version(value: Any) -> str:
    if type(value) in (int, float) and math.isfinite(value):
        return str(value)
    return clean_text(value)


_VERSION_SCHEMA = {"anyOf": [{"type": "string"}, {"type": "number"}]}


class Derivation(BaseModel):
    """How the observables of a record were obtained."""

    model_config = ConfigDict(extra="forbid")
    name: Name
    version: Annotated[str, BeforeValidator(_version), WithJsonSchema(_VERSION_SCHEMA)] = ""
    settings: Annotated[dict[str, Any], BeforeValidator(_plain_object)] = {}


Setting = _Number | StrictStr | StrictBool | list[_Number] | Quantity | None
_SETTINGS = TypeAdapter(dict[str, Setting])
_READINGS = TypeAdapter(dict[str, _Number | Reading | None])
_Settings = Annotated[dict[str, Any], WithJsonSchema(_named("Settings"))]
_Readings = Annotated[dict[str, Any], WithJsonSchema(_named("Readings"))]


def _whole_sequence(value: Any) -> Any:
    if isinstance(value, str):
        return clean_name(value)
    if isinstance(value, Mapping):
        return SequenceSteps.model_validate(dict(value))
    raise ValueError("a name, or an object with name and steps")


def _time(value: Any) -> Any:
    if isinstance(value, (str, datetime)):
        return value
    raise ValueError("an ISO 8601 time with an offset, such as 2026-10-05T21:14:03+02:00")


def _no_truth(value: Any) -> Any:
    if isinstance(value, bool):  # true equals 1 to Python
        raise ValueError("format 1")
    return value


def _reason(value: Any) -> str | None:
    if value is None:
        return None
    text = clean_text(value)
    if not text.strip():
        raise ValueError("a reason, or null for a shot that did not fail")
    return text


def _each_once(frames: list[Frame]) -> list[Frame]:
    if len({(frame.camera, frame.role) for frame in frames}) < len(frames):
        raise ValueError("each camera and role once")
    return frames


class ShotRecord(BaseModel):
    """One shot: its settings and what was read from it."""

    model_config = ConfigDict(extra="forbid")
    format: Annotated[Literal[1], BeforeValidator(_no_truth)] = 1
    uid: Name | None = None
    machine: Name
    started: Annotated[
        str | datetime, BeforeValidator(_time), WithJsonSchema({"type": "string", "format": "date-time"})
    ]
    sequence: Annotated[
        str | SequenceSteps,
        BeforeValidator(_whole_sequence),
        WithJsonSchema({"anyOf": [_NAME_SCHEMA, _named("SequenceSteps")]}),
    ]
    scan: Name | None = None
    swept: list[Name] = []
    planned_shots: Annotated[StrictInt, Field(ge=1)] | None = None
    last: StrictBool = False
    reference: StrictBool = False
    parameters: _Settings = {}
    observables: _Readings = {}
    failed: Annotated[str | None, BeforeValidator(_reason), WithJsonSchema(_REASON_SCHEMA)] = None
    frames: Annotated[list[Frame], AfterValidator(_each_once)] = []
    note: Text = ""
    derivation: Name | Derivation | None = None


_BROUGHT = ("observables", "frames", "note")


class Amendment(BaseModel):
    """Observables that come later than their shot or replace earlier ones, and frames and a note that are added."""

    model_config = ConfigDict(
        extra="forbid", json_schema_extra={"anyOf": [{"required": [name]} for name in _BROUGHT]}
    )
    format: Annotated[Literal[1], BeforeValidator(_no_truth)] = 1
    uid: Name
    observables: _Readings = {}
    frames: Annotated[list[Frame], AfterValidator(_each_once)] = []
    note: Text = ""
    derivation: Name | Derivation | None = None


_AMENDMENT_KEYS = {"format", "uid", "derivation", *_BROUGHT}


def parse_record(record: Any) -> ShotRecord | Amendment:
    """Return the checked record; a uid with nothing but observables, frames, note and derivation is an amendment.

    Raises
    ------
    RecordError
        Naming the first field at fault, what was found and what was wanted.
    """
    if not isinstance(record, Mapping):
        raise RecordError("", shorten(record), "one JSON object a line")
    model = Amendment if "uid" in record and record.keys() <= _AMENDMENT_KEYS else ShotRecord
    if model is Amendment and record.keys().isdisjoint(_BROUGHT):
        wanted = (
            "this field, frames or a note for a shot in the store; a shot needs machine, started and sequence"
        )
        raise RecordError("observables", "nothing", wanted)
    try:
        return model.model_validate(dict(record))
    except ValidationError as problem:
        raise _explain(problem, record, model) from None


def record_schema() -> dict[str, Any]:
    """Return the JSON Schema (2020-12) of format 1."""
    shot, amendment = (model.model_json_schema(mode="validation") for model in (ShotRecord, Amendment))
    extra = Quantity.model_json_schema(), Reading.model_json_schema(), SequenceSteps.model_json_schema()
    definitions: dict[str, Any] = {}
    for schema in (shot, amendment, *extra):
        definitions |= schema.pop("$defs", {})
        definitions[schema["title"]] = schema
    for name, adapter in (("Settings", _SETTINGS), ("Readings", _READINGS)):
        schema = adapter.json_schema()
        definitions |= schema.pop("$defs", {})
        definitions[name] = schema
    resolved: dict[str, Any] = _resolve(
        {
            "$schema": "https://json-schema.org/draft/2020-12/schema",
            "title": "nightfold shot record, format 1",
            "anyOf": [{"$ref": "#/$defs/ShotRecord"}, {"$ref": "#/$defs/Amendment"}],
            "$defs": dict(sorted(definitions.items())),
        }
    )
    return resolved


def _resolve(schema: Any) -> Any:
    if isinstance(schema, dict):
        if "x-definition" in schema:
            return {"$ref": f"#/$defs/{schema['x-definition']}"}
        return {key: _resolve(value) for key, value in schema.items()}
    return [_resolve(item) for item in schema] if isinstance(schema, list) else schema


def shorten(value: Any, longest: int = 60) -> str:
    """Return how a value found looks in a message."""
    text = repr(value)
    return text if len(text) <= longest else text[: longest - 1] + "…"


_WANTED = {
    "missing": "this field",
    "extra_forbidden": "no such field",
    "literal_error": "format 1",
    "bool_type": "true or false",
    "int_type": "a whole number",
    "string_type": "text",
    "invalid_key": "text as the name of a field",
    "dict_type": "an object",
    "list_type": "a list",
    "greater_than_equal": "a number of at least 1",
}


def _explain(problem: ValidationError, record: Mapping[str, Any], model: type[BaseModel]) -> RecordError:
    problems = problem.errors()
    first = problems[0]
    if isinstance(record.get("derivation"), Mapping):
        first = next((item for item in problems if "Derivation" in item["loc"]), first)
    skipped = ("str", "SequenceSteps", "Derivation", "[key]")
    path = [
        part for part in first["loc"] if part not in skipped and not str(part).startswith("function-before[")
    ]
    field = ".".join(str(part) for part in path)
    if isinstance(record.get("readings"), Mapping):
        wanted = "observables; readings of sensors, which belong to no shot, are taken with take --sensors"
        return RecordError("readings", shorten(dict(record["readings"])), wanted)
    part = _part(path, model)
    if first["type"] == "missing":
        needed = [name for name, item in part.model_fields.items() if item.is_required()]
        listed = " and ".join(", ".join(needed).rsplit(", ", 1))
        return RecordError(field, "nothing", f"this field; {_CALLED.get(part, 'a shot')} needs {listed}")
    if first["type"] == "extra_forbidden":
        import difflib

        near = difflib.get_close_matches(str(path[-1]), list(part.model_fields), 1)
        hint = f"no such field; is {near[0]!r} meant?" if near else "one of " + ", ".join(part.model_fields)
        return RecordError(field, shorten(first["input"]), hint)
    wanted = _WANTED.get(first["type"], first["msg"].removeprefix("Value error, "))
    return RecordError(field, shorten(first["input"]), wanted)


_CALLED: dict[type[BaseModel], str] = {
    SequenceSteps: "a sequence with steps",
    Step: "a step",
    Frame: "a frame",
    Derivation: "a derivation",
}


def _part(path: Sequence[Any], model: type[BaseModel]) -> type[BaseModel]:
    """Return the model of the part of a record that holds a field."""
    match path:
        case ["sequence", "steps", _, _]:
            return Step
        case ["sequence", _]:
            return SequenceSteps
        case ["frames", _, _]:
            return Frame
        case ["derivation", _]:
            return Derivation
    return model
