"""The paths by which XDMF includes and references name elements: a small part of XPath."""

from __future__ import annotations

import re

from unturn.io.xdmf_xml import Node, fault, local_name

_STEP = re.compile(r"(//?)([A-Za-z_*][\w.:-]*|\*)((?:\[[^\]]*\])*)")
_PREDICATE = re.compile(r"\[([^\]]*)\]")
_HAS = re.compile(r"""@([\w:-]+)\s*=\s*(?:"([^"]*)"|'([^']*)')$""")


def evaluate(root: Node, expression: str, of: Node) -> list[Node]:
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
