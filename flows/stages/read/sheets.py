"""A file as lines of fields, whether it is text or a sheet of a workbook, and how to name a place in it.

Knows nothing of plates or times. Lines and fields count from 0 here and from 1 in every message.
"""

from __future__ import annotations

import csv
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from models.errors import ExportError, HalfsatError

CANDIDATE_DELIMITERS = (",", ";", "\t", "|")
_HEAD_LINES = 100
_SNIFFED_LINES = 100
_SNIFFED_BYTES = 100_000
_EMPTY = b"\0 \t\r\n"
_BYTE_ORDER_MARK = b"\xef\xbb\xbf"
_CONTROLS = bytes([*range(1, 9), *range(14, 27), *range(28, 32)])


@dataclass(frozen=True)
class TextSheet:
    """Text as UTF-8 bytes whose lines end in LF or CR LF.

    Attributes
    ----------
    separator
        Text between fields; empty for runs of blanks.
    """

    file_name: str
    data: bytes
    separator: str
    quote: str = '"'
    encoding: str = "utf-8"

    name = None
    title = ""

    @cached_property
    def ends(self) -> npt.NDArray[np.int64]:
        """Where each line ends in `data`, its LF included."""
        newlines = np.flatnonzero(np.frombuffer(self.data, dtype=np.uint8) == 10)
        newlines += 1
        if self.data and not self.data.endswith(b"\n"):
            newlines = np.append(newlines, len(self.data))
        return newlines

    @cached_property
    def line_count(self) -> int:
        """Number of lines."""
        return self.data.count(b"\n") + bool(self.data and not self.data.endswith(b"\n"))

    @cached_property
    def _head_ends(self) -> list[int]:
        """The same for the first lines only: a regular table needs no more, and they are found at once."""
        found: list[int] = []
        while len(found) < _HEAD_LINES and (end := self.data.find(b"\n", found[-1] if found else 0)) >= 0:
            found.append(end + 1)
        return found

    def _end(self, index: int) -> int:
        if index == self.line_count - 1:
            return len(self.data)
        return self._head_ends[index] if index < len(self._head_ends) else int(self.ends[index])

    def span(self, first: int, last: int) -> bytes:
        """Bytes of the lines from `first` up to but not including `last`."""
        return self.data[self._end(first - 1) if first else 0 : self._end(last - 1)] if last > first else b""

    def line(self, index: int) -> str:
        """Text of a line without its end."""
        return self.span(index, index + 1).decode().rstrip("\r\n")

    def fields(self, index: int) -> list[str]:
        """Fields of a line."""
        return split_fields(self.line(index), self.separator, self.quote)

    def where(self, index: int | None = None, field: int | None = None) -> str:
        """Name of a place in the file, for a message."""
        return place(self.file_name, None, index, field)


@dataclass(frozen=True)
class CellSheet:
    """A sheet of a workbook, each cell as text."""

    file_name: str
    name: str
    rows: Sequence[Sequence[str]]
    encoding: str = "xlsx"

    @property
    def title(self) -> str:
        """Name of the sheet."""
        return self.name

    @property
    def line_count(self) -> int:
        """Number of rows."""
        return len(self.rows)

    def line(self, index: int) -> str:
        """Cells of a row, joined by tabs as far as they are filled."""
        return "\t".join(self.rows[index]).rstrip("\t")

    def fields(self, index: int) -> list[str]:
        """Cells of a row."""
        return list(self.rows[index])

    def where(self, index: int | None = None, field: int | None = None) -> str:
        """Name of a place in the file, for a message."""
        return place(self.file_name, self.name, index, field)


Sheet = TextSheet | CellSheet


def place(file_name: str, sheet: str | None, index: int | None = None, field: int | None = None) -> str:
    """Name of a place: file, then line and field of a text or row and column of a sheet, counted from 1."""
    words = [file_name] if sheet is None else [file_name, f"sheet {sheet}"]
    line_word, field_word = ("line", "field") if sheet is None else ("row", "column")
    if index is not None:
        words.append(f"{line_word} {index + 1}")
    if field is not None:
        words.append(f"{field_word} {field + 1}")
    return ", ".join(words)


