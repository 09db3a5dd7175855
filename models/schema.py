"""What all checked TOML files share: written quantities, strictness, plain messages.

A file's schema is a tree of frozen pydantic models below :class:`Part`. Field
names carry their unit; the keys in the file (each field's ``alias``) carry none,
because the values there are written as on a schematic: ``"39n"``, ``"4k7"``.
"""

from __future__ import annotations

import tomllib
import types
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError
from pydantic.fields import FieldInfo

from .errors import InputError, near_names
from .quantity import format_quantity, parse_quantity

MAX_FILE_BYTES = 1_000_000


class Part(BaseModel):
    """Base of everything in a checked file: frozen, no unknown keys."""

    model_config = ConfigDict(
        frozen=True, extra="forbid", validate_by_name=True, validate_by_alias=True
    )


def within(unit: str, low: float, high: float, example: str) -> BeforeValidator:
    """Return a validator reading a written quantity between two limits.

    Parameters
    ----------
    unit : str
        Unit as :func:`sweepset.models.quantity.parse_quantity` knows it.
    low, high : float
        Limits, both allowed, in that unit.
    example : str
        How such a value is written, for the message.
    """

    def read(written: object) -> float:
        if isinstance(written, bool) or not isinstance(written, str | int | float):
            raise ValueError(f"expected a value such as {example!r}, got {written!r}")
        value = parse_quantity(written, unit)
        if not low <= value <= high:
            raise ValueError(
                f"{format_quantity(value, unit)} is outside {format_quantity(low, unit)} to "
                f"{format_quantity(high, unit)}; write it as on the schematic, for example "
                f"{example!r}"
            )
        return value

    return BeforeValidator(read)


def explain_faults(fault: ValidationError, source: str, model: type[BaseModel]) -> list[str]:
    """Return one plain message per fault: file, key's path, value, expectation, remedy.

    Parameters
    ----------
    fault : ValidationError
        What pydantic found.
    source : str
        The file's name.
    model : type
        The schema the file was held against.
    """
    messages = []
    errors = fault.errors(include_url=False)
    for error in errors:
        if _follows_from_others(error, errors):
            continue
        path, parent = _follow(model, error["loc"])
        for text in _explain(error, parent).split("\n"):
            # "= value" belongs to the key; a sentence stands after a colon.
            joint = " " if text.startswith(("= ", "kind = ")) else ": "
            messages.append(f"{source}: {path}{joint}{text}" if path else f"{source}: {text}")
    return messages


# What pydantic calls a fault, and how it is said to someone with a schematic.
_PLAIN_WORDS = {
    "int_type": "expected a whole number without quotes",
    "int_from_float": "expected a whole number",
    "string_type": "expected text in quotes",
    "string_too_short": "is empty; expected text in quotes",
    "string_too_long": "is too long; at most {max_length} characters",
    "greater_than_equal": "must be {ge} or more",
    "less_than_equal": "must be {le} or less",
    "model_type": "expected a table of keys",
    "model_attributes_type": "expected a table of keys",
    "dict_type": "expected a table of keys",
    "tuple_type": "expected a list",
    "literal_error": "expected {expected}",
}


def _explain(error: Any, parent: Any) -> str:
    """Return what is wrong with one key, without its place."""
    kind, context = error["type"], error.get("ctx", {})
    given = error.get("input")
    if kind == "extra_forbidden":
        known = _keys_of(parent)
        hint = near_names(str(error["loc"][-1]), known)
        return f"unknown key{hint}" + (f"; known here: {', '.join(known)}" if known else "")
    if kind == "missing":
        return "missing; this key is needed"
    if kind == "union_tag_not_found":
        return f"needs the key {context['discriminator']}, which tells its kind"
    if kind == "union_tag_invalid":
        return f"kind = {context['tag']!r} is not known; expected {context['expected_tags']}"
    if kind in ("too_short", "too_long"):
        least, most = context.get("min_length"), context.get("max_length")
        wanted = f"at least {least}" if kind == "too_short" else f"at most {most}"
        return f"there are {_length(given)}; expected {wanted}"
    if kind in _PLAIN_WORDS:
        text = _PLAIN_WORDS[kind].format(**context)
    else:
        text = str(error["msg"]).removeprefix("Value error, ")
    if (
        isinstance(given, str | int | float)
        and not isinstance(given, bool)
        and not text.startswith(repr(given))
    ):
        text = f"= {_shortened(given)}: {text}"
    return text


