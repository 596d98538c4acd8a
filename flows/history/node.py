"""One thing that a result came from, and what that came from in turn. A plain record; reads nothing."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

NodeKind = Literal[
    "lot value",
    "estimate",
    "fit",
    "series",
    "grid",
    "rate",
    "finding",
    "analysis",
    "plate read",
    "readings",
    "export",
    "plate map",
    "file",
    "recipe",
    "pass",
]

Fact = str | int | float | None


@dataclass(frozen=True)
class Node:
    """A result, or something that a result came from.

    Attributes
    ----------
    kind
        What it is.
    id
        Its id, whole.
    title
        What a person reads first.
    details
        Further lines.
    facts
        The values behind title and details, by name, as they are stored.
    children
        What it came from. Where the same thing stands further up in the tree already, it has none there.
    """

    kind: NodeKind
    id: str
    title: str
    details: tuple[str, ...] = ()
    facts: tuple[tuple[str, Fact], ...] = ()
    children: tuple[Node, ...] = ()

    def fact(self, name: str) -> Fact:
        """One of the values.

        Raises
        ------
        KeyError
            If there is none of that name.
        """
        return dict(self.facts)[name]

    def walk(self) -> Iterator[Node]:
        """The node itself and everything below it."""
        yield self
        for child in self.children:
            yield from child.walk()
