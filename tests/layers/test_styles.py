"""Styles: Styled Layer Descriptors that any GIS can read and everybody can tell apart."""

from __future__ import annotations

import re
from xml.etree import ElementTree

import numpy as np
import pytest

from geoclust.errors import OutputError, UsageError
from geoclust.layers.styles import (
    RAMP,
    STYLE_FILES,
    centre_intensity_style,
    quantile_breaks,
    raster_style,
    vector_styles,
    write_styles,
    zones_style,
)

SLD = "{http://www.opengis.net/sld}"
OGC = "{http://www.opengis.net/ogc}"

# Content models of the elements in use: the children allowed, in the order demanded.
# OGC 02-070 (Styled Layer Descriptor 1.0.0) and 02-059 (Filter Encoding), from memory.
CONTENT = {
    "StyledLayerDescriptor": "Name? Title? Abstract? (NamedLayer|UserLayer)*",
    "NamedLayer": "Name LayerFeatureConstraints? (NamedStyle|UserStyle)*",
    "UserStyle": "Name? Title? Abstract? IsDefault? FeatureTypeStyle+",
    "FeatureTypeStyle": "Name? Title? Abstract? FeatureTypeName? SemanticTypeIdentifier* Rule+",
    "Rule": "Name? Title? Abstract? LegendGraphic? (Filter|ElseFilter)? MinScaleDenominator? "
    "MaxScaleDenominator? (PointSymbolizer|PolygonSymbolizer|TextSymbolizer|RasterSymbolizer)+",
    "PointSymbolizer": "Geometry? Graphic?",
    "PolygonSymbolizer": "Geometry? Fill? Stroke?",
    "TextSymbolizer": "Geometry? Label? Font? LabelPlacement? Halo? Fill?",
    "RasterSymbolizer": "Geometry? Opacity? ChannelSelection? OverlapBehavior? ColorMap?",
    "Graphic": "(ExternalGraphic|Mark)* Opacity? Size? Rotation?",
    "Mark": "WellKnownName? Fill? Stroke?",
    "Fill": "GraphicFill? CssParameter*",
    "Stroke": "(GraphicFill|GraphicStroke)? CssParameter*",
    "Font": "CssParameter*",
    "Halo": "Radius? Fill?",
    "LabelPlacement": "(PointPlacement|LinePlacement)",
    "PointPlacement": "AnchorPoint? Displacement? Rotation?",
    "AnchorPoint": "AnchorPointX AnchorPointY",
    "Label": "PropertyName",
    "ChannelSelection": "(GrayChannel|RedChannel GreenChannel BlueChannel)",
    "GrayChannel": "SourceChannelName",
    "ColorMap": "ColorMapEntry*",
    "Filter": "(And|PropertyIsEqualTo|PropertyIsGreaterThan)",
    "And": "(PropertyIsEqualTo|PropertyIsGreaterThan|PropertyIsLessThan|PropertyIsGreaterThanOrEqualTo)+",
    **dict.fromkeys(
        (
            "PropertyIsEqualTo",
            "PropertyIsGreaterThan",
            "PropertyIsLessThan",
            "PropertyIsGreaterThanOrEqualTo",
        ),
        "PropertyName Literal",
    ),
}
FILTER_ELEMENTS = {name for name in CONTENT if name.startswith(("Filter", "And", "Property"))} | {
    "PropertyName",
    "Literal",
}
ATTRIBUTES = {"CssParameter": {"name"}, "ColorMapEntry": {"color", "quantity", "label", "opacity"}}


def conforms(element):
    """Fail unless an element and everything in it follows the content models above."""
    name = element.tag.split("}")[1]
    assert element.tag == (OGC if name in FILTER_ELEMENTS else SLD) + name
    children = "".join(child.tag.split("}")[1] + " " for child in element)
    model = re.sub(r"\w+", lambda word: f"(?:{word[0]} )", CONTENT.get(name, "")).replace(") ", ")")
    assert re.fullmatch(re.sub(r"\s+(?=\(|$)", "", model), children), f"{name}: {children}"
    if name != "StyledLayerDescriptor":
        assert set(element.attrib) == ATTRIBUTES.get(name, set())
    for child in element:
        conforms(child)


def parsed(text):
    root = ElementTree.fromstring(text.encode())
    assert root.tag == SLD + "StyledLayerDescriptor"
    assert root.get("version") == "1.0.0"
    conforms(root)
    return root


def test_checker_refuses_wrong_order_and_unknown_elements():
    text = centre_intensity_style(np.arange(9.0))
    for wrong in (
        text.replace("SourceChannelName", "ChannelName"),
        text.replace("<IsDefault>1</IsDefault>", "").replace(
            "</UserStyle>", "<IsDefault>1</IsDefault></UserStyle>"
        ),
    ):
        with pytest.raises(AssertionError):
            parsed(wrong)


