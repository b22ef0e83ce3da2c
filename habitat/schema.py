"""Checking what people write in TOML files against a model, with one clear message for the first thing wrong."""

from collections.abc import Mapping
from typing import Any, TypeVar, get_args

from pydantic import BaseModel, ConfigDict, ValidationError

from habitat.errors import InputError
from habitat.files import nearest


class Table(BaseModel):
    """A TOML table: unknown keys are refused, numbers are finite, texts are not turned into numbers."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, strict=True)


Model = TypeVar("Model", bound=Table)

# What pydantic calls a mistake, and how we say it. Anything else is reported in pydantic's own words.
_EXPECTED = {
    "float_type": "a number",
    "int_type": "a whole number",
    "string_type": 'a text in double quotes ("...")',
    "bool_type": "true or false",
    "list_type": "a list [...]",
    "tuple_type": "a list [...]",
    "dict_type": "a table",
    "model_type": "a table",
    "finite_number": "a finite number",
    "string_too_short": "a text that is not empty",
}


def validate(model: type[Model], content: Mapping[str, Any], where: str) -> Model:
    """Build `model` from the content of a TOML file.

    Parameters
    ----------
    model : type[Table]
        The model of the whole file.
    content : mapping
        What the file holds.
    where : str
        The file's name, for messages.

    Raises
    ------
    InputError
        For the first mistake: the key with its place in the file, the value found, what was expected.
    """
    try:
        return model.model_validate(content)
    except ValidationError as error:
        # A misspelt key is also a missing one; the misspelling is the helpful thing to say.
        mistakes = sorted(error.errors(), key=lambda mistake: mistake["type"] != "extra_forbidden")
        raise _explain(model, mistakes[0], len(mistakes), where) from None


def _explain(model: type[Table], mistake: Mapping[str, Any], count: int, where: str) -> InputError:
    place, kind, value = mistake["loc"], mistake["type"], mistake["input"]
    more = f"(mistakes in this file: {count})" if count > 1 else ""
    key = _spell(place)
    if kind == "extra_forbidden":
        known = _keys_at(model, place[:-1])
        remedy = nearest(str(place[-1]), known) if known else "remove it"
        return InputError(f"unknown key '{key}'", where=where, remedy=_join(remedy, more))
    if kind == "missing":
        return InputError(f"key '{key}' is missing", where=where, remedy=_join("add it", more))
    if kind == "value_error":
        return InputError(f"{key}: {mistake['ctx']['error']}" if key else str(mistake["ctx"]["error"]), where=where)
    context = mistake.get("ctx", {})
    bounds = {
        "greater_than": f"more than {context.get('gt')}",
        "greater_than_equal": f"{context.get('ge')} or more",
        "less_than_equal": f"{context.get('le')} or less",
    }
    expected = _EXPECTED.get(kind) or bounds.get(kind) or mistake["msg"]
    return InputError(f"{key} = {value!r}", where=where, expected=expected, remedy=more)


def _spell(place: tuple[str | int, ...]) -> str:
    """Write a place as people read it: list positions count from 1."""
    text = ""
    for part in place:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text


def _keys_at(model: type[Table], place: tuple[str | int, ...]) -> list[str]:
    """Keys that the table at `place` may hold."""
    annotation: Any = model
    for part in place:
        if isinstance(part, int):
            continue
        fields = getattr(_table_in(annotation), "model_fields", {})
        if part not in fields:
            return []
        annotation = fields[part].annotation
    table = _table_in(annotation)
    return list(table.model_fields) if table else []


def _table_in(annotation: Any) -> type[Table] | None:
    """Find the table model inside an annotation such as ``list[Table] | None``."""
    if isinstance(annotation, type) and issubclass(annotation, Table):
        return annotation
    return next((found for inner in get_args(annotation) if (found := _table_in(inner))), None)


def _join(*parts: str) -> str:
    return " ".join(part for part in parts if part)
