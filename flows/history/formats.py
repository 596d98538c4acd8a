"""The kinds of file that an answer is written to. Stands alone, so that a command's help need not load their
writers.
"""

from __future__ import annotations

FILE_FORMATS = ("csv", "json", "parquet", "xlsx")
