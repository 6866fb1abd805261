"""Results as JSON can write them."""

from __future__ import annotations

import math


def for_json(value: object) -> object:
    """The value in JSON's own types: numbers that are not finite become None, which JSON writes as null.

    >>> for_json({"peak_db": float("-inf"), "at": (1, 2)})
    {'peak_db': None, 'at': [1, 2]}
    """
    if isinstance(value, dict):
        return {str(key): for_json(one) for key, one in value.items()}
    if isinstance(value, (list, tuple)):
        return [for_json(one) for one in value]
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    return value
