"""Styles for the results: OGC Styled Layer Descriptors, version 1.0.0.

Colours are chosen so that nobody needs to tell red from green: the ramp runs
from light to dark, points differ in fill and outline, zones are dashed.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from xml.sax.saxutils import escape, quoteattr

import numpy as np

from geoclust.errors import OutputError, not_allowed

RAMP = ("#f5f0da", "#dcdca9", "#b0c78d", "#7dab86", "#4d8a84", "#2d6373", "#1c3b57")
"""Colours from few to many: each clearly darker than the one before it."""

STYLE_FILES = (
    "centre_intensity.sld",
    "points.sld",
    "study_area.sld",
    "clusters.sld",
    "zones.sld",
    "simulated_points.sld",
)
"""Names that styles have in a results folder."""

_INK = "#22303c"
_CLUSTER = "#2d6373"
_UNSURE = "#c9a227"
_BACKGROUND = "#8d8d8d"

_DOCUMENT = """<?xml version="1.0" encoding="UTF-8"?>
<StyledLayerDescriptor version="1.0.0" xmlns="http://www.opengis.net/sld" \
xmlns:ogc="http://www.opengis.net/ogc" xmlns:xlink="http://www.w3.org/1999/xlink" \
xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance" \
xsi:schemaLocation="http://www.opengis.net/sld http://schemas.opengis.net/sld/1.0.0/StyledLayerDescriptor.xsd">
  <NamedLayer>
    <Name>{name}</Name>
    <UserStyle>
      <Name>{name}</Name>
      <Title>{title}</Title>
      <IsDefault>1</IsDefault>
      <FeatureTypeStyle>
{rules}
      </FeatureTypeStyle>
    </UserStyle>
  </NamedLayer>
