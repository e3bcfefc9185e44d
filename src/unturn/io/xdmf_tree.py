"""The XML side of an XDMF file: parsed without outside entities, includes and references followed.

The tree is left as it was read; `XdmfTree.children` puts in what an include points to, so that two
steps which include one mesh hand out the very same elements.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from xml.etree import ElementTree as ET
from xml.parsers import expat

from unturn.errors import InputError

MAX_DEPTH = 16
MAX_NESTING = 64
MAX_INCLUDED = 200_000
MAX_SEARCHED = 100_000_000
MAX_ENTITY = 256
_STEP = re.compile(r"(//?)([A-Za-z_*][\w.:-]*|\*)((?:\[[^\]]*\])*)")
_PREDICATE = re.compile(r"\[([^\]]*)\]")
_HAS = re.compile(r"""@([\w:-]+)\s*=\s*(?:"([^"]*)"|'([^']*)')$""")


class Node(ET.Element):
    """An XML element that knows its line and the file it stands in."""

    line: int = 0
    file: Path = Path()


def local_name(node: ET.Element) -> str:
    """Return the tag without its namespace."""
    return node.tag.rpartition("}")[2]


def attribute(node: ET.Element, *names: str, default: str = "") -> str:
    """Return the first of these XML attributes that is set, stripped."""
    for name in names:
        if name in node.attrib:
            return str(node.attrib[name]).strip()
    return default


def fault(node: ET.Element, text: str) -> InputError:
    """Return the error for something wrong with this element, with file and line in front."""
    place = f"{node.file}: line {node.line}: " if isinstance(node, Node) else ""
    return InputError(f"{place}{text}")


def parse(path: Path) -> Node:
    """Return the root element of an XML file.

    Raises
    ------
    InputError
        The file is missing, no XML, or declares an entity that is nested, long or outside the file.
    """
    builder = ET.TreeBuilder(element_factory=Node)
    parser = expat.ParserCreate(namespace_separator="}")
    parser.buffer_text = True
    parser.SetParamEntityParsing(expat.XML_PARAM_ENTITY_PARSING_NEVER)

    depth = 0

    def start(tag: str, attrib: dict[str, str]) -> None:
        nonlocal depth
        depth += 1
        if depth > MAX_NESTING:
            raise InputError(f"{path}: line {parser.CurrentLineNumber}: elements nested {depth} deep.")
        node = builder.start(tag, attrib)
        assert isinstance(node, Node)
        node.line, node.file = parser.CurrentLineNumber, path

    def end(tag: str) -> None:
        nonlocal depth
        depth -= 1
        builder.end(tag)

    def skipped(name: str, *_: object) -> None:
        raise InputError(
            f"{path}: line {parser.CurrentLineNumber}: the entity {name!r} is not declared in this file."
        )

    def entity(name: str, is_parameter: int, value: str | None, *_: object) -> None:
        if is_parameter or value is None or len(value) > MAX_ENTITY or "&" in value or "<" in value:
            raise InputError(
                f"{path}: line {parser.CurrentLineNumber}: the entity {name!r} is not a short text of this "
                "file; entities that point elsewhere or into each other are not followed. "
                "Write its text in place."
            )

    parser.StartElementHandler = start
    parser.EndElementHandler = end
    parser.CharacterDataHandler = builder.data
    parser.EntityDeclHandler = entity
    parser.SkippedEntityHandler = skipped
    try:
        with open(path, "rb") as stream:
            parser.ParseFile(stream)
        root = builder.close()
    except OSError as error:
        raise InputError(f"{path}: cannot be opened: {error.strerror or error}.") from error
    except (expat.ExpatError, ValueError, AssertionError, LookupError) as error:
        raise InputError(
            f"{path}: is not complete XML ({error}). "
            "The file was cut short or is no XDMF index: write it again."
        ) from error
    assert isinstance(root, Node)
    return root


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
            self._found[key] = _evaluate(self._roots[anchor.file.resolve()], expression, of or anchor)
        return self._found[key]


def _evaluate(root: Node, expression: str, of: Node) -> list[Node]:
    text = expression.strip()
    wrapped = re.fullmatch(r"(xpointer|element)\s*\((.*)\)", text, re.DOTALL)
    if wrapped:
        text = wrapped[2].strip()
    if wrapped and wrapped[1] == "element":
        return _by_position(root, text, of)
    top = Node("")
    top.append(root)
    found, position = [top], 0
    while position < len(text):
        step = _STEP.match(text, position)
        if step is None:
            raise fault(of, f"the path {expression!r} is written in a way that is not understood.")
        found = _take_step(found, step[1] == "//", step[2], _PREDICATE.findall(step[3]), of, expression)
        position = step.end()
    return [] if found == [top] else found


def _by_position(root: Node, text: str, of: Node) -> list[Node]:
    if not re.fullmatch(r"(/\d{1,9})+", text):
        raise fault(of, f"the path {text!r} is written in a way that is not understood.")
    top = Node("")
    top.append(root)
    node = top
    for number in text.split("/")[1:]:
        inner = list(node)
        if not 1 <= int(number) <= len(inner):
            return []
        node = inner[int(number) - 1]  # type: ignore[assignment]
    return [node]


def _take_step(
    nodes: list[Node], anywhere: bool, name: str, predicates: list[str], of: Node, expression: str
) -> list[Node]:
    parents: list[Node] = []
    for node in nodes:
        parents.extend(node.iter() if anywhere else [node])  # type: ignore[arg-type]
    taken: dict[int, Node] = {}
    for parent in parents:
        inner = [c for c in parent if isinstance(c, Node) and name in ("*", local_name(c))]
        for predicate in predicates:
            inner = _filter(inner, predicate.strip(), of, expression)
        taken.update((id(c), c) for c in inner)
    return list(taken.values())


def _filter(nodes: list[Node], predicate: str, of: Node, expression: str) -> list[Node]:
    if re.fullmatch(r"\d{1,9}", predicate):
        return nodes[int(predicate) - 1 : int(predicate)] if int(predicate) else []
    has = _HAS.match(predicate)
    if has:
        wanted = has[2] if has[2] is not None else has[3]
        return [n for n in nodes if n.get(has[1]) == wanted]
    tags = [part.strip() for part in re.split(r"\bor\b", predicate)]
    if all(re.fullmatch(r"self::[\w.-]+", tag) for tag in tags):
        return [n for n in nodes if f"self::{local_name(n)}" in tags]
    raise fault(of, f"the path {expression!r} has a condition that is not understood: [{predicate}].")
