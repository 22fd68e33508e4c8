"""Type and range faults of a document, found by its pydantic model and said in our words."""

import types
from collections.abc import Iterator
from functools import lru_cache
from typing import Annotated, Any, Union, get_args, get_origin

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from carriersim.faults import Fault, KeyPath, nearest
from carriersim.quantities import allowed_in
from carriersim.yamlfile import Document

MAX_FAULTS = 1000  # nobody reads more, and a hostile file must not cost seconds


def parse(document: Document, model: type[BaseModel]) -> tuple[BaseModel | None, list[Fault]]:
    """Build the model from a document: (object, []) or (None, faults)."""
    try:
        return model.model_validate(document.data, context=document), []
    except ValidationError as error:
        faults: dict[KeyPath, Fault] = {}
        entries = error.errors(include_url=False, include_context=False, include_input=False)
        for entry in entries[:MAX_FAULTS]:
            path = _without_tags(entry["loc"], entry["type"])
            if entry["type"] == "too_short" and len(document.get(path) or ()) > 1:
                continue  # only the valid entries were counted, and the others have their fault
            faults.setdefault(path, _fault(document, model, path, entry["type"]))
        more = len(entries) - MAX_FAULTS
        if more > 0:
            faults[()] = document.message((), f"has {more} more faults of type and range")
        return None, list(faults.values())


def _without_tags(loc: KeyPath, kind: str) -> KeyPath:
    """Drop the tags of alternatives from a pydantic path (an unknown key may look like one)."""
    *inner, last = loc
    keys = [part for part in inner if isinstance(part, int) or not part.startswith("|")]
    tag = isinstance(last, str) and last.startswith("|") and kind != "extra_forbidden"
    return tuple(keys) if tag else (*keys, last)


def _fault(document: Document, model: type[BaseModel], path: KeyPath, kind: str) -> Fault:
    allowed = allowed_at(model, path)
    if kind == "missing":
        return document.message(path, f"required, but missing; allowed: {allowed}", allowed)
    if kind == "extra_forbidden":
        return unknown_key(document, model, path)
    return document.fault(path, allowed)


def unknown_key(document: Document, model: type[BaseModel], path: KeyPath) -> Fault:
    """Refuse a key with the nearest known one and the list of those allowed there."""
    known = keys_at(model, path[:-1])
    word = str(path[-1])
    guess = nearest(word, known)
    if guess is None:
        elsewhere = [text for text in key_paths(model) if text.rpartition(".")[2] == word]
        guess = elsewhere[0] if elsewhere else None
    hint = f"did you mean {guess}? " if guess else ""
    hint = "is it part of a number? the decimal mark is a point; " if word.isdigit() else hint
    allowed = ", ".join(known)
    return document.message(path, f"unknown key; {hint}allowed keys: {allowed}", allowed)


def keys_at(model: type[BaseModel], path: KeyPath) -> tuple[str, ...]:
    """Return the keys that may stand in the mapping at a key path (none: no mapping there)."""
    kinds = _kinds_at(model, _general(path))
    return tuple(dict.fromkeys(name for kind in kinds if _is_model(kind) for name in _fields(kind)))


def allowed_at(model: type[BaseModel], path: KeyPath) -> str:
    """Return what may stand at a key path, in words."""
    kinds = _kinds_at(model, _general(path))
    if kinds and all(_is_model(kind) for kind in kinds):
        return f"a mapping with the keys {', '.join(keys_at(model, path))}"
    last = max((i for i, part in enumerate(path) if isinstance(part, str)), default=None)
    if last is None:
        return ""
    for owner in _kinds_at(model, _general(path[:last])):
        if _is_model(owner) and path[last] in _fields(owner):
            return allowed_in(_fields(owner)[path[last]].description)
    return ""


@lru_cache
def key_paths(model: type[BaseModel]) -> tuple[str, ...]:
    """Return every key path of a model, with [] for the entries of a list."""
    return tuple(dict.fromkeys(_walk(model, "")))


def _walk(kind: Any, prefix: str) -> Iterator[str]:
    if _is_model(kind):
        for name, field in _fields(kind).items():
            path = f"{prefix}.{name}" if prefix else name
            yield path
            for inner in _alternatives(field.annotation):
                yield from _walk(inner, path)
    elif get_origin(kind) is tuple:
        for inner in _alternatives(get_args(kind)[0]):
            yield from _walk(inner, f"{prefix}[]")


def _general(path: KeyPath) -> KeyPath:
    """Every entry of a list is of the same kind: the cache needs only the first."""
    return tuple(0 if isinstance(part, int) else part for part in path)


@lru_cache
def _kinds_at(model: type[BaseModel], path: KeyPath) -> tuple[Any, ...]:
    kinds: list[Any] = [model]
    for part in path:
        inner: list[Any] = []
        for kind in kinds:
            if isinstance(part, int) and get_origin(kind) is tuple:
                inner += _alternatives(get_args(kind)[0])
            elif isinstance(part, str) and _is_model(kind) and part in _fields(kind):
                inner += _alternatives(_fields(kind)[part].annotation)
        kinds = inner
    return tuple(kinds)


def _alternatives(annotation: Any) -> list[Any]:
    """Take a type apart: `Annotated[A | B, ...] | None` gives [A, B]."""
    origin = get_origin(annotation)
    if origin is Annotated:
        return _alternatives(get_args(annotation)[0])
    if origin is Union or origin is types.UnionType:
        return [kind for part in get_args(annotation) for kind in _alternatives(part)]
    return [] if annotation is type(None) else [annotation]


def _is_model(kind: Any) -> bool:
    return isinstance(kind, type) and issubclass(kind, BaseModel)


def _fields(model: type[BaseModel]) -> dict[str, FieldInfo]:
    return model.__pydantic_fields__
