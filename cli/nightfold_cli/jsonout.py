"""One JSON object on stdout: schema number first, NaN as null, times in UTC with offset."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from datetime import UTC, date, datetime
from typing import Any

SCHEMA = 1


def document(answer: Mapping[str, Any]) -> str:
    """Return the answer as one line of JSON with its schema number."""
    return json.dumps({"schema": SCHEMA, **plain_values(answer)}, ensure_ascii=True, allow_nan=False)


def plain_values(value: Any) -> Any:
    """Return the value made of what JSON knows.

    Numbers of numpy become numbers of Python, whatever is not finite or missing becomes null, aware times
    become UTC, tuples, sets and arrays become lists.
    """
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): plain_values(item) for key, item in value.items()}
    if isinstance(value, datetime):
        return _utc(value)
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, list | tuple | set | frozenset):
        return [plain_values(item) for item in value]
    if hasattr(value, "tolist"):
        return plain_values(value.tolist())
    return None if _missing(value) else str(value)


def _utc(value: datetime) -> str | None:
    """Return a time in UTC with offset; null for pandas' NaT, which calls itself a datetime."""
    if _missing(value):
        return None
    aware = value if value.tzinfo else value.replace(tzinfo=UTC)
    return aware.astimezone(UTC).isoformat()


def _missing(value: Any) -> bool:
    """Return whether a value is one of pandas' signs for a missing one."""
    return type(value).__name__ in ("NaTType", "NAType")
