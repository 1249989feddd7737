"""Words that all families share: strict models, safe texts, confidence levels."""

import re
from typing import Annotated

from pydantic import AfterValidator, ConfigDict, Field
from pydantic_core import PydanticCustomError

from service.risk.quantiles import decimal

STRICT = ConfigDict(
    strict=True, extra="forbid", allow_inf_nan=False, use_attribute_docstrings=True, use_enum_values=True
)
"""How every model reads: exact types, no unknown fields, finite numbers."""

MAX_TEXT = 200
PATTERN = (  # what the OpenAPI document can say of a safe text: refuses no safe one
    r"^[^\x00-/:-@\[-^`{-\xa9\xab-\xb1\xb4\xb6-\xb8\xbb\xbf\xd7\xf7\u2028\u2029][^\x00-\x1f\x7f-\x9f\u2028\u2029]*$"
)
UNSAFE = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029]")


def unsafe(value: str) -> str | None:
    """Return why a text may not be echoed; None if no cell made of it can be taken for a formula."""
    if not value or not (value[0].isalnum() or value[0] == "_"):
        return "a name begins with a letter, a digit or an underscore"
    if len(value) > MAX_TEXT:
        return f"a name has at most {MAX_TEXT} characters"
    return "a name holds no control characters" if UNSAFE.search(value) else None


def text(value: str) -> str:
    """Return `value` if it may be echoed."""
    detail = unsafe(value)
    if detail is not None:
        raise PydanticCustomError("unsafe_text", detail)
    return value


Text = Annotated[
    str,
    AfterValidator(text),
    Field(json_schema_extra={"minLength": 1, "maxLength": MAX_TEXT, "pattern": PATTERN}),
]


def confidence(value: float) -> float:
    """Return `value` if it is a confidence level, and say so in words if it looks like a percentage."""
    if 0.0 < value < 1.0 and 0 < decimal(value) < 1:
        return value
    if 1.0 < value < 100.0:  # noqa: PLR2004  # the range in which a percentage would stand
        hint = f"{value / 100.0:.15g}, not {value:.15g}"
        raise PydanticCustomError("level", "a level is a number between 0 and 1: {hint}", {"hint": hint})
    raise PydanticCustomError("level", "a level is a number above 0 and below 1, such as 0.995")


Level = Annotated[
    float,
    AfterValidator(confidence),
    Field(json_schema_extra={"exclusiveMinimum": 0.0, "exclusiveMaximum": 1.0}),
]