def split_fields(line: str, separator: str, quote: str = '"') -> list[str]:
    """Fields of a line; an empty separator stands for runs of blanks."""
    if not separator:
        return line.split()
    if quote not in line:
        return line.split(separator)
    if len(separator) > 1:
        return [field.strip(quote) for field in line.split(separator)]
    try:
        return next(csv.reader([line], delimiter=separator, quotechar=quote))
    except csv.Error:
        return line.split(separator)


def is_blank(fields: Sequence[str]) -> bool:
    """Whether a line holds nothing but blanks and separators."""
    return not any(field and not field.isspace() for field in fields)


def decode(
    content: bytes, encoding: str, file_name: str, kind: type[HalfsatError] = ExportError
) -> tuple[bytes, str]:
    """Text of a file as UTF-8 with lines ended by LF or CR LF, and the encoding that the file was in.

    Raises
    ------
    HalfsatError
        Of the given kind: if the file is empty, binary, or not in the encoding stated.
    """
    if not content[:1024].strip(_EMPTY) and not content.strip(_EMPTY):
        raise kind("the file is empty", where=file_name, remedy="export it again")
    used = _encoding_of(content) if encoding == "auto" else encoding
    try:
        # Checking for ASCII costs a twentieth of decoding, and most exports are nothing else.
        text = "" if used == "utf-8" and content.isascii() else content.decode(used)
    except UnicodeDecodeError as flaw:
        line = content.count(b"\n", 0, flaw.start) + 1
        raise kind(
            f"byte {flaw.start + 1} is not {used} text ({flaw.reason})",
            where=f"{file_name}, line {line}",
            remedy="set text.encoding in the profile, or export the file again if it was cut off",
        ) from flaw
    data = (content if used == "utf-8" else text.encode()).removeprefix(_BYTE_ORDER_MARK)
    sample = data[:_SNIFFED_BYTES]
    controls = len(sample) - len(sample.translate(None, _CONTROLS))
    if b"\0" in data or controls > len(sample) / 200:
        raise kind(
            "this is not text but binary data",
            where=file_name,
            remedy="export as text or xlsx; set text.encoding if it is UTF-16 without a byte order mark",
        )
    return _plain_lines(data), used


def _plain_lines(data: bytes) -> bytes:
    """The same text with a lone CR, which ends a line too, made LF."""
    if b"\r" not in data or data.count(b"\r") == data.count(b"\r\n"):
        return data
    return data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")


def _encoding_of(content: bytes) -> str:
    if content.startswith(b"\xef\xbb\xbf"):
        return "utf-8"
    if content.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16"
    if content.isascii():
        return "utf-8"
    try:
        content.decode("utf-8")
    except UnicodeDecodeError:
        return "latin-1"
    return "utf-8"


def guess_separator(data: bytes, quote: str = '"', excluded: Sequence[str] = ()) -> str:
    """The delimiter that cuts the most lines into the same number of fields, and the most fields.

    Parameters
    ----------
    excluded
        Signs that numbers use (decimal comma, thousands): taken only if no other sign occurs at all.
    """
    head = data[:_SNIFFED_BYTES].decode(errors="ignore").split("\n")[:_SNIFFED_LINES]
    lines = [line for line in head if line.strip()]
    scores: dict[str, int] = {}
    for sign in CANDIDATE_DELIMITERS:
        counts = Counter(
            len(split_fields(line, sign, quote)) - 1 if quote in line else line.count(sign) for line in lines
        )
        scores[sign] = max((count * times for count, times in counts.items()), default=0)
    free = {sign: score for sign, score in scores.items() if sign not in excluded and score}
    usable = free or scores
    return max(usable, key=lambda sign: usable[sign])
