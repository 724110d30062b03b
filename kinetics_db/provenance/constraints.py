"""Constraints that several domains use."""

from __future__ import annotations

from functools import reduce
from operator import and_

from django.db.models import CheckConstraint, Q

LARGEST = 1e300


def finite(name: str, *fields: str) -> CheckConstraint:
    """Columns that hold a finite number or nothing.

    Bounded on both sides: on PostgreSQL NaN is larger than every number, so one side would let it pass.
    """
    each = (
        Q(**{f"{field}__isnull": True}) | Q(**{f"{field}__gte": -LARGEST, f"{field}__lte": LARGEST})
        for field in fields
    )
    return CheckConstraint(condition=reduce(and_, each), name=name)