</StyledLayerDescriptor>
"""


def quantile_breaks(values: np.ndarray, classes: int = 7) -> np.ndarray:
    """Values that cut the positive ones into classes of equal count.

    Parameters
    ----------
    values
        Any shape; nan, zero and negative values do not count.
    classes
        Number of breaks wanted, two at least.

    Returns
    -------
    ndarray
        (k,) strictly increasing, from the smallest to the largest positive value,
        k ≤ classes where values repeat; ``[0.]`` if there is none.

    Examples
    --------
    >>> quantile_breaks(np.array([np.nan, 0.0, 1.0, 2.0, 3.0, 4.0, 5.0]), classes=3)
    array([1., 3., 5.])
    """
    if classes < 2:
        raise not_allowed("classes", "a whole number of at least 2", classes)
    numbers = np.asarray(values, dtype=float)
    positive = numbers[np.isfinite(numbers) & (numbers > 0)]
    if positive.size == 0:
        return np.zeros(1)
    return np.unique(np.quantile(positive, np.linspace(0.0, 1.0, classes)))


def raster_style(
    name: str, breaks: Sequence[float] | np.ndarray, *, title: str, unit: str, band: int = 1
) -> str:
    """Style one band of a raster by a colour map that runs from light to dark.

    Parameters
    ----------
    name
        Layer name, as a rule the file name without its suffix.
    breaks
        (k,) increasing values, k ≥ 1; colours in between are interpolated.
    title
        What the legend says.
    unit
        Unit of the values, for the legend.
    band
        Number of the band, from 1.
    """
    numbers = np.asarray(breaks, dtype=float)
    if (
        numbers.ndim != 1
        or numbers.size == 0
        or not np.isfinite(numbers).all()
        or (np.diff(numbers) <= 0).any()
    ):
        raise not_allowed("breaks", "finite, strictly increasing numbers", breaks)
    places = np.linspace(0, len(RAMP) - 1, numbers.size) if numbers.size > 1 else np.array([len(RAMP) - 1.0])
    entries = "\n".join(
        f'              <ColorMapEntry color="{_ramp_colour(place)}" quantity="{float(value)!r}" '
        f'label={quoteattr(f"{value:.3g} {unit}".strip())} opacity="1"/>'
        for place, value in zip(places, numbers, strict=True)
    )
    rules = f"""        <Rule>
          <RasterSymbolizer>
            <ChannelSelection>
              <GrayChannel>
                <SourceChannelName>{int(band)}</SourceChannelName>
              </GrayChannel>
            </ChannelSelection>
            <ColorMap>
{entries}
            </ColorMap>
          </RasterSymbolizer>
        </Rule>"""
    return _document(name, title, rules)


def points_style(sure: float = 0.8) -> str:
    """Style mapped points: in a cluster, probably in one (below `sure`), background."""
    in_cluster = _compare("PropertyIsGreaterThan", "cluster", "0")
    rules = [
        _rule(
            "Background", _compare("PropertyIsEqualTo", "cluster", "0"), _mark("circle", None, _BACKGROUND, 6)
        ),
        _rule(
            f"In a cluster, membership probability below {sure:g}",
            _both(in_cluster, _compare("PropertyIsLessThan", "membership_probability", f"{sure:g}")),
            _mark("circle", _UNSURE, _INK, 7),
        ),
        _rule(
            f"In a cluster, membership probability {sure:g} or more",
            _both(
                in_cluster, _compare("PropertyIsGreaterThanOrEqualTo", "membership_probability", f"{sure:g}")
            ),
            _mark("circle", _CLUSTER, _INK, 7),
        ),
    ]
    return _document("points", "Mapped points by cluster", "\n".join(rules))


def study_area_style() -> str:
    """Style the study area: an outline, nothing inside."""
    return _document("study_area", "Study area", _rule("Study area", "", _polygon(None, _INK, 1.5)))


def clusters_style() -> str:
    """Style cluster polygons, numbered once the map is larger than 1 : 10 000."""
    number = _label("cluster")
    rules = [
        _rule("Cluster", "", _polygon(_CLUSTER, _CLUSTER, 1.2, opacity=0.25)),
        _rule("Cluster number", "", number, scale="<MaxScaleDenominator>10000</MaxScaleDenominator>"),
    ]
    return _document("clusters", "Clusters", "\n".join(rules))


def zones_style(label: str | None = None) -> str:
    """Style zones: dashed outlines, with the column `label` written inside if given."""
    rules = [_rule("Zone", "", _polygon(None, _INK, 1.0, dashes="6 4"))]
    if label is not None:
        rules.append(_rule("Name of the zone", "", _label(label)))
    return _document("zones", "Zones", "\n".join(rules))


def simulated_points_style() -> str:
    """Style simulated points: small dots, easily told from mapped ones."""
    return _document(
        "simulated_points", "Simulated points", _rule("Simulated point", "", _mark("cross", _INK, _INK, 4))
    )


def vector_styles(zone_label: str | None = None) -> dict[str, str]:
    """Styles of every vector layer of the results, by layer name.

    Parameters
    ----------
    zone_label
        Column of the zones that holds their names.
    """
    return {
        "points": points_style(),
        "study_area": study_area_style(),
        "clusters": clusters_style(),
        "zones": zones_style(zone_label),
        "simulated_points": simulated_points_style(),
    }


def centre_intensity_style(mean: np.ndarray) -> str:
    """Style the first band of centre_intensity.tif.

    Parameters
    ----------
    mean
        (rows, columns) expected centres per hectare, nan outside; its quantiles are the breaks.
    """
    breaks = quantile_breaks(mean)
    return raster_style("centre_intensity", breaks, title="Cluster centres per hectare, mean", unit="ha⁻¹")


def write_styles(folder: str | Path, styles: Mapping[str, str]) -> list[Path]:
    """Write each style to `folder` under its name with the suffix .sld; return the files.

    Raises
    ------
    OutputError
        If a file cannot be written.
    """
    written = []
    for name, text in styles.items():
        path = Path(folder) / f"{name}.sld"
        try:
            path.write_text(text, encoding="utf-8")
        except OSError as error:
            raise OutputError(f"{path} cannot be written: {error.strerror}.") from error
        written.append(path)
    return written


def _ramp_colour(place: float) -> str:
    """Colour at a place from 0 to len(RAMP) − 1 along the ramp."""
    start = min(int(place), len(RAMP) - 2)
    pair = [[int(colour[i : i + 2], 16) for i in (1, 3, 5)] for colour in RAMP[start : start + 2]]
    share = place - start
    return "#" + "".join(f"{round(a + share * (b - a)):02x}" for a, b in zip(*pair, strict=True))


def _document(name: str, title: str, rules: str) -> str:
    return _DOCUMENT.format(name=escape(name), title=escape(title), rules=rules)


def _rule(title: str, condition: str, symbolizer: str, scale: str = "") -> str:
    parts = [f"<Name>{escape(title)}</Name>", f"<Title>{escape(title)}</Title>"]
    if condition:
        parts.append(f"<ogc:Filter>{condition}</ogc:Filter>")
    inside = "\n          ".join([*parts, *([scale] if scale else []), symbolizer])
    return f"        <Rule>\n          {inside}\n        </Rule>"


def _compare(operator: str, column: str, value: str) -> str:
    return (
        f"<ogc:{operator}><ogc:PropertyName>{escape(column)}</ogc:PropertyName>"
        f"<ogc:Literal>{escape(value)}</ogc:Literal></ogc:{operator}>"
    )


def _both(one: str, other: str) -> str:
    return f"<ogc:And>{one}{other}</ogc:And>"


def _parameter(name: str, value: object) -> str:
    return f'<CssParameter name="{name}">{escape(str(value))}</CssParameter>'


def _fill(colour: str, opacity: float = 1.0) -> str:
    return f"<Fill>{_parameter('fill', colour)}{_parameter('fill-opacity', f'{opacity:g}')}</Fill>"


def _stroke(colour: str, width: float, dashes: str | None = None) -> str:
    dash = _parameter("stroke-dasharray", dashes) if dashes else ""
    return f"<Stroke>{_parameter('stroke', colour)}{_parameter('stroke-width', f'{width:g}')}{dash}</Stroke>"


def _mark(shape: str, fill: str | None, outline: str, size: float) -> str:
    inside = _fill(fill) if fill else _fill("#ffffff", 0.0)
    mark = f"<Mark><WellKnownName>{shape}</WellKnownName>{inside}{_stroke(outline, 0.8)}</Mark>"
    return f"<PointSymbolizer><Graphic>{mark}<Size>{size:g}</Size></Graphic></PointSymbolizer>"


def _polygon(
    fill: str | None, outline: str, width: float, *, opacity: float = 1.0, dashes: str | None = None
) -> str:
    inside = _fill(fill, opacity) if fill else ""
    return f"<PolygonSymbolizer>{inside}{_stroke(outline, width, dashes)}</PolygonSymbolizer>"


def _label(column: str) -> str:
    font = _parameter("font-family", "sans-serif") + _parameter("font-size", 11)
    place = (
        "<LabelPlacement><PointPlacement><AnchorPoint><AnchorPointX>0.5</AnchorPointX>"
        "<AnchorPointY>0.5</AnchorPointY></AnchorPoint></PointPlacement></LabelPlacement>"
    )
    halo = f"<Halo><Radius>1.5</Radius>{_fill('#ffffff', 0.8)}</Halo>"
    return (
        f"<TextSymbolizer><Label><ogc:PropertyName>{escape(column)}</ogc:PropertyName></Label>"
        f"<Font>{font}</Font>{place}{halo}{_fill(_INK)}</TextSymbolizer>"
    )
