"""Where in a TOML file a value stands, so that an error message can say ``file:line``."""

from __future__ import annotations

import tomllib
from typing import TYPE_CHECKING

import tree_sitter_toml
from tree_sitter import Language, Parser

if TYPE_CHECKING:
    from collections.abc import Iterator

    from tree_sitter import Node

Path = tuple[str | int, ...]
"""Keys and list positions (from 0) that lead from the top of a file to a value."""


class Places:
    """The lines of one TOML file by path.

    Parameters
    ----------
    name
        The file's name for messages.
    text
        Its content, which must be valid TOML.
    """

    def __init__(self, name: str, text: str) -> None:
        self.name = name
        self._lines: dict[Path, int] = {}
        root = Parser(Language(tree_sitter_toml.language())).parse(text.encode()).root_node
        lengths: dict[Path, int] = {}  # how many tables of each [[list]] have been seen
        for node in root.named_children:
            if node.type == "pair":
                self._pair(node, ())
            elif node.type in {"table", "table_array_element"}:
                head, *body = (child for child in node.named_children if child.type != "comment")
                path = self._header(head, lengths, opens=node.type == "table_array_element")
                for pair in body:
                    self._pair(pair, path)

    def line(self, path: Path) -> int:
        """Line (from 1) of a value, or of the innermost table or list around it that the file has."""
        while path and path not in self._lines:
            path = path[:-1]
        return self._lines.get(path, 1)

    def place(self, path: Path) -> str:
        """``file:line`` of a value, or of the innermost table or list around it that the file has."""
        return f"{self.name}:{self.line(path)}"

    def _header(self, head: Node, lengths: dict[Path, int], *, opens: bool) -> Path:
        """Path of a table; the keys of a [[list]] stand for its last table."""
        path: Path = ()
        keys = _keys(head)
        for depth, key in enumerate(keys, start=1):
            path = (*path, key)
            self._lines.setdefault(path, _line(head))
            if opens and depth == len(keys):
                lengths[path] = lengths.get(path, 0) + 1
            if path in lengths:
                path = (*path, lengths[path] - 1)
                self._lines.setdefault(path, _line(head))
        return path

    def _pair(self, node: Node, above: Path) -> None:
        key, value = (child for child in node.named_children if child.type != "comment")
        for name in _keys(key):
            above = (*above, name)
            self._lines.setdefault(above, _line(key))
        self._inside(value, above)

    def _inside(self, value: Node, path: Path) -> None:
        inner = [child for child in value.named_children if child.type != "comment"]
        if value.type == "inline_table":
            for pair in inner:
                self._pair(pair, path)
        elif value.type == "array":
            for position, element in enumerate(inner):
                self._lines[(*path, position)] = _line(element)
                self._inside(element, (*path, position))


def _line(node: Node) -> int:
    return node.start_point.row + 1


def _keys(node: Node) -> tuple[str, ...]:
    """Names of a plain, quoted or dotted key; the TOML reader itself undoes the quotes."""
    text = node.text.decode() if node.text is not None else ""

    def descend(table: object) -> Iterator[str]:
        while isinstance(table, dict):
            ((name, table),) = table.items()
            yield name

    return tuple(descend(tomllib.loads(f"{text} = 0")))
