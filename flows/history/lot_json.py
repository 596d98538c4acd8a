"""A lot's record as JSON: plain values, NULL for what is not known."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from datetime import date, datetime
from typing import Any

import numpy as np

from flows.history.lot_record import LotRecord


def lot_json(record: LotRecord) -> dict[str, Any]:
    """Everything that the record says, in values that JSON has."""
    made: dict[str, Any] = _plain(record)
    return made


def _plain(value: Any) -> Any:
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: _plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, np.ndarray):
        return [_plain(each) for each in value.tolist()]
    if isinstance(value, tuple) and hasattr(value, "_asdict"):
        return {name: _plain(each) for name, each in value._asdict().items()}
    if isinstance(value, Mapping):
        return {str(name): _plain(each) for name, each in value.items()}
    if isinstance(value, (frozenset, set)):
        return sorted(_plain(each) for each in value)
    if isinstance(value, (tuple, list)):
        return [_plain(each) for each in value]
    if isinstance(value, (datetime, date)):
        return value.isoformat().replace("+00:00", "Z")
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    return int(value) if isinstance(value, np.integer) else value
