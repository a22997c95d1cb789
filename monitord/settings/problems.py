"""Tables of the settings file into models, and what is wrong with them into words."""

import difflib
import json
import re
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Generic, TypeVar, get_args

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

Model = TypeVar("Model", bound=BaseModel)

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_LONGEST_SHOWN = 60

_EXPECTED = {
    "float_type": "must be a number",
    "float_parsing": "must be a number",
    "finite_number": "must be a finite number",
    "int_type": "must be a whole number",
    "string_type": "must be text in quotes",
    "string_unicode": "must be valid Unicode text",
    "bool_type": "must be true or false",
    "model_type": "must be a table",
    "tuple_type": "must be an array of tables",
}

# What takes the place of a required value that is wrong, so that the rest can be checked all the same.
# No check looks at it: the key stands in Part.bad.
_STAND_INS: Mapping[str, object] = {
    "kind": "simulated",
    "name": "x",
    "carrier_hz": 0.0,
    "first_hz": 0.0,
    "last_hz": 0.0,
    "step_hz": 1.0,
}


@dataclass(frozen=True, slots=True)
class Part(Generic[Model]):
    """One table that was read: where it stands in the file, what it holds, which of its keys are wrong."""

    where: str
    model: Model
    bad: frozenset[str] = frozenset()

    def sound(self, *keys: str) -> bool:
        """None of these keys is wrong."""
        return self.bad.isdisjoint(keys)

    def problem(self, key: str, text: str) -> str:
        """One line about a key that was set or has its default."""
        return f"{self.where}.{key} = {shown(getattr(self.model, key))}: {text}"


def shown(value: object) -> str:
    """A value as it would stand in the settings file, on one line and of bearable length."""
    if isinstance(value, dict):
        return "{...}"
    if isinstance(value, list | tuple):
        return "[...]" if value else "[]"
    if isinstance(value, float):
        return f"{value:.12g}"
    # Long integers are not turned into text: it is slow, and beyond some length refused.
    if isinstance(value, int) and abs(value) > 10**_LONGEST_SHOWN:
        return "(a very large number)"
    text = json.dumps(value, ensure_ascii=False) if isinstance(value, str | bool | int) else str(value)
    return one_line(text if len(text) <= _LONGEST_SHOWN else text[:_LONGEST_SHOWN] + "...")


def one_line(text: str) -> str:
    """The text with everything unprintable escaped, line breaks above all."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def shown_key(key: str) -> str:
    """A key as it would stand in the settings file."""
    return key if _BARE_KEY.fullmatch(key) else shown(key)


def unknown_key(where: str, value: object, key: str, allowed: Collection[str]) -> str:
    """The line about a key that does not exist, with the likeliest or else all that do."""
    near = difflib.get_close_matches(key, allowed, n=1)
    hint = f"did you mean {near[0]}?" if near else f"known here: {', '.join(allowed)}"
    return f"{where}{shown_key(key)} = {shown(value)}: unknown key; {hint}"


def take(model: type[Model], raw: object, where: str, problems: list[str]) -> Part[Model] | None:
    """Read one table; add a line to `problems` for each wrong value. None where it is no table at all."""
    if not isinstance(raw, dict):
        problems.append(f"{where} = {shown(raw)}: must be a table")
        return None
    try:
        return Part(where, model.model_validate(raw))
    except ValidationError as error:
        found = error.errors(include_url=False)
    problems.extend(_line(model, where, one) for one in found)
    bad = frozenset(str(one["loc"][0]) for one in found)
    required = {key for key, field in model.model_fields.items() if field.is_required()}
    rest = {key: value for key, value in raw.items() if key not in bad}
    return Part(where, model.model_validate(rest | {key: _STAND_INS[key] for key in bad & required}), bad)


def _line(model: type[BaseModel], where: str, error: ErrorDetails) -> str:
    *path, key = error["loc"]
    fields = _table_at(model, path).model_fields
    place = _place(where, path)
    if error["type"] == "extra_forbidden":
        return unknown_key(f"{place}.", error["input"], str(key), fields)
    if error["type"] == "missing":
        return f"{place}.{key}: missing; {fields[str(key)].description}"
    return f"{_place(place, [key])} = {shown(error['input'])}: {_expected(error)}"


def _place(where: str, path: Sequence[str | int]) -> str:
    """Keys with a dot before them, places in an array in brackets: channel[1].tone[0]."""
    return where + "".join(f"[{step}]" if isinstance(step, int) else f".{step}" for step in path)


def _table_at(model: type[BaseModel], path: Sequence[str | int]) -> type[BaseModel]:
    for step in path:
        if isinstance(step, str):
            model = _table_in(model.model_fields[step].annotation)
    return model


def _table_in(annotation: Any) -> type[BaseModel]:
    """The one model in an annotation: Model, Model | None, tuple[Model, ...]."""
    choices = [annotation, *get_args(annotation)]
    return next(one for one in choices if isinstance(one, type) and issubclass(one, BaseModel))


def _expected(error: ErrorDetails) -> str:
    context = error.get("ctx", {})
    if error["type"] == "value_error":
        return str(context["error"])
    if error["type"] == "literal_error":
        return f"must be {str(context['expected']).replace(chr(39), chr(34))}"
    return _EXPECTED.get(error["type"], error["msg"])
