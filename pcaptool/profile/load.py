"""Load profiles: TOML to model, with every problem of a file told in one run."""

import hashlib
import tomllib
from difflib import get_close_matches
from pathlib import Path
from typing import Any, cast

from pydantic import ValidationError

from pcaptool.coding import STEPS, Step
from pcaptool.coding.step import ParameterError
from pcaptool.problem import Problem, ProfileError, UsageError
from pcaptool.profile.checks import cross_checks
from pcaptool.profile.model import Profile
from pcaptool.profile.parameters import parameters_model

RESERVED = ("sha256", "text", "origin")


def profiles_folder() -> Path:
    """Return the folder of shipped profiles: in the package, or beside it in a checkout."""
    package = Path(__file__).parent.parent
    inside = package / "profiles"
    return inside if inside.is_dir() else package.parent / "profiles"


def shipped_profiles() -> dict[str, Path]:
    """Return the shipped profiles by name."""
    return {path.stem: path for path in sorted(profiles_folder().glob("*.toml"))}


def load_profile(name: str | Path) -> Profile:
    """Load a shipped profile by name, or one from a file.

    Raises ProfileError with all problems of the file, in the order of the file.
    """
    shipped = shipped_profiles()
    path = Path(name)
    if str(name) in shipped and not path.is_file():
        path = shipped[str(name)]
    elif path.suffix != ".toml" and not path.is_file():
        near = get_close_matches(str(name), shipped, 1)
        raise UsageError(Problem(
            file=str(name), place="", found="no shipped profile and no file of that name",
            expected="one of " + ", ".join(shipped), fix=f"write {near[0]}" if near else "give a path to a .toml file"))
    try:
        data = path.read_bytes()
    except OSError as error:
        raise UsageError(Problem(file=str(path), place="", found=error.strerror or "an unreadable file",
                                 expected="a profile", fix="check the path")) from None
    return parse_profile(data, path.name)


def parse_profile(data: bytes, origin: str) -> Profile:
    """Return the profile in some bytes; raises ProfileError with all its problems."""
    try:
        text = data.decode("utf-8")
        raw = tomllib.loads(text)
    except UnicodeDecodeError as error:
        raise ProfileError(Problem(file=origin, place=f"byte {error.start}", found="bytes that are no UTF-8",
                                   expected="a TOML file in UTF-8", fix="save the file as UTF-8")) from None
    except tomllib.TOMLDecodeError as error:
        message = str(error)
        place = message[message.rfind("(at ") + 4 : -1] if "(at " in message else ""
        raise ProfileError(Problem(file=origin, place=place, found=message.split(" (at")[0],
                                   expected="TOML", fix="look at that line; strings need quotes")) from None
    problems: list[Problem] = []
    steps = _steps(raw.get("coding", []), origin, problems)
    for key in RESERVED:
        if key in raw:
            problems.append(_unknown(origin, key, list(Profile.model_fields)))
    rest = {k: v for k, v in raw.items() if k not in ("coding", *RESERVED)}
    profile = None
    try:
        profile = Profile.model_validate(rest | {
            "coding": tuple(steps), "sha256": hashlib.sha256(data).hexdigest(), "text": text, "origin": origin})
    except ValidationError as error:
        problems += [_translated(origin, dict(e), Profile) for e in error.errors()]
    if profile is not None and not problems:
        profile, problems = cross_checks(profile)
    if problems or profile is None:
        raise ProfileError(*sorted(problems, key=lambda p: _position(text, p.place)))
    return profile


def _steps(raw: Any, origin: str, problems: list[Problem]) -> list[Step]:
    steps: list[Step] = []
    if not isinstance(raw, list):
        problems.append(Problem(file=origin, place="coding", found=_kind(raw), expected="an array of tables",
                                fix="write [[coding]] before each step"))
        return steps
    for i, entry in enumerate(raw):
        place = f"coding[{i}]"
        name = entry.get("step") if isinstance(entry, dict) else None
        if name not in STEPS:
            near = get_close_matches(str(name), STEPS, 1)
            problems.append(Problem(
                file=origin, place=f"{place}.step", found=repr(name) if name else "no step",
                expected="one of " + ", ".join(STEPS), fix=f'write step = "{near[0]}"' if near else "name a step"))
            continue
        model = parameters_model(STEPS[name])
        try:
            parameters = model.model_validate({k: _tuples(v) for k, v in entry.items() if k != "step"})
            steps.append(STEPS[name](**dict(parameters)))
        except ValidationError as error:
            problems += [_translated(origin, dict(e), model, place) for e in error.errors()]
        except ParameterError as error:
            problems.append(Problem(file=origin, place=f"{place}.{error.key}", found=error.found,
                                    expected=error.expected, fix=error.fix))
    return steps


