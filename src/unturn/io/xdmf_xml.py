"""The XML of an XDMF index: parsed without outside entities, each element knows its file and line."""

from __future__ import annotations

from pathlib import Path
from xml.etree import ElementTree as ET
from xml.parsers import expat

from unturn.errors import InputError

MAX_NESTING = 64
MAX_ENTITY = 256


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
    reading = _Parsing(path)
    try:
        with open(path, "rb") as stream:
            reading.parser.ParseFile(stream)
        root = reading.builder.close()
    except OSError as error:
        raise InputError(f"{path}: cannot be opened: {error.strerror or error}.") from error
    except (expat.ExpatError, ValueError, AssertionError, LookupError) as error:
        raise InputError(
            f"{path}: is not complete XML ({error}). "
            "The file was cut short or is no XDMF index: write it again."
        ) from error
    assert isinstance(root, Node)
    return root


class _Parsing:
    """A parser that follows no entity out of the file, and the tree it builds."""

    def __init__(self, path: Path) -> None:
        self.path, self.depth = path, 0
        self.builder = ET.TreeBuilder(element_factory=Node)
        self.parser = expat.ParserCreate(namespace_separator="}")
        self.parser.buffer_text = True
        self.parser.SetParamEntityParsing(expat.XML_PARAM_ENTITY_PARSING_NEVER)
        self.parser.StartElementHandler = self._start
        self.parser.EndElementHandler = self._end
        self.parser.CharacterDataHandler = self.builder.data
        self.parser.EntityDeclHandler = self._entity
        self.parser.SkippedEntityHandler = self._skipped

    def _fault(self, text: str) -> InputError:
        return InputError(f"{self.path}: line {self.parser.CurrentLineNumber}: {text}")

    def _start(self, tag: str, attrib: dict[str, str]) -> None:
        self.depth += 1
        if self.depth > MAX_NESTING:
            raise self._fault(f"elements nested {self.depth} deep.")
        node = self.builder.start(tag, attrib)
        assert isinstance(node, Node)
        node.line, node.file = self.parser.CurrentLineNumber, self.path

    def _end(self, tag: str) -> None:
        self.depth -= 1
        self.builder.end(tag)

    def _entity(self, name: str, is_parameter: int, value: str | None, *_: object) -> None:
        if is_parameter or value is None or len(value) > MAX_ENTITY or "&" in value or "<" in value:
            raise self._fault(
                f"the entity {name!r} is not a short text of this file; entities that point elsewhere or into "
                "each other are not followed. Write its text in place."
            )

    def _skipped(self, name: str, *_: object) -> None:
        raise self._fault(f"the entity {name!r} is not declared in this file.")
