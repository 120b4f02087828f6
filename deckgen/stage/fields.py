"""Building blocks of the pydantic models that describe our TOML files.

TOML has no null, so None stands for "not written": every field may be None here, ``needed`` names those
that the file has to give, and the JSON Schema says so.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Callable
from typing import Annotated, ClassVar

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    GetJsonSchemaHandler,
    PlainValidator,
    WithJsonSchema,
)
from pydantic.json_schema import JsonSchemaValue
from pydantic_core import CoreSchema, PydanticCustomError

LONGEST_TITLE = 160
LONGEST_TEXT = 400
_NAME = r"[A-Za-z][A-Za-z0-9_]{0,31}"
_NO_CONTROLS = r"^[^\u0000-\u001f\u007f-\u009f\u2028\u2029]+$"
# Control, format (among them those that turn the direction of writing), surrogate, private, separators.
_UNPRINTABLE = frozenset({"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"})


class Section(BaseModel):
    """A table that takes no key but its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    needed: ClassVar[tuple[str, ...]] = ()

    @classmethod
    def __get_pydantic_json_schema__(
        cls, core_schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> JsonSchemaValue:
        """Say in the JSON Schema which keys are needed."""
        schema = handler.resolve_ref_schema(handler(core_schema))
        if cls.needed:
            schema["required"] = list(cls.needed)
        return schema


def refused(expected: str) -> PydanticCustomError:
    """Make the error of a value that is not what is expected."""
    return PydanticCustomError("refused", "expected {expected}", {"expected": expected})


def _number(value: object) -> str | float:
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise refused('a number such as "4.7k" or 4700')
    return value


def _format(value: object) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or value != 1:
        raise refused("1, the version of the file format that this deckgen reads")
    return value


def _text(longest: int) -> Callable[[object], str]:
    def check(value: object) -> str:
        if not isinstance(value, str) or not value.strip():
            raise refused("a text")
        if len(value) > longest:
            raise refused(f"a text of at most {longest} characters")
        if any(unicodedata.category(char) in _UNPRINTABLE for char in value):
            raise refused("one line of text without control characters")
        return value.strip()

    return check


def _name(value: str) -> str:
    if not re.fullmatch(_NAME, value):
        raise refused("a name of letters, digits and _, a letter first, at most 32 characters")
    return value


def _text_schema(longest: int) -> WithJsonSchema:
    return WithJsonSchema(
        {"type": "string", "minLength": 1, "maxLength": longest, "pattern": _NO_CONTROLS}
    )  # fmt: skip


Number = Annotated[str | float, PlainValidator(_number), WithJsonSchema({"type": ["string", "number"]})]
Format = Annotated[int, PlainValidator(_format), WithJsonSchema({"const": 1})]
Title = Annotated[str, PlainValidator(_text(LONGEST_TITLE)), _text_schema(LONGEST_TITLE)]
Text = Annotated[str, PlainValidator(_text(LONGEST_TEXT)), _text_schema(LONGEST_TEXT)]
Name = Annotated[str, AfterValidator(_name), WithJsonSchema({"type": "string", "pattern": f"^{_NAME}$"})]
