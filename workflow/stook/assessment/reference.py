"""The reference of every key, from the models: ``python -m stook.assessment.reference``.

Its output stands in docs/assessment-file.md between two marks.
"""

from __future__ import annotations

import types
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined

from stook.assessment.schema import Assessment
from stook.season.definition import Variable
from stook.yields.response import Response

HIDDEN = {"subset", "source"}
"""Keys of the assessment that are set by the program and not by its file."""

TOPS: tuple[tuple[str, str, type[BaseModel]], ...] = (
    ("The assessment file", "The keys at the top of the file; each section follows.", Assessment),
    (
        "The response document",
        "One file per crop and water system, named by `crops.<crop>.systems.<system>.response`.",
        Response,
    ),
)
"""Heading, introduction and model of each kind of file."""

BEGIN, END = "<!-- reference: begin -->", "<!-- reference: end -->"


def reference() -> str:
    """Return the tables of all keys as Markdown."""
    seen: list[type[BaseModel]] = []
    lines = []
    for title, text, model in TOPS:
        lines += [f"## {title}", "", text, ""]
        for part in _models(model, seen):
            lines += _section(part, top=part is model)
    return "\n".join(lines).rstrip()


def _models(model: type[BaseModel], seen: list[type[BaseModel]]) -> Iterator[type[BaseModel]]:
    """Yield a model and the models of its fields, each once, in the order of the fields."""
    if model in seen:
        return
    seen.append(model)
    yield model
    for field in model.model_fields.values():
        for inner in _inner_models(field.annotation):
            yield from _models(inner, seen)


def _inner_models(kind: Any) -> Iterator[type[BaseModel]]:
    if isinstance(kind, type) and issubclass(kind, BaseModel):
        yield kind
    else:
        for argument in get_args(kind):
            yield from _inner_models(argument)


def _section(model: type[BaseModel], top: bool) -> list[str]:
    doc = " ".join(str(model.__doc__).split("\n\n")[0].split()).replace("``", "`")
    heading = [] if top else [f"### {_words(model)}", "", doc, ""]
    lines = [*heading, "| key | value | default | meaning |", "|---|---|---|---|"]
    for name, field in model.model_fields.items():
        if name not in HIDDEN:
            default = _default(field)
            cells = (f"`{name}`", _kind(field), default, field.description or "")
            lines.append("| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |")
    return [*lines, ""]


def _words(model: type[BaseModel]) -> str:
    """Return a model's name as words: ``WaterSystem`` is ``water system``."""
    name = model.__name__
    return "".join(f" {c.lower()}" if c.isupper() else c for c in name).strip()


def _default(field: FieldInfo) -> str:
    if field.is_required():
        return "required"
    value = field.get_default(call_default_factory=True)
    if value is None or value is PydanticUndefined or value in ({}, []):
        return ""
    if isinstance(value, BaseModel):
        return "its defaults"
    return f"`{value}`"


def _kind(field: FieldInfo) -> str:
    limits = []
    for rule in field.metadata:
        for key, words in (("ge", "at least"), ("gt", "above"), ("le", "at most"), ("lt", "below")):
            if (bound := getattr(rule, key, None)) is not None:
                limits.append(f"{words} {bound}")
    return ", ".join([_type(field.annotation), *limits])


def _type(kind: Any) -> str:
    """Return a type in words."""
    origin, arguments = get_origin(kind), get_args(kind)
    if origin is Annotated:
        return _type(arguments[0])
    if origin is Literal and set(arguments) == set(get_args(Variable)):
        return "variable"
    if origin is Literal:
        return " or ".join(f"`{value}`" for value in arguments)
    if origin in (Union, types.UnionType):
        return " or ".join(dict.fromkeys(_type(a) for a in arguments if a is not type(None)))
    if origin is list:
        return f"list of {_type(arguments[0])}"
    if origin is dict:
        return f"mapping of {_type(arguments[0])} to {_type(arguments[1])}"
    if origin is tuple:
        if arguments[-1] is ...:
            return f"list of {_type(arguments[0])}"
        if arguments == (int, int):
            return "[first year, last year]"
        return f"[{', '.join(_type(argument) for argument in arguments)}]"
    if isinstance(kind, type) and issubclass(kind, BaseModel):
        words = _words(kind)
        return f"[{words}](#{words.replace(' ', '-')})"
    names = {str: "text", int: "whole number", float: "number", bool: "true or false"}
    return {**names, Path: "path", Any: "any"}.get(kind, str(kind))


if __name__ == "__main__":
    print(reference())
