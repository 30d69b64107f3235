"""Validation of a parsed body by a model, apart because its errors must never echo input."""

from __future__ import annotations

import re
from collections.abc import Mapping
from functools import cache
from typing import TypeVar

from pydantic import BaseModel, ConfigDict, StringConstraints, ValidationError
from pydantic_core import ErrorDetails

from service.errors import Malformed


class StrictForm(BaseModel):
    """A form of a person or an operator's tool, where an unknown field is a typing error."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True)


class OpenForm(BaseModel):
    """A form of a machine that may be a release ahead, where an unknown field is a warning."""

    model_config = ConfigDict(strict=True, extra="ignore", frozen=True)


Form = TypeVar("Form", bound=BaseModel)

WARNINGS_MAX = 16

# Sentences of our own, since those of the library may quote what came.
_SENTENCES = {
    "missing": "The field is missing.",
    "string_type": "It must be text.",
    "string_unicode": "It must be text.",
    "int_type": "It must be a whole number.",
    "bool_type": "It must be true or false.",
    "list_type": "It must be a list.",
    "model_type": "It must be an object.",
    "model_attributes_type": "It must be an object.",
    "extra_forbidden": "There is no such field.",
}
_LIMITS = {
    "greater_than": ("gt", "It must be greater than {}."),
    "greater_than_equal": ("ge", "It must be at least {}."),
    "less_than": ("lt", "It must be less than {}."),
    "less_than_equal": ("le", "It must be at most {}."),
    "too_short": ("min_length", "It must have at least {} members."),
    "literal_error": ("expected", "It must be {}."),
}


# By pattern, since an error tells no more of a text than which one it does not match.
_SHAPES: dict[str, str] = {}


def shaped(pattern: re.Pattern[str], sentence: str) -> StringConstraints:
    """A text that matches as a whole, and the sentence for one that does not."""
    whole = f"^(?:{pattern.pattern})$"
    _SHAPES[whole] = sentence
    return StringConstraints(pattern=whole)


def read(form: type[Form], members: Mapping[str, object]) -> Form:
    """
    Fill in a form from a parsed object.

    Raises:
        Malformed: `bad_field`, with the path of the first bad field and a sentence.
        NotOffered: A field asks for what this release does not do.
    """
    try:
        return form.model_validate(members)
    except ValidationError as error:
        first = error.errors(include_url=False, include_input=False)[0]
        raise bad_field(_path(first), _sentence(first)) from None


def bad_field(path: str, sentence: str) -> Malformed:
    """The refusal of one field; `path` must be made of names of ours and of numbers."""
    return Malformed("bad_field", sentence, {"field": path})


def at_most(rows_max: int, path: str, rows: list[object]) -> None:
    """
    Refuse a list that is longer than the settings allow.

    Raises:
        Malformed: `bad_field` with the path of the list.
    """
    if len(rows) > rows_max:
        raise bad_field(path, f"It may have at most {rows_max} members.")


def unknown_fields(form: type[BaseModel], members: Mapping[str, object]) -> set[str]:
    """The names of fields that the form does not know, as far as they are plain words."""
    names = _names(form)
    # Nearly always there are none, which one comparison tells.
    if members.keys() <= names:
        return set()
    return {_plain_word(name) for name in members if name not in names}


def warnings(names: set[str]) -> list[str]:
    """At most 16 names, in order."""
    return sorted(names)[:WARNINGS_MAX]


@cache
def _names(form: type[BaseModel]) -> frozenset[str]:
    return frozenset(form.model_fields)


def _plain_word(name: str) -> str:
    plain = len(name) <= 64 and name.isascii() and name.replace("_", "a").isalnum()
    return name if plain else "(no plain word)"


def _path(error: ErrorDetails) -> str:
    places = error["loc"][:-1] if error["type"] == "extra_forbidden" else error["loc"]
    return ".".join(str(place) for place in places)


def _sentence(error: ErrorDetails) -> str:
    context = error.get("ctx", {})
    if error["type"] == "value_error":
        return str(context["error"])
    if error["type"] == "string_pattern_mismatch":
        return _SHAPES[context["pattern"]]
    if error["type"] in _LIMITS:
        name, sentence = _LIMITS[error["type"]]
        return sentence.format(context[name])
    return _SENTENCES.get(error["type"], "It is not of the form we read.")