def _follows_from_others(error: Any, errors: list[Any]) -> bool:
    """Whether a list only seems too short because entries of it have faults of their own."""
    if error["type"] != "too_short":
        return False
    place = error["loc"]
    beneath = any(
        other["loc"][: len(place)] == place and len(other["loc"]) > len(place) for other in errors
    )
    return beneath and _length(error["input"]) >= error["ctx"]["min_length"]


def _length(given: Any) -> int:
    return len(given) if isinstance(given, list | tuple) else 0


def _shortened(given: object) -> str:
    text = repr(given)
    return text if len(text) <= 60 else text[:50] + "..."


def read_toml(path: Path, what: str) -> dict[str, Any]:
    """Return the content of a TOML file.

    Parameters
    ----------
    path : Path
        The file.
    what : str
        What the file should be, for messages ("circuit file").

    Raises
    ------
    InputError
        If it cannot be read, is too large or is not TOML.
    """
    try:
        with path.open("rb") as stream:
            raw = stream.read(MAX_FILE_BYTES + 1)
    except FileNotFoundError:
        raise InputError(f"{path}: no such {what}; check the name") from None
    except OSError as fault:
        raise InputError(f"{path}: cannot read this {what}: {fault.strerror}") from None
    if len(raw) > MAX_FILE_BYTES:
        raise InputError(f"{path}: larger than 1 MB, so not a {what}; give the right file")
    if not raw.strip():
        raise InputError(f"{path}: the file is empty; expected a {what}")
    try:
        return tomllib.loads(raw.decode("utf-8-sig"))
    except UnicodeDecodeError as fault:
        raise InputError(
            f"{path}: not a text file in UTF-8 (byte {fault.start + 1}); expected a {what}"
        ) from None
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as fault:
        raise InputError(f"{path}: not a valid {what} (TOML): {fault}") from None


def _follow(model: type[BaseModel], place: tuple[str | int, ...]) -> tuple[str, Any]:
    """Return a fault's place as in the file, counting from 1, and the schema it lies in.

    Pydantic's place also names the branches of unions, which the file does not
    show; following the schema tells them from keys that happen to be called alike.
    """
    path = ""
    current: Any = model
    parent: Any = model
    for step in place:
        branches = [b for b in _branches(current) if b is not type(None)]
        chosen = [b for b in branches if _is_branch(b, step)]
        if len(branches) > 1 and chosen:
            current = chosen[0]
            continue
        if isinstance(step, int):
            path += f"[{step + 1}]"
        elif current is None and ("(" in step or "[" in step):
            continue  # inside a union of plain values
        else:
            path += f".{step}" if path else step
        parent = current
        current = _below_step(branches, step)
    return path, parent


def _branches(annotation: Any) -> Iterator[Any]:
    """Yield the kinds a value may be of, with annotations taken off."""
    if isinstance(annotation, FieldInfo):
        annotation = annotation.annotation
    while get_origin(annotation) is Annotated:
        annotation = get_args(annotation)[0]
    if get_origin(annotation) in (Union, types.UnionType):
        for inner in get_args(annotation):
            yield from _branches(inner)
    elif annotation is not None:
        yield annotation


def _is_branch(branch: Any, step: str | int) -> bool:
    if isinstance(branch, type) and issubclass(branch, BaseModel):
        kind = branch.model_fields.get("kind")
        tags = get_args(kind.annotation) if kind is not None else ()
        return step in tags or step == branch.__name__
    return isinstance(step, str) and ("[" in step or step in ("str", "float", "int", "bool"))


def _below_step(branches: list[Any], step: str | int) -> Any:
    for branch in branches:
        if isinstance(branch, type) and issubclass(branch, BaseModel):
            for name, field in branch.model_fields.items():
                if step in (name, field.alias):
                    return field
        elif get_origin(branch) is dict:
            return get_args(branch)[1]
        elif get_origin(branch) is tuple and isinstance(step, int):
            return get_args(branch)[0]
    return None


def _keys_of(annotation: Any) -> list[str]:
    """Return the file's keys at this place of the schema, as far as it is one table."""
    found = []
    for branch in _branches(annotation):
        if isinstance(branch, type) and issubclass(branch, BaseModel):
            found += [field.alias or name for name, field in branch.model_fields.items()]
        elif get_origin(branch) is Literal:
            return []
    return list(dict.fromkeys(found))
