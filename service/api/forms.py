"""The words of JSON Schema in which the forms of answers are written."""

from __future__ import annotations

from typing import Any

Form = dict[str, Any]


def ref(name: str) -> Form:
    """Refer to a form by name."""
    return {"$ref": f"#/components/schemas/{name}"}


def object_of(about: str, required: Form, **optional: Form) -> Form:
    """Describe an object by its members."""
    form: Form = {"type": "object", "description": about, "properties": {**required, **optional}}
    return {**form, "required": list(required)}


def list_of(items: Form, about: str = "") -> Form:
    """Describe a list by its items."""
    return {"type": "array", "items": items, **({"description": about} if about else {})}


def or_null(form: Form) -> Form:
    """Describe what may be null."""
    if "$ref" in form:
        return {"anyOf": [form, {"type": "null"}]}
    return {**form, "type": [form["type"], "null"]}
