"""The style of a curtain for QGIS, which loads it by itself: colours by value, in plan and in space."""

from __future__ import annotations

from xml.etree.ElementTree import Element, SubElement, indent, tostring

import numpy as np
import xarray as xr
from matplotlib import colormaps
from numpy.typing import NDArray

from stillground.products.line import answers
from stillground.products.reliability import RELIABLE
from stillground.protocols import Array

_CLASSES = 12
# As in the figures of the section.
_COLOURS = colormaps["cividis"]

Colour = NDArray[np.int64]


def style(curtain: xr.Dataset) -> str:
    """Graduated colours of what people read, a velocity rather than a slowness.

    In plan, where an upright cell has no area, its outline is coloured. In space the same classes are
    rules, since graduated colours are not known there: double-sided surfaces at absolute altitude.

    Parameters
    ----------
    curtain : xarray.Dataset
        From `curtain_dataset`.
    """
    shown = answers(curtain)[-1]
    values = curtain[shown].to_numpy()
    edges = _edges(values, curtain["reliability"].to_numpy() == RELIABLE)
    middles = np.linspace(0, 1, _CLASSES)
    colours = np.rint(255 * _COLOURS(middles)[:, :3]).astype(np.int64)

    root = Element("qgis", version="3.22.0", styleCategories="Symbology|Symbology3D")
    _in_space(root, shown, edges, colours)
    _in_plan(root, shown, edges, colours)
    indent(root)
    doctype = "<!DOCTYPE qgis PUBLIC 'http://mrcc.com/qgis.dtd' 'SYSTEM'>"
    return f"{doctype}\n{tostring(root, encoding='unicode')}\n"


def _edges(values: Array, reliable: NDArray[np.bool_]) -> Array:
    """Edges of the classes: even over the middle of the reliable values, and open to all at both ends."""
    if values.size == 0:
        return np.linspace(0, 1, _CLASSES + 1)
    low, high = np.percentile(values[reliable] if reliable.any() else values, [0.5, 99.5])
    edges = np.linspace(low, high, _CLASSES + 1).astype(np.float64)
    # Six digits are written, so the ends go outwards by more than that.
    edges[0] = min(edges[0], values.min()) - 1e-4 * abs(low)
    edges[-1] = max(edges[-1], values.max()) + 1e-4 * abs(high)
    return edges


def _in_space(root: Element, shown: str, edges: Array, colours: Colour) -> None:
    renderer = SubElement(root, "renderer-3d", type="rulebased", layer="")
    SubElement(renderer, "vector-layer-3d-tiling", {"zoom-levels-count": "3", "show-bounding-boxes": "0"})
    rules = SubElement(renderer, "rules", key="classes")
    for i, colour in enumerate(colours):
        low, high = _texts(edges, i)
        within = f'"{shown}" >= {low} AND "{shown}" < {high}'
        rule = SubElement(rules, "rule", key=f"class-{i}", filter=within, description=f"{low} - {high}")
        symbol = SubElement(rule, "symbol", type="polygon", material_type="phong")
        SubElement(
            symbol,
            "data",
            {
                "alt-clamping": "absolute",
                "alt-binding": "vertex",
                "height": "0",
                "extrusion-height": "0",
                "culling-mode": "no-culling",
                "add-back-faces": "1",
                "invert-normals": "0",
                "rendered-facade": "3",
            },
        )
        lit = {"diffuse": _rgba(colour), "ambient": _rgba(colour // 2), "specular": "0,0,0,255"}
        SubElement(symbol, "material", lit, shininess="0", opacity="1")


def _in_plan(root: Element, shown: str, edges: Array, colours: Colour) -> None:
    renderer = SubElement(
        root, "renderer-v2", type="graduatedSymbol", attr=shown, graduatedMethod="GraduatedColor"
    )
    ranges, symbols = SubElement(renderer, "ranges"), SubElement(renderer, "symbols")
    for i, colour in enumerate(colours):
        low, high = _texts(edges, i)
        said = {"symbol": str(i), "lower": low, "upper": high, "label": f"{low} - {high}", "render": "true"}
        SubElement(ranges, "range", said)
        symbol = SubElement(symbols, "symbol", type="fill", name=str(i), alpha="1")
        layer = SubElement(
            symbol, "layer", {"class": "SimpleFill", "enabled": "1", "locked": "0", "pass": "0"}
        )
        options = SubElement(layer, "Option", type="Map")
        for name, value in {
            "color": _rgba(colour),
            "style": "solid",
            "outline_color": _rgba(colour),
            "outline_style": "solid",
            "outline_width": "0.6",
            "outline_width_unit": "MM",
        }.items():
            SubElement(options, "Option", type="QString", name=name, value=value)


def _texts(edges: Array, i: int) -> tuple[str, str]:
    return f"{edges[i]:.6g}", f"{edges[i + 1]:.6g}"


def _rgba(colour: Colour) -> str:
    return ",".join(map(str, [*colour.tolist(), 255]))
