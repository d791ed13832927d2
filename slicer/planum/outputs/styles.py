"""Styles that give every slice the one stretch in a GIS: OGC SLD 1.0 (open standard) and one QGIS loads by itself."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from pathlib import Path

from planum.outputs.stretch import Stretch
from planum.outputs.writing import aside

__all__ = ["qml", "sld", "write_styles"]

_SLD = "http://www.opengis.net/sld"


def write_styles(raster_path: Path, stretch: Stretch, *, title: str) -> tuple[Path, Path]:
    """Write ``<stem>.sld`` and ``<stem>.qml`` beside a raster and return their paths."""
    paths = raster_path.with_suffix(".sld"), raster_path.with_suffix(".qml")
    for path, text in zip(paths, (sld(stretch, name=raster_path.stem, title=title), qml(stretch)), strict=True):
        with aside(path) as part:
            part.write_text(text, encoding="utf-8", newline="\n")
    return paths


def sld(stretch: Stretch, *, name: str, title: str) -> str:
    """Return a Styled Layer Descriptor 1.0.0: a linear grey ramp, white at ``low``, black at ``high``.

    Source: OGC 02-070, Styled Layer Descriptor Implementation Specification 1.0.0, clause 11 (RasterSymbolizer).
    """
    root = ET.Element(f"{{{_SLD}}}StyledLayerDescriptor", version="1.0.0")
    layer = ET.SubElement(root, f"{{{_SLD}}}NamedLayer")
    ET.SubElement(layer, f"{{{_SLD}}}Name").text = name
    style = ET.SubElement(layer, f"{{{_SLD}}}UserStyle")
    ET.SubElement(style, f"{{{_SLD}}}Title").text = f"{title}: {stretch.text}"
    rule = ET.SubElement(ET.SubElement(style, f"{{{_SLD}}}FeatureTypeStyle"), f"{{{_SLD}}}Rule")
    symbolizer = ET.SubElement(rule, f"{{{_SLD}}}RasterSymbolizer")
    ET.SubElement(symbolizer, f"{{{_SLD}}}Opacity").text = "1.0"
    ramp = ET.SubElement(symbolizer, f"{{{_SLD}}}ColorMap")
    for color, quantity, label in (("#ffffff", stretch.low, "weak"), ("#000000", stretch.high, "strong")):
        ET.SubElement(
            ramp, f"{{{_SLD}}}ColorMapEntry", color=color, opacity="1.0", quantity=f"{quantity:.9g}", label=label
        )
    ET.register_namespace("sld", _SLD)
    return _text(root)


def qml(stretch: Stretch) -> str:
    """Return the style file QGIS loads with the raster of the same name: single-band grey, white to black."""
    root = ET.Element("qgis", version="3.28.0", styleCategories="Symbology")
    pipe = ET.SubElement(root, "pipe")
    renderer = ET.SubElement(
        pipe,
        "rasterrenderer",
        type="singlebandgray",
        grayBand="1",
        gradient="WhiteToBlack",
        opacity="1",
        alphaBand="-1",
        nodataColor="",
    )
    ET.SubElement(renderer, "rasterTransparency")
    contrast = ET.SubElement(renderer, "contrastEnhancement")
    ET.SubElement(contrast, "minValue").text = f"{stretch.low:.9g}"
    ET.SubElement(contrast, "maxValue").text = f"{stretch.high:.9g}"
    ET.SubElement(contrast, "algorithm").text = "StretchToMinimumMaximum"
    ET.SubElement(pipe, "rasterresampler", maxOversampling="2", zoomedOutResampler="bilinear")
    ET.SubElement(root, "blendMode").text = "0"
    return _text(root)


def _text(root: ET.Element) -> str:
    ET.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ET.tostring(root, encoding="unicode") + "\n"
