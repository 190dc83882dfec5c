"""Load plans: TOML to model, with every problem of a file told in one run."""

import tomllib
from collections.abc import Mapping
from difflib import get_close_matches
from pathlib import Path
from typing import Any, get_origin

from pydantic import BaseModel, ValidationError

from pcaptool.problem import Problem, UsageError
from pcaptool.simulate.plan import Plan

EXPECTED = {
    "string_type": "text", "int_type": "a whole number", "float_type": "a number",
    "float_parsing": "a number",
    "bool_type": "true or false", "tuple_type": "an array", "dict_type": "a table", "model_type": "a table",
    "missing": "a value", "int_from_float": "a whole number",
}
KINDS = {str: "text", list: "an array", tuple: "an array", dict: "a table"}


def load_plan(path: str | Path) -> Plan:
    """Load a plan from a TOML file; raises UsageError with all its problems."""
    path = Path(path)
    try:
        values = tomllib.loads(path.read_bytes().decode("utf-8"))
    except OSError as error:
        raise UsageError(Problem(file=path.name, place="", found=error.strerror or "an unreadable file",
                                 expected="a plan", fix="check the path")) from None
    except UnicodeDecodeError as error:
        raise UsageError(Problem(file=path.name, place=f"byte {error.start}", found="bytes that are no UTF-8",
                                 expected="a TOML file in UTF-8", fix="save the file as UTF-8")) from None
    except tomllib.TOMLDecodeError as error:
        raise UsageError(Problem(file=path.name, place="", found=str(error), expected="TOML",
                                 fix="look at that line; strings need quotes")) from None
    return make_plan(values, path.name)


def make_plan(values: Mapping[str, Any], origin: str) -> Plan:
    """Return the plan of some values, as TOML gives them; raises UsageError with all their problems.

    origin  file or place that the values come from, for the problems
    """
    try:
        return Plan.model_validate(values)
    except ValidationError as error:
        problems = {p.place: p for p in (_problem(origin, dict(e)) for e in error.errors())}
        raise UsageError(*problems.values()) from None


def _problem(origin: str, error: dict[str, Any]) -> Problem:
    """Return a validation error in our own words."""
    kind, found, context = error["type"], error["input"], error.get("ctx", {})
    place, known = _place(error["loc"])
    if kind == "extra_forbidden":
        near = get_close_matches(place.rpartition(".")[2], known, 1)
        return Problem(file=origin, place=place, found="an unknown key",
                       expected="one of " + ", ".join(known),
                       fix=f"write {near[0]}" if near else "remove it")
    if kind == "missing":
        return Problem(file=origin, place=place, found="nothing", expected="a value", fix=f"set {place}")
    bounds = {"ge": "at least", "le": "at most", "gt": "more than", "lt": "less than"}
    expected = EXPECTED.get(kind, "")
    if kind == "value_error":
        expected = str(context["error"])
    elif kind == "literal_error":
        expected = "one of " + str(context["expected"]).replace(" or ", ", ")
    elif kind in ("too_short", "too_long"):
        expected = f"{context.get('min_length', context.get('max_length'))} entries"
    for key, words in bounds.items():
        if key in context:
            expected = f"{words} {context[key]:g}"
    expected = expected or error["msg"]
    return Problem(file=origin, place=place, found=_shown(found), expected=expected, fix=f"give {expected}")


def _place(location: tuple[str | int, ...]) -> tuple[str, list[str]]:
    """Return (key path, keys that are known beside its last) of a place in a plan."""
    place, known, model, free = "", list(Plan.model_fields), Plan, False
    for part in location:
        if isinstance(part, int):
            place += f"[{part}]"
        elif free:                      # a table whose keys are names of fields
            place, free = f"{place}.{part}", False
        elif model is not None:         # else a leaf: the part names an alternative of its type
            place, known = f"{place}.{part}" if place else part, list(model.model_fields)
            annotation = model.model_fields[part].annotation if part in model.model_fields else None
            free, model = get_origin(annotation) is dict, _model_in(annotation)
    return place, known


def _model_in(annotation: Any) -> Any:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((m for m in map(_model_in, getattr(annotation, "__args__", ())) if m is not None), None)


def _shown(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    text = repr(value) if isinstance(value, str) else str(value)
    kind = next((word for type_, word in KINDS.items() if isinstance(value, type_)), "")
    return f"{kind} {text[:57] + '...' if len(text) > 60 else text}".strip()
