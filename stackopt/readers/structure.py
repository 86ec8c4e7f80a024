"""Tables of a file as pydantic models, and what pydantic finds wrong with them as findings in plain words."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from typing import Any, TypeVar, get_args

from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic_core import ErrorDetails, PydanticCustomError

from stackopt.readers.files import Source, join_key, nearest
from stackopt.readers.values import EXAMPLES, REPORTED
from stackopt.units import show

_TAG = "\0"
_INNER = "inner"
_TAGGED: dict[str, type[Structure]] = {}


class Structure(BaseModel):
    """Base of every table: unknown keys are errors."""

    model_config = ConfigDict(extra="forbid", frozen=True)


Model = TypeVar("Model", bound=Structure)


def tag(word: str) -> str:
    """Return the tag of a table that a word of it, its law or kind, tells apart; no key can be taken for it."""
    return _TAG + word


def register(models: Mapping[str, type[Structure]]) -> None:
    """Note which table a word stands for, so that messages can name its keys."""
    _TAGGED.update({tag(word): model for word, model in models.items()})


def tag_checker(key: str, words: tuple[str, ...], example: str) -> Callable[[object], object]:
    """Return a check that a table says, under a key, which of several tables it is."""

    def check(value: object) -> object:
        if not isinstance(value, dict):
            raise ValueError(f"found {show(value)}; write {example}")
        word = value.get(key)
        if word not in words:
            found = f"found {show(word)}" if key in value else "is missing"
            raise PydanticCustomError(
                _INNER, "{message}", {"key": key, "message": f"{found}; {nearest(str(word), words)}"}
            )
        return value

    return check


def validate(model: type[Model], data: object, source: Source, prefix: str = "") -> Model | None:
    """Validate a table; on mistakes note every one of them and return None.

    Parameters
    ----------
    model : type of Structure
        What the table may hold.
    data : object
        What the file holds there.
    source : Source
        The file; also the context of the validators.
    prefix : str
        Key path of the table.
    """
    try:
        return model.model_validate(data, context=source)
    except ValidationError as error:
        for detail in error.errors(include_url=False):
            if detail["type"] != REPORTED:
                source.add(_key(prefix, detail), _message(model, detail))
        return None


def _key(prefix: str, detail: ErrorDetails) -> str:
    parts = [part for part in detail["loc"] if not str(part).startswith(_TAG)]
    if detail["type"] == _INNER:
        parts.append(detail["ctx"]["key"])
    return join_key(prefix, parts)


def _message(model: type[Structure], detail: ErrorDetails) -> str:
    kind, name = detail["type"], str(detail["loc"][-1]) if detail["loc"] else ""
    if kind == "value_error":
        return str(detail["ctx"]["error"])
    if kind == _INNER:
        return detail["msg"]
    if kind == "missing":
        example = f", such as {name} = {EXAMPLES[name]}" if name in EXAMPLES else ""
        return f"is missing; write it{example}"
    if kind == "extra_forbidden":
        return f"unknown key; {nearest(name, _model_at(model, detail['loc'][:-1]).model_fields)}"
    found = f"found {show(detail['input'])}"
    if kind in ("model_type", "dict_type", "model_attributes_type"):
        return f"{found}; write a table"
    if kind == "list_type":
        double = f", or as a table with double brackets, [[{name}]]" if isinstance(detail["input"], dict) else ""
        return f"{found}; write a list in brackets{double}"
    if kind == "too_short":
        return "found an empty list; write at least one entry or leave the key out"
    if kind == "too_long":
        return f"found {detail['ctx']['actual_length']} entries; write up to {detail['ctx']['max_length']}"
    return f"{found}; it cannot be used here"


def _model_at(model: type[Structure], loc: tuple[int | str, ...]) -> type[Structure]:
    for part in loc:
        if isinstance(part, str) and part in _TAGGED:
            model = _TAGGED[part]
        elif isinstance(part, str) and part in model.model_fields:
            model = _nested(model.model_fields[part].annotation) or model
    return model


def _nested(annotation: Any) -> type[Structure] | None:
    if inspect.isclass(annotation) and issubclass(annotation, Structure):
        return annotation
    for argument in get_args(annotation):
        if (found := _nested(argument)) is not None:
            return found
    return None
