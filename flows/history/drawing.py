"""Draws a lineage as a tree for the terminal. Knows nodes only, no database."""

from __future__ import annotations

from collections.abc import Sequence

from rich.console import Console, Group, RenderableType
from rich.text import Text
from rich.tree import Tree

from flows.history.node import Node
from flows.history.output import plain

ID_SHOWN = 12
# Kinds of which a node has many; the rest of them is counted.
MANY = ("rate", "finding")


def render(node: Node, most: int = 48) -> RenderableType:
    """A tree that holds at 80 columns.

    Parameters
    ----------
    most
        Most wells, and most findings, that are listed below one series; a line says how many more there are.
    """
    tree = Tree(_label(node), guide_style="dim")
    _grow(tree, node, most)
    return tree


def lineage_text(node: Node, width: int = 80, most: int = 48) -> str:
    """The same as plain text."""
    console = Console(width=width, highlight=False, color_system=None, record=False, force_terminal=False)
    with console.capture() as captured:
        console.print(render(node, most))
    return captured.get()


def _grow(branch: Tree, node: Node, most: int) -> None:
    for group in _groups(node.children):
        shown = group[:most] if group[0].kind in MANY else group
        for child in shown:
            _grow(branch.add(_label(child)), child, most)
        if len(group) > len(shown):
            more = len(group) - len(shown)
            branch.add(Text(f"and {more} more {group[0].kind}{'s' if more != 1 else ''}", style="dim"))


def _groups(children: Sequence[Node]) -> list[list[Node]]:
    groups: list[list[Node]] = []
    for child in children:
        if not groups or groups[-1][0].kind != child.kind:
            groups.append([])
        groups[-1].append(child)
    return groups


def _label(node: Node) -> RenderableType:
    head = Text(no_wrap=False, overflow="fold")
    if node.kind in MANY:
        head.append(plain(node.title))
    else:
        head.append(node.kind, style="bold")
        head.append(f" {plain(node.id)[:ID_SHOWN]}", style="cyan")
        head.append(f"  {plain(node.title)}" if node.title else "")
    lines = [Text(plain(line), style="dim", overflow="fold") for line in node.details]
    return Group(head, *lines) if lines else head
