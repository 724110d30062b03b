"""Errors that only REST knows; each becomes problem details (api/errors.py)."""

from __future__ import annotations

from collections.abc import Sequence

from rest_framework.exceptions import APIException, ParseError

from kinetics_db.errors import Problem


class MalformedBody(ParseError):
    """400: a body that cannot be read, with the places where it is broken."""

    def __init__(self, problems: Problem | Sequence[Problem]):
        self.problems = [problems] if isinstance(problems, Problem) else list(problems)
        super().__init__("; ".join(str(p) for p in self.problems))


class BodyTooLarge(APIException):
    """413: more bytes than this address takes."""

    status_code = 413

    def __init__(self, most: int):
        super().__init__(f"the body has more than {most:,} bytes; that is the most this address takes")


class PreconditionFailed(APIException):
    """412: somebody else changed the record since it was read."""

    status_code = 412
    default_detail = "the record was changed since you read it; read it again and repeat your change"


class PreconditionRequired(APIException):
    """428: a change must say which state it is a change of."""

    status_code = 428
    default_detail = "send If-Match with the ETag of the record as you read it"
