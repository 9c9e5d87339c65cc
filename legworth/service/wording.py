"""What is wrong with a request or a setting, in words that say what would mend it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from typing import Any, get_args

from pydantic import BaseModel

from network.counted import counted

__all__ = ["AMOUNT", "KEY", "NAME", "TEXT", "fault_words", "names_at"]

NAME = r"^[^\s\x00-\x1f\x7f]+$"
TEXT = r"^[^\x00-\x1f\x7f]+$"
KEY = r"^[\x21-\x7e]+$"
AMOUNT = r"^\s*(\d{1,12}(\.\d{0,6})?)?\s*$"
FORMS = {
    NAME: "holds a space or a control character; names have none",
    TEXT: "holds a control character, such as a line break; leave it out",
    KEY: "may hold printable ASCII characters only, and no spaces; take another key",
    AMOUNT: "is no amount; write digits, such as 150 or 150.50",
}
"""Forms that texts must have, each as a regular expression, and what is said of a text that has not."""

WHOLE = "is no whole number; give one, such as 2"
NUMBER = "is no number; give one, such as 150.50"
TRUTH = "is neither true nor false; give one of the two"
STRING = "is no text; give one in quotation marks"
LIST = "is no list; give one, in square brackets"
OBJECT = "is no object; give one, in braces"
KINDS = {
    **dict.fromkeys(("int_type", "int_parsing", "int_parsing_size", "int_from_float"), WHOLE),
    **dict.fromkeys(("float_type", "float_parsing", "finite_number"), NUMBER),
    **dict.fromkeys(("bool_type", "bool_parsing"), TRUTH),
    **dict.fromkeys(("tuple_type", "list_type"), LIST),
    **dict.fromkeys(("model_type", "model_attributes_type", "dict_type"), OBJECT),
    "string_type": STRING,
    "string_unicode": "is no text that can be written as UTF-8; correct it",
}
"""What is said of a value of a wrong kind, by pydantic's name of the error."""

BOUNDS = {
    "greater_than": ("gt", "", "is too small; give more than"),
    "greater_than_equal": ("ge", "", "is too small; give at least"),
    "less_than": ("lt", "", "is too great; give less than"),
    "less_than_equal": ("le", "", "is too great; give at most"),
    "string_too_short": ("min_length", "character", "is too short; give at least"),
    "string_too_long": ("max_length", "character", "is too long; give at most"),
    "too_short": ("min_length", "entry", "has too few entries; give at least"),
    "too_long": ("max_length", "entry", "has too many entries; give at most"),
}
"""What is said of a value beyond a bound: where pydantic keeps the bound, what it counts, and the words before it."""


def fault_words(error: Mapping[str, Any], known: Sequence[str] = (), noun: str = "field") -> str:
    """Say what is wrong, and what would mend it.

    Parameters
    ----------
    error
        A fault as pydantic reports it; of its value nothing is repeated.
    known
        Names that may stand where the fault is, if it is a name that may not.
    noun
        What such a name is.
    """
    kind, more = str(error["type"]), error.get("ctx") or {}
    if kind == "missing":
        return "is missing; give it"
    if kind == "extra_forbidden":
        return _unknown(str(error["loc"][-1]), known, noun)
    if kind == "value_error":
        return str(more["error"])
    if kind == "json_invalid":
        return f"cannot be read as JSON ({more.get('error', 'it breaks off')}); correct it there"
    if kind == "string_pattern_mismatch":
        return FORMS.get(str(more["pattern"]), "does not have the form that /v1/openapi.json describes; correct it")
    if kind in ("enum", "literal_error"):
        return f"is not one of those known; give {more['expected']}"
    if kind in BOUNDS:
        where, noun, words = BOUNDS[kind]
        bound = more[where]
        return f"{words} {counted(bound, noun) if noun else f'{bound:,.12g}'}"
    return KINDS.get(kind) or f"cannot be taken ({error['msg']}); correct it"


def _unknown(name: str, known: Sequence[str], noun: str) -> str:
    close = get_close_matches(name.lower()[:100], known, n=1)
    mend = f"write {close[0]} if that is meant" if close else "leave it out"
    return f"is no {noun} known here; {mend}" + (f" (known are {', '.join(known)})" if known else "")


def names_at(model: type[BaseModel], place: Sequence[Any]) -> tuple[str, ...]:
    """Names of the fields of a message, or of the message within it that a place leads to.

    Parameters
    ----------
    model
        The message.
    place
        Names and numbers that lead into it, as pydantic reports them; the last is the name in question.
    """
    for step in place[:-1]:
        if isinstance(step, str):
            inner = _message_in(model.model_fields[step].annotation) if step in model.model_fields else None
            if inner is None:
                return ()
            model = inner
    return tuple(model.model_fields)


def _message_in(annotation: Any) -> type[BaseModel] | None:
    """The message that an annotation holds, in whatever list or choice."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((found for each in get_args(annotation) if (found := _message_in(each))), None)
