"""The project's own errors. Each message says what is wrong, where, and what to do about it.

This module knows nothing of files or terminals: `where` is a plain text such as `night7.csv, line 12`.
"""

from __future__ import annotations


class HalfsatError(Exception):
    """Something a person can mend, told in one line.

    Parameters
    ----------
    what
        What is wrong, as a short sentence without a full stop.
    where
        File, line, key or well. Empty where there is no place to name.
    remedy
        What to do about it, as a short sentence without a full stop.
    """

    def __init__(self, what: str, *, where: str = "", remedy: str = "") -> None:
        self.what, self.where, self.remedy = what, where, remedy
        super().__init__(what, where, remedy)

    def __str__(self) -> str:
        place = f"{self.where}: " if self.where else ""
        mend = f" ({self.remedy})" if self.remedy else ""
        return f"{place}{self.what}{mend}"

    def __reduce__(self) -> tuple[object, ...]:
        return _rebuild, (type(self), self.what, self.where, self.remedy)


def _rebuild(kind: type[HalfsatError], what: str, where: str, remedy: str) -> HalfsatError:
    return kind(what, where=where, remedy=remedy)


class ConfigurationError(HalfsatError):
    """A configuration file does not say what it must."""


class ExportError(HalfsatError):
    """An export cannot be read as its profile says."""


class PlateMapError(HalfsatError):
    """A plate map cannot be read or contradicts itself."""


class SiteError(HalfsatError):
    """A site folder is missing, incomplete or in use."""


class SiteBusy(SiteError):
    """Another pass holds the site: nothing is wrong with it."""


class LedgerError(HalfsatError):
    """The ledger's chain is broken or an entry cannot be read."""


class QueryError(HalfsatError):
    """A query is refused or cannot be answered."""


class UnknownName(HalfsatError):
    """A code, law, gate, table or id that nothing here defines."""
