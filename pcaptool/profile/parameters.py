"""The parameters of a coding step as a strict model, made from the step's own dataclass."""

from dataclasses import MISSING, fields
from functools import cache
from typing import Any, get_type_hints

from pydantic import create_model
from pydantic.fields import FieldInfo
from typing_extensions import Doc

from pcaptool.coding import Step
from pcaptool.profile.model import Strict


@cache
def parameters_model(kind: type[Step]) -> type[Strict]:
    """Return a model with the keys, types, bounds and descriptions of a step."""
    hints = get_type_hints(kind, include_extras=True)
    keys: dict[str, Any] = {}
    for f in fields(kind):  # type: ignore[arg-type]
        hint = hints[f.name]
        doc = next((m.documentation for m in getattr(hint, "__metadata__", ()) if isinstance(m, Doc)), None)
        default = ... if f.default is MISSING else f.default
        keys[f.name] = (hint, FieldInfo(default=default, description=doc))
    return create_model(kind.__name__, __base__=Strict, __doc__=(kind.__doc__ or "").split("\n")[0], **keys)
