"""Reading YAML documents into pydantic models, with one clear line per fault."""

from __future__ import annotations

from pathlib import Path
from typing import Any, TypeVar

import yaml
from pydantic import BaseModel, ValidationError

from stook.errors import AssessmentError

Model = TypeVar("Model", bound=BaseModel)


_SafeLoader: type[yaml.SafeLoader] = getattr(yaml, "CSafeLoader", yaml.SafeLoader)


class _UniqueKeyLoader(_SafeLoader):  # type: ignore[misc, valid-type]
    """A safe loader that refuses a key written twice in one mapping."""


def _mapping(loader: _UniqueKeyLoader, node: yaml.MappingNode) -> dict[Any, Any]:
    seen: set[Any] = set()
    for key_node, _ in node.value:
        key = loader.construct_object(key_node)
        if key in seen:
            raise yaml.constructor.ConstructorError(
                None, None, f"key {key!r} is written twice", key_node.start_mark
            )
        seen.add(key)
    return loader.construct_mapping(node, deep=True)


_UniqueKeyLoader.add_constructor(yaml.resolver.BaseResolver.DEFAULT_MAPPING_TAG, _mapping)


def read_yaml(path: Path) -> dict[str, Any]:
    """Read a YAML mapping safely.

    Raises
    ------
    AssessmentError
        If the file is missing, is not YAML, holds a key twice, or is not a mapping.
    """
    try:
        text = Path(path).read_text(encoding="utf-8")
    except FileNotFoundError:
        raise AssessmentError(f"{path}: no such file") from None
    except (OSError, UnicodeDecodeError) as error:
        raise AssessmentError(f"{path}: cannot be read ({error})") from None
    try:
        content = yaml.load(text, Loader=_UniqueKeyLoader)  # a SafeLoader: runs nothing
    except yaml.YAMLError as error:
        reason = " ".join(str(error).split())
        raise AssessmentError(f"{path}: not valid YAML ({reason})") from None
    if not isinstance(content, dict):
        raise AssessmentError(f"{path}: must be a YAML mapping of keys to values")
    return content


def read_document(path: Path, model: type[Model]) -> Model:
    """Read a YAML document and validate it.

    Raises
    ------
    AssessmentError
        One line per fault: file, key, what is wrong, what would be valid.
    """
    return validate(read_yaml(path), model, path)


def validate(content: dict[str, Any], model: type[Model], path: Path) -> Model:
    """Validate a mapping that was read from `path`; see `read_document`."""
    try:
        return model.model_validate(content)
    except ValidationError as error:
        lines = dict.fromkeys(f"{path}: {_line(item, model)}" for item in error.errors())
        raise AssessmentError("\n".join(lines)) from None


def _line(item: Any, model: type[BaseModel]) -> str:
    key = ".".join(str(part) for part in item["loc"]) or "document"
    match item["type"]:
        case "extra_forbidden":
            valid = _valid_keys(model, item["loc"][:-1])
            hint = f"; valid here: {', '.join(valid)}" if valid else ""
            return f"{key}: unknown key{hint}"
        case "missing":
            return f"{key}: is required"
        case _ if item.get("input", key) is None:
            return f"{key}: is blank; fill it in"
        case "value_error":
            return f"{key}: {item['ctx']['error']}"
        case _:
            given = item.get("input")
            shown = f", got {given!r}" if isinstance(given, str | int | float | bool) else ""
            return f"{key}: {item['msg'][0].lower()}{item['msg'][1:]}{shown}"


def _valid_keys(model: Any, parts: tuple[Any, ...]) -> list[str]:
    """Return the keys valid at a place of a model, following lists, mappings and unions."""
    from typing import Union, get_args, get_origin

    current: list[Any] = [model]
    for part in parts:
        following: list[Any] = []
        for kind in current:
            if isinstance(kind, type) and issubclass(kind, BaseModel):
                field = kind.model_fields.get(str(part))
                following += [field.annotation] if field else [kind]
            else:
                following += list(get_args(kind))
        current = []
        while following:
            kind = following.pop()
            if get_origin(kind) is Union or "UnionType" in type(kind).__name__:
                following += get_args(kind)
            elif get_origin(kind) is not None and "Annotated" in str(get_origin(kind)):
                following.append(get_args(kind)[0])
            else:
                current.append(kind)
    keys: dict[str, None] = {}
    for kind in current:
        if isinstance(kind, type) and issubclass(kind, BaseModel):
            keys |= dict.fromkeys(kind.model_fields)
    return list(keys)
