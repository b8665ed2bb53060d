"""Tables of a file checked against a pydantic model, all problems at once, each said in our own sentence.

pydantic says where and that something is wrong; what the key must be is read from the model's own field, its unit from the key's
name, and the likely cause from the value that came instead.
"""

import difflib
import math
import re
import types
from typing import Annotated, Any, Literal, TypeVar, Union, get_args, get_origin

from annotated_types import Ge, Gt, Le, Len, Lt
from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic.fields import FieldInfo

from rtctl.config.toml_file import Document, KeyPath
from rtctl.config.units import stem_of, unit_of
from rtctl.errors import Finding

TURN_RAD = 2.0 * math.pi


class Block(BaseModel):
    """A table of a file: unknown keys are refused, nothing is converted, numbers are finite, nothing changes afterwards."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


Vector3 = Annotated[list[float], Len(3, 3)]
Tensor = Annotated[list[float], Len(6, 6)]
Text = Annotated[str, Len(1)]

B = TypeVar("B", bound=Block)


def read_block(model: type[B], document: Document, path: KeyPath, raw: object, findings: list[Finding]) -> B | None:
    """The table at `path` as a frozen object, or None with its problems added to `findings`."""
    if not isinstance(raw, dict):
        findings.append(Finding(document.where(*path), f"a table{_needed_keys(model)}", value_text(raw)))
        return None
    try:
        return model.model_validate(raw)
    except ValidationError as error:
        seen: set[KeyPath] = set()
        for fault in error.errors(include_url=False, include_context=False):
            place: KeyPath = tuple(
                part for part in fault["loc"] if isinstance(part, int) or part in raw or len(fault["loc"]) == 1
            )
            if place not in seen:
                seen.add(place)
                findings.append(_finding(model, document, path, raw, place, fault))
        return None


def _finding(model: type[Block], document: Document, path: KeyPath, raw: dict[str, Any], place: KeyPath, fault: Any) -> Finding:
    key = str(place[0])
    where = document.where(*path, *place)
    if fault["type"] == "extra_forbidden":
        return unknown_key(where, key, list(model.model_fields))
    expected = field_text(key, model.model_fields[key])
    if fault["type"] == "missing":
        return Finding(where, f"given, {expected}", "nothing")
    value = fault["input"]
    if len(place) > 1 and expected.startswith("a list of "):
        expected = _number_text(key, _bounds(model.model_fields[key]))
    return Finding(where, expected, value_text(value), likely_cause(key, value))


def unknown_key(where: str, key: str, known: list[str]) -> Finding:
    """The finding for a key nobody knows: the nearest known one, one with another unit first."""
    same = [name for name in known if stem_of(name) == stem_of(key)]
    near = same or difflib.get_close_matches(key, known, 1)
    if near:
        return Finding(where, "a known key", "an unknown one", f"The nearest is {near[0]}.")
    return Finding(where, f"one of the keys {', '.join(known)}" if known else "absent", "an unknown one")


def _needed_keys(model: type[Block]) -> str:
    names = [name for name, info in model.model_fields.items() if info.is_required()]
    return f" (keys: {', '.join(names)})" if names else ""


def field_text(key: str, info: FieldInfo) -> str:
    """What a key must be, in words: `a finite number > 0 kg`, `a list of 3 finite numbers in m`."""
    inner = _not_none(info.annotation)
    if get_origin(inner) is Literal:
        return "one of " + ", ".join(str(word) for word in get_args(inner))
    if inner is bool:
        return "true or false"
    if inner is str:
        return "text"
    if inner is int:
        return f"a whole number{_bound_words(info)}"
    if inner is float:
        return _number_text(key, _bounds(info))
    if get_origin(inner) is list:
        length = next((meta for meta in _metadata(info) if isinstance(meta, Len)), None)
        count = "" if length is None else f"{length.min_length} "
        unit = unit_of(key)
        return f"a list of {count}finite numbers" + (f" in {unit}" if unit else "")
    return info.description or "a table"


def _not_none(annotation: Any) -> Any:
    if get_origin(annotation) in (Union, types.UnionType):
        annotation = next(part for part in get_args(annotation) if part is not type(None))
    return get_args(annotation)[0] if get_origin(annotation) is Annotated else annotation


def _metadata(info: FieldInfo) -> list[Any]:
    found = list(info.metadata)
    annotation = info.annotation
    for part in get_args(annotation) if get_origin(annotation) in (Union, types.UnionType) else (annotation,):
        if get_origin(part) is Annotated:
            found += get_args(part)[1:]
    return found


def _bounds(info: FieldInfo) -> list[Any]:
    return [meta for meta in _metadata(info) if isinstance(meta, (Gt, Ge, Lt, Le))]


def _signs(bounds: list[Any]) -> list[str]:
    words = []
    for bound in bounds:
        for name, sign in (("gt", ">"), ("ge", ">="), ("lt", "<"), ("le", "<=")):
            if hasattr(bound, name):
                words.append(f"{sign} {getattr(bound, name):g}")
    return words


def _bound_words(info: FieldInfo) -> str:
    words = _signs(_bounds(info))
    return " " + " and ".join(words) if words else ""


def _number_text(key: str, bounds: list[Any]) -> str:
    unit = unit_of(key)
    unit = "" if unit.startswith("(") else unit
    words = _signs(bounds)
    if words:
        return f"a finite number {' and '.join(words)} {unit}".rstrip()
    return f"a finite number in {unit}" if unit else "a finite number"


def value_text(value: object) -> str:
    """A value as messages show it; long ones are cut."""
    if isinstance(value, dict):
        return f"a table of {len(value)} keys"
    if isinstance(value, bool):
        return "true" if value else "false"
    text = f'"{value}"' if isinstance(value, str) else repr(value)
    if len(text) <= 60:
        return text
    return f"a list of {len(value)}" if isinstance(value, list) else text[:57] + "..."


def likely_cause(key: str, value: object) -> str:
    """Why a value of the wrong kind or size probably came, empty when nothing is likely."""
    unit = unit_of(key)
    if key == "gravity_m_s2" and isinstance(value, (int, float)):
        return "It is a vector in base coordinates: [0.0, 0.0, -9.80665] when z points up."
    if isinstance(value, str) and unit:
        number = re.match(r"\s*[-+]?[0-9.]+(?:[eE][-+]?[0-9]+)?\s*(.*)$", value)
        if number and number[1]:
            return f"A unit is written beside the number; write the number in {unit} alone."
        if number:
            return "The number is written as text; take the quotes away."
    if isinstance(value, (int, float)) and not isinstance(value, bool) and unit == "rad" and abs(value) > TURN_RAD:
        return looks_like_degrees(value)
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        if key.endswith("_s") and unit == "s" and value >= 1.0:
            return f"It looks like milliseconds; {value:g} ms are {value / 1000.0:g} s."
        if unit == "Hz" and 0.0 < value < 1.0:
            return f"It looks like a period; one of {value:g} s is a rate of {1.0 / value:g} Hz."
    return ""


def looks_like_degrees(value: float) -> str:
    """The sentence for an angle that was probably given in degrees."""
    return f"It looks like degrees; {value:g} degrees are {math.radians(value):.4g} rad."
