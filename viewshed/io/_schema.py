"""Check plain JSON values against a JSON Schema, with messages in plain words.

Only the keywords are known that the schema of the record uses. Keys that a schema does not name
are let pass, so that a later version may add some.
"""

import re
from collections.abc import Callable, Iterator, Mapping
from typing import Any


def _is_whole(value: object) -> bool:
    return isinstance(value, float) and value.is_integer()


_TYPES: dict[str, tuple[str, Callable[[Any], bool]]] = {
    "object": ("an object", lambda v: isinstance(v, dict)),
    "array": ("a list", lambda v: isinstance(v, list)),
    "string": ("a text", lambda v: isinstance(v, str)),
    "boolean": ("true or false", lambda v: isinstance(v, bool)),
    "null": ("null", lambda v: v is None),
    "number": ("a number", lambda v: isinstance(v, int | float) and not isinstance(v, bool)),
    "integer": (
        "a whole number",
        lambda v: not isinstance(v, bool) and (isinstance(v, int) or _is_whole(v)),
    ),
}
#: Longest value that a message echoes [characters].
_SHOWN = 40


def problem(value: Any, schema: Mapping[str, Any]) -> str | None:
    """Say in words where a value breaks a schema first.

    Parameters
    ----------
    value : JSON value
        What is checked.
    schema : mapping
        The schema; references lead into its own ``$defs``.

    Returns
    -------
    str or None
        Like ``'options.range_m' should be a number and is 'far'``; None where nothing is wrong.
    """
    return next(_problems(value, schema, "", schema.get("$defs", {})), None)


def _problems(
    value: Any, schema: Mapping[str, Any], where: str, defs: Mapping[str, Any]
) -> Iterator[str]:
    if "$ref" in schema:
        yield from _problems(value, defs[schema["$ref"].removeprefix("#/$defs/")], where, defs)
    wanted = _wanted(value, schema)
    if wanted is not None:
        text = repr(value)
        shown = text if len(text) <= _SHOWN else text[: _SHOWN - 3] + "..."
        yield f"{where!r} should be {wanted} and is {shown}"
    if isinstance(value, dict):
        yield from _in_object(value, schema, where, defs)
    elif isinstance(value, list) and "items" in schema:
        for index, item in enumerate(value):
            yield from _problems(item, schema["items"], f"{where}[{index}]", defs)


def _in_object(
    value: dict[str, Any], schema: Mapping[str, Any], where: str, defs: Mapping[str, Any]
) -> Iterator[str]:
    stem = f"{where}." if where else ""
    missing = [key for key in schema.get("required", ()) if key not in value]
    yield from (f"{stem + key!r} is missing" for key in missing)
    named = schema.get("properties", {})
    others = schema.get("additionalProperties") or {}
    for key, item in value.items():
        yield from _problems(item, named.get(key, others), f"{stem}{key}", defs)


def _wanted(value: Any, schema: Mapping[str, Any]) -> str | None:
    """Say what a value should be if it is not."""
    types = schema.get("type", [])
    types = [types] if isinstance(types, str) else types
    if types and not any(_TYPES[name][1](value) for name in types):
        return " or ".join(_TYPES[name][0] for name in types)
    if "const" in schema and value != schema["const"]:
        return repr(schema["const"])
    if "enum" in schema and value not in schema["enum"]:
        return "one of " + ", ".join("null" if v is None else repr(v) for v in schema["enum"])
    for kind, wanted in ((str, _wanted_text), (list, _wanted_list), (int | float, _wanted_number)):
        if isinstance(value, kind):
            return wanted(value, schema)
    return None


def _wanted_text(value: Any, schema: Mapping[str, Any]) -> str | None:
    if len(value) < schema.get("minLength", 0):
        return "a text that is not empty"
    if "pattern" in schema and not re.search(schema["pattern"], value):
        return f"a text like {schema['pattern']}"
    return None


def _wanted_list(value: Any, schema: Mapping[str, Any]) -> str | None:
    least, most = schema.get("minItems", 0), schema.get("maxItems")
    if len(value) < least or (most is not None and len(value) > most):
        return f"a list of {least}" + ("" if most == least else " or more")
    return None


def _wanted_number(value: Any, schema: Mapping[str, Any]) -> str | None:
    if "minimum" in schema and value < schema["minimum"]:
        return f"{schema['minimum']} or more"
    if "exclusiveMinimum" in schema and value <= schema["exclusiveMinimum"]:
        return f"more than {schema['exclusiveMinimum']}"
    return None