@pytest.mark.parametrize("name", list(vector_styles("name")))
def test_vector_styles_conform(name):
    root = parsed(vector_styles("name")[name])
    assert root.findtext(f"{SLD}NamedLayer/{SLD}Name") == name
    assert f"{name}.sld" in STYLE_FILES


def test_raster_style_conforms_and_carries_the_breaks():
    mean = np.random.default_rng(3).gamma(1.0, 1.0, (40, 50))
    mean[:5] = np.nan
    root = parsed(centre_intensity_style(mean))
    entries = root.findall(f".//{SLD}ColorMapEntry")
    quantities = [float(entry.get("quantity")) for entry in entries]
    np.testing.assert_array_equal(quantities, quantile_breaks(mean))
    assert [entry.get("color") for entry in entries] == list(RAMP)
    assert root.findtext(f".//{SLD}SourceChannelName") == "1"
    assert all(entry.get("label").endswith("ha⁻¹") for entry in entries)


def test_quantile_breaks_hold_equal_counts():
    values = np.random.default_rng(4).gamma(0.5, 2.0, 6000)
    values[:600] = np.nan
    breaks = quantile_breaks(values, classes=7)
    counts, _ = np.histogram(values[600:], breaks)
    assert np.abs(counts - 900).max() <= 1
    assert breaks[0] == np.nanmin(values)
    assert breaks[-1] == np.nanmax(values)


@pytest.mark.parametrize(
    ("values", "expected"),
    [([np.nan, np.nan], [0.0]), ([], [0.0]), ([2.0, 2.0, 2.0], [2.0]), ([0.0, 5.0], [5.0])],
)
def test_breaks_of_poor_values(values, expected):
    np.testing.assert_array_equal(quantile_breaks(np.array(values)), expected)
    assert len(parsed(centre_intensity_style(np.array(values))).findall(f".//{SLD}ColorMapEntry")) == 1


@pytest.mark.parametrize("breaks", [[], [1.0, 1.0], [2.0, 1.0], [0.0, np.nan], [[1.0, 2.0]]])
def test_bad_breaks_are_refused(breaks):
    with pytest.raises(UsageError, match="breaks must be"):
        raster_style("r", breaks, title="t", unit="m")
    with pytest.raises(UsageError, match="classes must be"):
        quantile_breaks(np.ones(3), classes=1)


def luminance(colour):
    """Relative luminance of sRGB (WCAG 2.1, from memory)."""
    parts = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def test_ramp_can_be_read_by_lightness_alone():
    # CIE 1976 lightness falls by at least eight at every step: the order survives any colour vision
    lightness = [116 * luminance(colour) ** (1 / 3) - 16 for colour in RAMP]
    assert (np.diff(lightness) < -8).all()


def test_fewer_breaks_still_span_the_ramp():
    root = parsed(raster_style("r", [1.0, 2.0, 3.0], title="t", unit="m", band=3))
    colours = [entry.get("color") for entry in root.findall(f".//{SLD}ColorMapEntry")]
    assert colours == [RAMP[0], RAMP[3], RAMP[6]]
    assert root.findtext(f".//{SLD}SourceChannelName") == "3"


def test_awkward_names_are_escaped():
    root = parsed(zones_style('a<b & "c"'))
    assert root.findtext(f".//{OGC}PropertyName") == 'a<b & "c"'
    assert parsed(zones_style()).find(f".//{SLD}TextSymbolizer") is None
    root = parsed(raster_style("<r>", [1.0], title="a & b", unit='"'))
    assert root.findtext(f".//{SLD}Title") == "a & b"


def test_points_are_told_apart_without_gaps():
    rules = parsed(vector_styles()["points"]).findall(f".//{SLD}Rule")
    tests = {
        "PropertyIsEqualTo": float.__eq__,
        "PropertyIsGreaterThan": float.__gt__,
        "PropertyIsLessThan": float.__lt__,
        "PropertyIsGreaterThanOrEqualTo": float.__ge__,
    }

    def holds(rule, row):
        comparisons = [e for e in rule.find(f"{OGC}Filter").iter() if e.tag.removeprefix(OGC) in tests]
        return all(
            tests[e.tag.removeprefix(OGC)](
                row[e.findtext(f"{OGC}PropertyName")], float(e.findtext(f"{OGC}Literal"))
            )
            for e in comparisons
        )

    for cluster in (0.0, 1.0, 17.0):
        for probability in (0.0, 0.79, 0.8, 1.0):
            row = {"cluster": cluster, "membership_probability": probability}
            assert sum(holds(rule, row) for rule in rules) == 1


def test_styles_are_written_under_their_names(tmp_path):
    styles = {"centre_intensity": centre_intensity_style(np.ones(3)), **vector_styles()}
    written = write_styles(tmp_path, styles)
    assert {path.name for path in written} == set(STYLE_FILES) == {path.name for path in tmp_path.iterdir()}
    assert all(path.read_text(encoding="utf-8") == styles[path.stem] for path in written)
    with pytest.raises(OutputError, match="cannot be written"):
        write_styles(tmp_path / "nowhere", styles)
