"""matplotlib's SVG made fit for a page: no styles, only classes and attributes, so that the page's colours rule.

A strict content security policy blocks style attributes, and a drawing in its own colours is lost on a dark page. So
every colour becomes a class named for its role, and everything else an attribute; what nothing refers to goes.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from xml.etree import ElementTree

__all__ = ["page_svg"]

_KEPT = frozenset(
    (
        *(f"stroke-{name}" for name in ("width", "linecap", "linejoin", "dasharray", "dashoffset", "opacity")),
        *("fill-opacity", "fill-rule", "clip-rule", "opacity", "font-size", "font-weight", "text-anchor"),
    )
)
_COLOURED = {"stroke": "k", "fill": "f"}  # property, and the first letter of its class
_DROPPED = frozenset(("metadata", "style", "title"))
_NUMBER = re.compile(r"-?\d+\.\d+")
_MEASURES = frozenset(("d", "x", "y", "transform", "width", "height", "stroke-dasharray", "viewBox", "stroke-width"))
_REFERENCE = re.compile(r"#([\w-]+)")


def page_svg(text: str, roles: Mapping[str, str], prefix: str) -> str:
    """Return an SVG document as markup to stand in a page.

    `roles` names each colour that the drawing uses, `prefix` begins every id. Raises ValueError for a colour without
    a role, or a style that the page would lose.
    """
    root = ElementTree.fromstring(text)
    names = {found: f"{prefix}-{number}" for number, found in enumerate(_referenced(root))}
    drawn = _translated(root, roles, names)
    for name in ("width", "height", "version"):
        drawn.attrib.pop(name, None)
    drawn.set("aria-hidden", "true")  # the figure around it says in words what it shows
    drawn.set("focusable", "false")
    return ElementTree.tostring(drawn, encoding="unicode")


def _referenced(root: ElementTree.Element) -> list[str]:
    """Return the ids that something refers to, in order."""
    found: dict[str, None] = {}
    for element in root.iter():
        for name, value in element.attrib.items():
            if _local(name) in ("href", "clip-path", "style"):
                found.update(
                    dict.fromkeys(_REFERENCE.findall(value) if "url(" in value or _local(name) == "href" else ())
                )
    return list(found)


def _translated(
    element: ElementTree.Element, roles: Mapping[str, str], names: Mapping[str, str]
) -> ElementTree.Element:
    made = ElementTree.Element(_local(element.tag))
    classes: list[str] = []
    for name, value in element.attrib.items():
        local = _local(name)
        if local == "style":
            classes += _styled(made, value, roles)
        elif local == "id":
            if value in names:
                made.set("id", names[value])
        elif local in ("href", "clip-path"):
            made.set(local, _REFERENCE.sub(lambda found: f"#{names[found[1]]}", value))
        else:
            made.set(local, _shortened(local, value))
    if classes:
        made.set("class", " ".join(classes))
    made.text = element.text if made.tag == "text" else None
    for child in element:
        if not isinstance(child.tag, str) or _local(child.tag) in _DROPPED:
            continue
        drawn = _translated(child, roles, names)
        if len(drawn) or drawn.tag not in ("g", "defs"):
            made.append(drawn)
    return made


def _styled(made: ElementTree.Element, style: str, roles: Mapping[str, str]) -> list[str]:
    """Set the properties of a style as attributes, and return the classes that stand for its colours."""
    classes = []
    for declaration in filter(str.strip, style.split(";")):
        name, _, value = (part.strip() for part in declaration.partition(":"))
        if name in _COLOURED and value == "none":
            made.set(name, value)
        elif name in _COLOURED:
            if value not in roles:
                raise ValueError(f"{name}: {value} is the colour of no role")
            classes.append(f"{_COLOURED[name]}-{roles[value]}")
        elif name == "font":  # matplotlib before 3.10
            size = re.search(r"[\d.]+(?=px)", value)
            made.set("font-size", f"{size[0] if size else 12}px")
            if "bold" in value or "600" in value:
                made.set("font-weight", "600")
        elif name in _KEPT:
            made.set(name, _shortened(name, value))
        elif name != "font-family":  # the page's own
            raise ValueError(f"style {name} would be lost")
    return classes


def _shortened(name: str, value: str) -> str:
    """Return a measure with its numbers rounded to a hundredth of a unit, which nobody sees."""
    if name not in _MEASURES:
        return value
    return " ".join(_NUMBER.sub(lambda found: f"{float(found[0]):.2f}".rstrip("0").rstrip("."), value).split())


def _local(name: str) -> str:
    return name.rpartition("}")[2]
