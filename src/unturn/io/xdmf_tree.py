"""The elements of an XDMF index, includes and references followed.

The tree is left as it was read; `XdmfTree.children` puts in what an include points to, so that two
steps which include one mesh hand out the very same elements.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path

from unturn.io.xdmf_path import evaluate
from unturn.io.xdmf_xml import Node, attribute, fault, local_name, parse

MAX_DEPTH = 16
MAX_INCLUDED = 200_000
MAX_SEARCHED = 100_000_000


class XdmfTree:
    """An XDMF index with the means to follow includes and references.

    Parameters
    ----------
    path
        The ``.xdmf`` file.

    Raises
    ------
    InputError
        No XML, or no ``Xdmf`` root element.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._roots: dict[Path, Node] = {}
        self.root = self._load(path)
        self._found: dict[tuple[Path, str], list[Node]] = {}
        self._children: dict[int, list[Node]] = {}
        self._included = self._searched = 0

    def _load(self, path: Path) -> Node:
        root = parse(path)
        if local_name(root) != "Xdmf":
            raise fault(
                root, f"the outermost element is <{local_name(root)}>; an XDMF file begins with <Xdmf>."
            )
        version = attribute(root, "Version", default="2.0")
        if not re.match(r"[23](\.|$)", version):
            raise fault(root, f"XDMF version {version!r} is not known; versions 2 and 3 are read.")
        self._roots[path.resolve()] = root
        return root

    def children(self, node: Node) -> list[Node]:
        """Return the child elements, each include replaced by what it points to."""
        if id(node) not in self._children:
            found: list[Node] = []
            for child in node:
                assert isinstance(child, Node)
                found.extend(self._include(child, 0) if local_name(child) == "include" else [child])
            self._children[id(node)] = found
        return self._children[id(node)]

    def child(self, node: Node, name: str) -> Node | None:
        """Return the one child with this tag, references followed, or None."""
        found = [c for c in self.children(node) if local_name(c) == name]
        if len(found) > 1:
            raise fault(found[1], f"a second <{name}> in one <{local_name(node)}>; one is expected.")
        return self.resolve(found[0]) if found else None

    def resolve(self, node: Node) -> Node:
        """Return the element that a ``Reference`` attribute leads to, or the element itself."""
        origin, name = node, local_name(node)
        for _ in range(MAX_DEPTH):
            reference = attribute(node, "Reference")
            if not reference:
                return node
            text = (node.text or "").strip() if reference.upper() == "XML" else reference
            found = self.find(node, text)
            if not found:
                raise fault(origin, f"the reference {text!r} leads to no element of the file.")
            if local_name(found[0]) != name:
                raise fault(
                    origin, f"the reference {text!r} leads to a <{local_name(found[0])}>, not a <{name}>."
                )
            node = found[0]
        raise fault(origin, "the references go round in a circle.")

    def _include(self, node: Node, depth: int) -> Iterator[Node]:
        if depth >= MAX_DEPTH:
            raise fault(node, "the includes go round in a circle.")
        root, pointer = self._roots[node.file.resolve()], attribute(node, "xpointer")
        href = attribute(node, "href")
        if href:
            root = self._other(node, href)
        found = self.find(root, pointer, of=node) if pointer else [root]
        if not found:
            raise fault(node, f"the include {pointer!r} leads to no element.")
        self._included += len(found)
        if self._included > MAX_INCLUDED:
            raise fault(
                node, f"more than {MAX_INCLUDED} included elements; the includes multiply each other."
            )
        for element in found:
            if local_name(element) == "include":
                yield from self._include(element, depth + 1)
            else:
                yield element

    def _other(self, node: Node, href: str) -> Node:
        if "://" in href:
            raise fault(node, f"the include {href!r} is not a file beside this one; nothing is fetched.")
        path = node.file.parent / href
        if path.resolve() not in self._roots:
            if not path.is_file():
                raise fault(node, f"the included file {href!r} is missing; it was looked for at {path}.")
            self._load(path)
        return self._roots[path.resolve()]

    def find(self, anchor: Node, expression: str, of: Node | None = None) -> list[Node]:
        """Return the elements that a path or an xpointer leads to, in file order.

        Parameters
        ----------
        anchor
            Any element of the file that the path belongs to.
        expression
            ``/Xdmf/Domain/Grid[@Name="mesh"]/Topology``, ``//Grid[2]/*[self::Topology or self::Geometry]``,
            ``element(/1/1/2)``; with or without ``xpointer( )`` around it.
        of
            The element to name in errors.
        """
        key = (anchor.file, expression)
        if key not in self._found:
            searches = expression.count("//") + 1
            self._searched += searches * sum(1 for _ in self._roots[anchor.file.resolve()].iter())
            if self._searched > MAX_SEARCHED:
                raise fault(
                    of or anchor, "too many different paths into too large a file; it is not followed."
                )
            self._found[key] = evaluate(self._roots[anchor.file.resolve()], expression, of or anchor)
        return self._found[key]
