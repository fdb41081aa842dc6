"""Tell what pydantic found wrong with a table in the words of the study file.

Pydantic checks shapes, types and ranges; its messages speak of Python.  Here each of them
becomes a `Problem`: table and key as written, value got, what is expected, the nearest
valid name and the cure.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any, get_args, get_origin

import annotated_types
from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from tolsim.errors import Mistake, Problem, nearest_name
from tolsim.quantity import Reader

if TYPE_CHECKING:
    from pydantic_core import ErrorDetails

_LONGEST = 60  # characters of a value quoted in a message
_NAME = "a name of letters, digits and _ that begins with a letter"
_SHAPES = {
    "string_type": "a text in quotes",
    "string_pattern_mismatch": _NAME,
    "bool_type": "true or false",
    "bool_parsing": "true or false",
    "int_type": "a whole number",
    "int_parsing": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "float_parsing": "a number",
    "finite_number": "a finite number",
    "tuple_type": "a list in brackets",
    "too_long": "fewer items",
    "mapping_type": "a table",
    "dict_type": "a table",
    "model_type": "a table",
}
_BOUNDS = {
    annotated_types.Gt: ("above", "gt"),
    annotated_types.Ge: ("at least", "ge"),
    annotated_types.Lt: ("below", "lt"),
    annotated_types.Le: ("at most", "le"),
}
_BOUND_ERRORS = ("greater_than", "greater_than_equal", "less_than", "less_than_equal")


def written(value: object) -> str:
    """Value as it would be written in the file, shortened to one line."""
    text = json.dumps(value, ensure_ascii=False, default=str)
    return text if len(text) <= _LONGEST else text[: _LONGEST - 3] + "..."


def tell(error: ValidationError, model: type[BaseModel], file: str, table: str) -> list[Problem]:
    """Every mistake pydantic found in one table of a file.

    Parameters
    ----------
    error : ValidationError
        What `model` raised about the table.
    model : type of BaseModel
        Record the table was read into.
    file, table : str
        Where it stands.
    """
    found: dict[tuple[int | str, ...], Problem] = {}
    for item in error.errors(include_url=False):
        place = tuple(step for step in item["loc"] if not _is_union_member(step))
        if place in found:  # a union complains once per member; its first one tells most
            continue
        problem = _problem(item, place, model)
        inner = f"{table}.{problem.table}".strip(".")
        found[place] = replace(problem, file=file, table=inner)
    return list(found.values())


def _is_union_member(step: int | str) -> bool:
    """Pydantic names the members of a union too, in its own notation: "dict[str,any]"."""
    return isinstance(step, str) and any(sign in step for sign in "[(`")


def _problem(item: ErrorDetails, place: tuple[int | str, ...], model: type[BaseModel]) -> Problem:
    """One mistake; its table is told from the record on, without file."""
    kind, value, context = item["type"], item["input"], item.get("ctx", {})
    raised = context.get("error")
    names = [step for step in place if isinstance(step, str)]
    items = [step for step in place if isinstance(step, int)]
    if isinstance(raised, Mistake) and (not names or _is_table(model, names)):
        names.append(raised.key)
    table, key = ".".join(names[:-1]), names[-1] if names else ""
    owner = _record_at(model, names[:-1])
    if kind == "too_long" or (kind == "missing" and items):
        # Pydantic tells a list that is too short by the item that is not there.
        kind, items = "item_count", items if kind == "too_long" else items[:-1]
    where = key + (f" (item {'.'.join(str(step + 1) for step in items)})" if items else "")
    if isinstance(raised, Mistake):
        got = raised.got or ("" if isinstance(value, Mapping) else written(value))
        return Problem("", table, where, got, raised.expected, raised.nearest, raised.cure)
    if kind == "extra_forbidden":
        valid = sorted(owner.model_fields)
        near = nearest_name(key, valid)
        cure = "" if near else f"Known keys: {', '.join(valid)}."
        return Problem(
            "", table, key, f"{key} = {written(value)}", "only keys known here", near, cure
        )
    got = "nothing" if kind == "missing" else written(value)
    expected, cure = _expectation(kind, context, owner.model_fields.get(key))
    return Problem("", table, where, got, expected, "", cure)


def _is_table(model: type[BaseModel], names: list[str]) -> bool:
    """True if the last of `names` is a table of its own, not a single value."""
    return _record_at(model, names) is not _record_at(model, names[:-1])


def _expectation(kind: str, context: Mapping[str, Any], field: FieldInfo | None) -> tuple[str, str]:
    """What is expected of a field, and the cure."""
    phrase = describe(field) if field is not None else ""
    if kind == "missing":
        return phrase or "a value", "Add it."
    if kind == "item_count" and field is not None:
        return f"{_length(field)} items", ""
    if kind == "literal_error":
        return str(context["expected"]).replace("'", '"'), ""
    if kind in _BOUND_ERRORS:
        return phrase or f"a number {kind.replace('_', ' ')} {next(iter(context.values()))}", ""
    if kind in {"float_type", "float_parsing"} and phrase:
        return phrase, ""
    return _SHAPES.get(kind, "something else"), ""


def describe(field: FieldInfo) -> str:
    """What a field of a record holds, as a phrase; empty if nothing can be said."""
    bounds = []
    for mark in _marks(field):
        if isinstance(mark, Reader):
            return mark.kind.phrase()
        for bound, (word, attribute) in _BOUNDS.items():
            if isinstance(mark, bound):
                bounds.append(f"{word} {_plain(getattr(mark, attribute))}")
    if bounds:
        number = "a whole number" if field.annotation is int else "a number"
        return f"{number} {' and '.join(bounds)}"
    if field.annotation is bool:
        return "true or false"
    return "a text in quotes" if field.annotation is str else ""


def _plain(bound: float) -> str:
    """A bound without the ".0" and the many digits of a float."""
    return f"{bound:.15g}"


def _length(field: FieldInfo) -> int:
    """Number of items of a field that is a tuple, optional or not."""
    pending: list[object] = [field.annotation]
    while pending:
        annotation = pending.pop(0)
        if get_origin(annotation) is tuple:
            return len(get_args(annotation))
        pending += get_args(annotation)
    return 0


def _marks(field: FieldInfo) -> Iterator[object]:
    """Readers and bounds that stand in the annotation of a field, optional or not."""
    for mark in field.metadata:
        yield from _unfolded(mark)
    for part in get_args(field.annotation):
        for mark in getattr(part, "__metadata__", ()):
            yield from _unfolded(mark)


def _unfolded(mark: object) -> Iterator[object]:
    yield getattr(mark, "func", mark)  # a reader hides in a BeforeValidator
    if isinstance(mark, FieldInfo):
        yield from mark.metadata


def _record_at(model: type[BaseModel], names: list[str]) -> type[BaseModel]:
    """Record class that `names` lead to, staying where a step is no record."""
    for name in names:
        field = model.model_fields.get(name)
        if field is None:
            return model
        annotation = field.annotation
        for part in (annotation, *get_args(annotation)):
            if isinstance(part, type) and issubclass(part, BaseModel):
                model = part
    return model
