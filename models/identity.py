"""Identity by content: ids are SHA-256 digests of canonical JSON or of bytes.

The same inputs give the same id on every machine; a changed input gives another one.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping, Sequence

Json = None | bool | int | float | str | Sequence["Json"] | Mapping[str, "Json"]

RESULT_ID_LENGTH = 32


def content_id(content: bytes) -> str:
    """SHA-256 of bytes, 64 hexadecimal digits."""
    return hashlib.sha256(content).hexdigest()


def canonical_json(value: Json) -> str:
    """One spelling for one value: sorted keys, no spaces, shortest round-trip numbers.

    Raises
    ------
    ValueError
        If a number is not finite: an unknown value is None here, never NaN.
    """
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def digest(value: Json) -> str:
    """SHA-256 of a value's canonical JSON, 64 hexadecimal digits."""
    return content_id(canonical_json(value).encode())


def result_id(*parts: Json) -> str:
    """Id of a result from what fixes it: the first 32 hexadecimal digits (128 bits) of the digest."""
    return digest(list(parts))[:RESULT_ID_LENGTH]


def known_text(value: object) -> str | None:
    """A text, or None for what is not known (a data frame's NaN among it)."""
    return value if isinstance(value, str) else None


def known(number: float | None) -> float | None:
    """A finite number, or None for what is not known."""
    return None if number is None or not math.isfinite(number) else float(number)
