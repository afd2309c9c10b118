"""Why a request body could not be turned into a batch."""

from __future__ import annotations

from collections.abc import Sequence

from service.batches.batch import Rejection


class Unreadable(Exception):
    """The body is not what its headers say (400).

    Attributes
    ----------
    detail : str
        What was expected.
    line, column : int or None
        Where in the text, both from 1, columns in characters; None where the body is not text
        (broken gzip).
    """

    def __init__(self, detail: str, line: int | None = None, column: int | None = None) -> None:
        super().__init__(detail)
        self.detail = detail
        self.line = line
        self.column = column


class UnknownEncoding(Exception):
    """The ``Content-Encoding`` is not one that is taken (415)."""

    def __init__(self, detail: str) -> None:
        super().__init__(detail)
        self.detail = detail


class Invalid(Exception):
    """The body is readable, but not all of it is valid (422).

    Attributes
    ----------
    rejections : list of Rejection
        The first errors, at most 100.
    error_count : int
        All of them.
    """

    def __init__(self, rejections: Sequence[Rejection], error_count: int) -> None:
        super().__init__(f"{error_count} invalid fields")
        self.rejections = list(rejections)
        self.error_count = error_count


class TooLarge(Exception):
    """The request exceeds a limit (413).

    Attributes
    ----------
    limit_name : str
        Name of the field of `Limits`.
    limit : int
        Its value.
    detail : str
        What to do.
    """

    def __init__(self, limit_name: str, limit: int, detail: str) -> None:
        super().__init__(detail)
        self.limit_name = limit_name
        self.limit = limit
        self.detail = detail
