"""Results as plain data: dictionaries, lists, numbers, JSON."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any

from loopfit.core.quantity import Quantity


def plain(value: Any) -> Any:
    """Return the value as JSON can carry it: quantities as three keys, open bounds as None.

    Raises
    ------
    TypeError
        If the value is of a kind that has no plain form.
    """
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Quantity):
        return {"value": plain(value.value), "low": plain(value.low), "high": plain(value.high)}
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    raise TypeError(f"no plain form for {type(value).__name__}")


def to_json(document: Mapping[str, Any]) -> str:
    """Return the document as JSON text without NaN or Infinity."""
    return json.dumps(plain(document), indent=2, ensure_ascii=False, allow_nan=False)
