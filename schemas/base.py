"""What every schema here is: one that a caller sends, or one that the service answers with."""

from __future__ import annotations

import math
from typing import Any

import marshmallow as ma
from marshmallow import fields


class Asked(ma.Schema):
    """Something a caller sends: unknown fields are refused, and the document says so."""

    class Meta:
        """Settings of marshmallow."""

        unknown = ma.RAISE


class Answer(ma.Schema):
    """Something the service answers with; later versions may add fields."""

    class Meta:
        """Settings of marshmallow."""

        unknown = ma.EXCLUDE


class Number(fields.Float):
    """A JSON number: unlike marshmallow's own, no string and never infinite."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.make_error("invalid")
        try:
            number = float(value)
        except OverflowError as error:
            raise self.make_error("invalid") from error
        if not math.isfinite(number):
            raise self.make_error("invalid")
        return number


class Whole(fields.Integer):
    """A JSON integer: no string and no float."""

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(strict=True, **kwargs)

    def _validated(self, value: Any) -> Any:
        if isinstance(value, bool) or not isinstance(value, int):
            raise self.make_error("invalid")
        return value


class Flag(fields.Boolean):
    """A JSON ``true`` or ``false``, nothing that merely looks like one."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> bool:
        if not isinstance(value, bool):
            raise self.make_error("invalid", input=value)
        return value


def said(description: str, **more: Any) -> dict[str, Any]:
    """Return field metadata with a description for the OpenAPI document."""
    return {"description": description, **more}