def _tuples(value: Any) -> Any:
    return tuple(_tuples(v) for v in value) if isinstance(value, list) else value


def _kind(value: object) -> str:
    names = {str: "text", int: "a whole number", float: "a number", bool: "true or false", list: "an array",
             dict: "a table"}
    return names.get(type(value), type(value).__name__)


def _shown(value: object) -> str:
    text = repr(value) if isinstance(value, str) else str(value)
    return f"{_kind(value)} {text if len(text) <= 40 else text[:37] + '...'}"


def _unknown(origin: str, place: str, known: list[str]) -> Problem:
    key = place.rsplit(".", 1)[-1]
    known = [k for k in known if k not in RESERVED]
    near = get_close_matches(key, known, 1)
    return Problem(file=origin, place=place, found=f"unknown key {key!r}",
                   expected="one of " + ", ".join(known),
                   fix=f"write {near[0]}" if near else "remove it")


EXPECTED = {
    "string_type": "text", "int_type": "a whole number", "float_type": "a number", "bool_type": "true or false",
    "tuple_type": "an array", "dict_type": "a table", "model_type": "a table", "bytes_type": "hex octets",
    "model_attributes_type": "a table", "dataclass_type": "a table",
}


def _translated(origin: str, error: dict[str, Any], model: type[Any], prefix: str = "") -> Problem:
    """Return a validation error in our own words."""
    location = [part for part in error["loc"] if not str(part).startswith(("function-", "constrained-", "tuple[",
                                                                          "str", "int", "float")) or part in ("int",)]
    place = prefix
    for part in location:
        place += f"[{part}]" if isinstance(part, int) else f".{part}" if place else str(part)
    kind, found, context = error["type"], error["input"], error.get("ctx", {})
    if kind in ("extra_forbidden", "unexpected_keyword_argument"):
        return _unknown(origin, place, _keys_at(model, location[:-1]))
    if kind == "missing" or kind == "missing_argument":
        key = place.rsplit(".", 1)[-1]
        return Problem(file=origin, place=place, found="nothing", expected=f"the key {key}", fix=f"set {key}")
    expected = EXPECTED.get(kind, "")
    if kind == "literal_error":
        expected = "one of " + str(context["expected"]).replace(" or ", ", ")
    elif kind in ("greater_than_equal", "less_than_equal"):
        expected = f"at least {context['ge']}" if "ge" in context else f"at most {context['le']}"
    elif kind == "string_pattern_mismatch":
        expected = f"text that fits {context['pattern']}"
    elif kind in ("too_short", "string_too_short"):
        expected = f"at least {context.get('min_length', 1)} entry"
    elif kind == "value_error":
        expected = str(context.get("error", error["msg"]))
    return Problem(file=origin, place=place, found=_shown(found), expected=expected or error["msg"],
                   fix=f"give {expected or 'a value that fits'}")


def _keys_at(model: type[Any], location: list[Any]) -> list[str]:
    """Return the keys allowed at a place of a model."""
    current: Any = model
    for part in location:
        if isinstance(part, int):
            continue
        fields = getattr(current, "model_fields", {})
        if part not in fields:
            break
        current = _model_in(fields[part].annotation) or current
    return list(cast(dict[str, Any], getattr(current, "model_fields", {})))


def _model_in(annotation: Any) -> Any:
    if hasattr(annotation, "model_fields"):
        return annotation
    for inner in getattr(annotation, "__args__", ()):
        found = _model_in(inner)
        if found is not None:
            return found
    return None


def _position(text: str, place: str) -> int:
    """Return roughly where a key path stands in the file, to tell problems in its order."""
    head, _, rest = place.partition(".")
    name, _, index = head.partition("[")
    at = -1
    for _ in range(int(index.rstrip("]") or 0) + 1 if index[:-1].isdigit() else 1):
        found = text.find(f"[{name}]", at + 1)
        at = found if found >= 0 else at
    if at < 0:
        at = max(text.find(name), 0)
    last = rest.rsplit(".", 1)[-1].partition("[")[0]
    inner = text.find(last, at) if last else at
    return inner if inner >= 0 else at
