"""JSON Schema of the profile language, made from the models and the coding steps themselves."""

from typing import Any

from pydantic import create_model

from pcaptool.coding import STEPS, Step
from pcaptool.profile.load import RESERVED
from pcaptool.profile.model import Profile
from pcaptool.profile.parameters import parameters_model


def json_schema() -> dict[str, Any]:
    """Return the schema (draft 2020-12) of a profile file."""
    bare = {name: f for name, f in Profile.model_fields.items() if name not in (*RESERVED, "coding")}
    whole = _without_coding().model_json_schema()
    properties = {name: whole["properties"][name] for name in bare}
    definitions = whole.get("$defs", {})
    properties["coding"] = {
        "type": "array", "description": "the transmitter's coding steps, in its order",
        "items": {"oneOf": [_step(kind) for kind in STEPS.values()]},
    }
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema", "title": "pcaptool profile", "type": "object",
        "properties": properties, "required": [n for n in whole["required"] if n in properties],
        "additionalProperties": False, "$defs": definitions,
    }


def _without_coding() -> type[Profile]:
    return create_model("Bare", __base__=Profile, coding=(tuple[str, ...], ()))


def _step(kind: type[Step]) -> dict[str, Any]:
    schema = parameters_model(kind).model_json_schema()
    return {
        "type": "object", "title": kind.name, "description": schema.get("description", ""),
        "properties": {"step": {"const": kind.name}, **schema.get("properties", {})},
        "required": ["step", *schema.get("required", [])], "additionalProperties": False,
    }
