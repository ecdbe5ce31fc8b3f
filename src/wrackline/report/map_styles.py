"""Styles for the map layers as Styled Layer Descriptors (OGC 02-070, version 1.0.0), which many programs read."""

from __future__ import annotations

from collections.abc import Sequence
from xml.etree import ElementTree as ET

from wrackline.report.maps import group_look
from wrackline.report.style import INK, MUTED, PAPER, WARM

SLD = "http://www.opengis.net/sld"
OGC = "http://www.opengis.net/ogc"
_SHAPES = {
    "o": "circle",
    "s": "square",
    "^": "triangle",
    "D": "square",
    "v": "triangle",
    "P": "cross",
    "X": "x",
    "h": "star",
}
_TURN = {"D": 45.0, "v": 180.0}


def style_layers(groups: Sequence[str]) -> dict[str, str]:
    """Return the style of each layer that a study always has, as XML text.

    Parameters
    ----------
    groups : sequence of str
        Regions of the gauges in use, in the order in which the page's map colours them.
    """
    gauges = [
        _rule(group or "used", _point(*group_look(number)), {"standing": "used", "region": group})
        for number, group in enumerate(groups)
    ]
    gauges.append(_rule("not used", _point(PAPER, "o", outline=MUTED, size=7), {"standing": "not used"}))
    return {
        "gauges": _document("gauges", "Gauges by region", gauges),
        "targets": _document(
            "targets", "Ungauged sites", [_rule("ungauged site", _point(PAPER, "P", outline=INK, size=11))]
        ),
        "basins": _document("basins", "Basins", [_rule("basin", _polygon(MUTED, 0.6))]),
        "regions": _document("regions", "Regions", [_rule("region", _polygon(INK, 1.4, dashes="8 4"))]),
        "skew_cells": _document("skew_cells", "Cells of the skew map", [_rule("cell", _polygon(MUTED, 0.2))]),
        "skew_contours": _document(
            "skew_contours", "Lines of equal generalized skew", [_rule("generalized skew", _line(WARM, 1.0))]
        ),
    }


def _document(layer: str, title: str, rules: list[ET.Element]) -> str:
    ET.register_namespace("", SLD)
    ET.register_namespace("ogc", OGC)
    root = ET.Element(f"{{{SLD}}}StyledLayerDescriptor", {"version": "1.0.0"})
    named = ET.SubElement(root, f"{{{SLD}}}NamedLayer")
    _text(named, "Name", layer)
    style = ET.SubElement(named, f"{{{SLD}}}UserStyle")
    _text(style, "Title", title)
    ET.SubElement(style, f"{{{SLD}}}FeatureTypeStyle").extend(rules)
    ET.indent(root, " ")
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ET.tostring(root, encoding="unicode") + "\n"


def _rule(title: str, symbol: ET.Element, equal: dict[str, str] | None = None) -> ET.Element:
    rule = ET.Element(f"{{{SLD}}}Rule")
    _text(rule, "Title", title)
    if equal:
        place = ET.SubElement(rule, f"{{{OGC}}}Filter")
        if len(equal) > 1:
            place = ET.SubElement(place, f"{{{OGC}}}And")
        for name, value in equal.items():
            test = ET.SubElement(place, f"{{{OGC}}}PropertyIsEqualTo")
            ET.SubElement(test, f"{{{OGC}}}PropertyName").text = name
            ET.SubElement(test, f"{{{OGC}}}Literal").text = value
    rule.append(symbol)
    return rule


def _point(colour: str, marker: str, outline: str = PAPER, size: float = 9) -> ET.Element:
    symbol = ET.Element(f"{{{SLD}}}PointSymbolizer")
    graphic = ET.SubElement(symbol, f"{{{SLD}}}Graphic")
    mark = ET.SubElement(graphic, f"{{{SLD}}}Mark")
    _text(mark, "WellKnownName", _SHAPES[marker])
    _parameters(ET.SubElement(mark, f"{{{SLD}}}Fill"), {"fill": colour})
    _parameters(ET.SubElement(mark, f"{{{SLD}}}Stroke"), {"stroke": outline, "stroke-width": "1"})
    _text(graphic, "Size", f"{size:g}")
    if marker in _TURN:
        _text(graphic, "Rotation", f"{_TURN[marker]:g}")
    return symbol


def _polygon(colour: str, width: float, dashes: str = "") -> ET.Element:
    symbol = ET.Element(f"{{{SLD}}}PolygonSymbolizer")
    look = {"stroke": colour, "stroke-width": f"{width:g}"}
    _parameters(
        ET.SubElement(symbol, f"{{{SLD}}}Stroke"), look | ({"stroke-dasharray": dashes} if dashes else {})
    )
    return symbol


def _line(colour: str, width: float) -> ET.Element:
    symbol = ET.Element(f"{{{SLD}}}LineSymbolizer")
    look = {"stroke": colour, "stroke-width": f"{width:g}"}
    _parameters(ET.SubElement(symbol, f"{{{SLD}}}Stroke"), look)
    return symbol


def _parameters(parent: ET.Element, values: dict[str, str]) -> None:
    for name, value in values.items():
        _text(parent, "CssParameter", value).set("name", name)


def _text(parent: ET.Element, name: str, text: str) -> ET.Element:
    element = ET.SubElement(parent, f"{{{SLD}}}{name}")
    element.text = text
    return element
