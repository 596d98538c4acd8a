"""Walking through a data frame's rows where a loop over few rows is what is meant."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pandas as pd


def rows(frame: pd.DataFrame) -> Iterator[Any]:
    """Rows as named tuples whose fields are the columns."""
    return iter(frame.itertuples(index=False))
