"""The part of JSON Schema (draft 2020-12) that the program's schema uses, as a validator."""

import re

TYPES = {
    "object": dict,
    "array": list,
    "string": str,
    "boolean": bool,
    "null": type(None),
}


def problems(value, schema, place="$"):
    """What is wrong with `value`, as a list of texts; a keyword not known here raises."""
    found = []
    for keyword, rule in schema.items():
        found += [f"{place}: {text}" for text in CHECKS[keyword](value, rule, schema)]
    if isinstance(value, dict):
        for key, inner in schema.get("properties", {}).items():
            if key in value:
                found += problems(value[key], inner, f"{place}.{key}")
    if isinstance(value, list) and "items" in schema:
        for i, item in enumerate(value):
            found += problems(item, schema["items"], f"{place}[{i}]")
    return found


def is_number(value):
    return isinstance(value, int | float) and not isinstance(value, bool)


def check_type(value, kind, _):
    if kind == "number":
        good = is_number(value)
    elif kind == "integer":
        good = is_number(value) and value == int(value)
    else:
        good = isinstance(value, TYPES[kind])
    if not good:
        yield f"is not {kind}: {value!r}"


def check_any(value, schemas, _):
    if not any(not problems(value, schema) for schema in schemas):
        yield f"fits none of the allowed forms: {value!r}"


def check_one(value, schemas, _):
    tried = [problems(value, schema) for schema in schemas]
    if sum(not found for found in tried) != 1:
        yield f"does not fit exactly one form: {tried}"


def violated(test, text):
    def check(value, rule, _):
        if test(value, rule):
            yield f"{text} {rule!r}: {value!r}"

    return check


def ignored(value, rule, schema):
    return ()


CHECKS = {
    "type": check_type,
    "anyOf": check_any,
    "oneOf": check_one,
    "enum": violated(lambda value, rule: value not in rule, "is not one of"),
    "const": violated(lambda value, rule: value != rule, "is not"),
    "minimum": violated(lambda value, rule: is_number(value) and value < rule, "is below"),
    "maximum": violated(lambda value, rule: is_number(value) and value > rule, "is above"),
    "minItems": violated(lambda value, rule: isinstance(value, list) and len(value) < rule, "<"),
    "maxItems": violated(lambda value, rule: isinstance(value, list) and len(value) > rule, ">"),
    "pattern": violated(
        lambda value, rule: isinstance(value, str) and not re.search(rule, value), "does not match"
    ),
    "required": violated(
        lambda value, rule: isinstance(value, dict) and not set(rule) <= set(value), "lacks some of"
    ),
    **dict.fromkeys(("properties", "items", "format", "description", "title", "$schema"), ignored),
}
