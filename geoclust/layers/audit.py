"""The data audit: every count, repair and choice between the files and the analysis."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

from geoclust.layers.crs import SCALE_LIMIT
from geoclust.layers.lattice import Lattice
from geoclust.layers.polygons import REPAIR_LIMIT
from geoclust.layers.sources import LayerRecord

# A lattice matters once its spacing reaches this share of the usual nearest distance.
COARSE_LATTICE = 0.1
# Two layers on different datums are worth a word if they may be off by more than this, m.
DATUM_ACCURACY = 2.0


@dataclass(frozen=True)
class Audit:
    """What was read, what was dropped and why, and what was chosen.

    Attributes
    ----------
    points_source, area_source
        Where the two layers came from.
    points_read
        Points with finite coordinates, MultiPoints taken apart.
    null_geometries, empty_geometries, other_geometries
        Point features without geometry, with an empty one, and with lines or polygons.
    nonfinite_points
        Points dropped for a coordinate that is not a finite number or has no place in
        the metric CRS.
    multipoints_exploded, heights_dropped
        Features of several points; features whose heights were dropped.
    points_kept, points_outside, points_on_boundary
        Points inside or on the boundary; outside, hence dropped; within
        `boundary_tolerance_m` of the boundary.
    furthest_outside_m, boundary_tolerance_m
        m.
    coincident_points, coincident_places
        Kept points at a place that another one has already taken, and such places.
    lattices, lattice_unit, lattice_m
        Lattices of the recorded coordinates, in `lattice_unit` of the input; the widest
        spacing that at least half of the points share, in m (None without one).
    median_nearest_m
        Median distance of different places to their nearest neighbours, m.
    polygons_read, area_null_geometries, area_other_geometries, flat_polygons
        Single polygons read; features of the area layer without a geometry, with points
        or lines; polygons without area, dropped.
    repaired_polygons, repair_change
        Invalid polygons repaired, and the share of the area that this moved.
    overlap_m2
        Area that polygons of the study area covered twice before they were united.
    crosses_antimeridian, vertices_added
        Longitudes were counted on past 180°; vertices put on edges that bend in the
        metric CRS.
    parts, holes, vertices, area_m2, perimeter_m
        Of the united study area in the metric CRS; each ring's closing vertex not counted.
    metric_crs, metric_crs_wkt, metric_crs_reason
        Name and code, full definition, and why it was chosen.
    scale_error_distance, scale_error_area
        Largest |scale - 1| over the study area; None in a local plane.
    points_reprojected, area_reprojected
        Whether their coordinates changed.
    datum_operation, datum_accuracy_m, datum_grid_missing
        Operation between different datums, None if there was none; its stated
        accuracy, None if unknown; whether a better one needs a grid file that is not
        installed.
    outside_area_of_use
        The study area lies far outside the region that its CRS was made for.
    notes
        Choices that were made for the user, as sentences.
    """

    points_source: LayerRecord
    area_source: LayerRecord
    points_read: int
    null_geometries: int
    empty_geometries: int
    other_geometries: int
    nonfinite_points: int
    multipoints_exploded: int
    heights_dropped: int
    points_kept: int
    points_outside: int
    points_on_boundary: int
    furthest_outside_m: float
    boundary_tolerance_m: float
    coincident_points: int
    coincident_places: int
    lattices: tuple[Lattice, ...]
    lattice_unit: str
    lattice_m: float | None
    median_nearest_m: float
    polygons_read: int
    area_null_geometries: int
    area_other_geometries: int
    flat_polygons: int
    repaired_polygons: int
    repair_change: float
    overlap_m2: float
    crosses_antimeridian: bool
    vertices_added: int
    parts: int
    holes: int
    vertices: int
    area_m2: float
    perimeter_m: float
    metric_crs: str
    metric_crs_wkt: str
    metric_crs_reason: str
    scale_error_distance: float | None
    scale_error_area: float | None
    points_reprojected: bool
    area_reprojected: bool
    datum_operation: str | None
    datum_accuracy_m: float | None
    datum_grid_missing: bool
    outside_area_of_use: bool
    notes: tuple[str, ...] = ()

    @property
    def area_ha(self) -> float:
        """Area of the study area, ha."""
        return self.area_m2 / 1e4

    @property
    def warnings(self) -> list[str]:
        """What a careful person would look into before trusting results, as sentences."""
        return [*self._point_warnings(), *self._area_warnings(), *self._crs_warnings()]

    def to_dict(self) -> dict[str, object]:
        """All fields, `area_ha` and `warnings`, as types that JSON knows."""
        fields = dataclasses.asdict(self)
        fields["lattices"] = [dataclasses.asdict(lattice) for lattice in self.lattices]
        fields["notes"] = list(self.notes)
        return {**fields, "area_ha": self.area_ha, "warnings": self.warnings}

    def lines(self) -> list[str]:
        """The audit as lines for people, warnings last."""
        body = [
            "Points",
            *_indented([_source(self.points_source), *self._point_lines()]),
            "Study area",
            *_indented([_source(self.area_source), *self._area_lines()]),
            "Coordinates",
            *_indented(self._crs_lines()),
        ]
        if self.notes:
            body += ["Choices made", *_indented(list(self.notes))]
        warnings = self.warnings
        body += ["Warnings", *_indented(warnings)] if warnings else ["No warnings"]
        return body

    def _point_lines(self) -> list[str]:
        lines = [
            f"{_count(self.points_read, 'point')} read, {self.points_kept:,} kept, {self.points_outside:,} "
            "outside the study area dropped"
            + (f" (the furthest {length_text(self.furthest_outside_m)} away)" if self.points_outside else ""),
            f"{self.points_on_boundary:,} on the boundary (within "
            f"{length_text(self.boundary_tolerance_m)}), kept",
            f"{self.coincident_points:,} at a place already taken ({self.coincident_places:,} such places)",
            f"features without geometry {self.null_geometries:,}, empty {self.empty_geometries:,}, other "
            f"than points {self.other_geometries:,}; points not finite {self.nonfinite_points:,}",
            f"features of several points taken apart {self.multipoints_exploded:,}; heights dropped from "
            f"{self.heights_dropped:,} features",
            f"median distance to the nearest neighbour {length_text(self.median_nearest_m)}",
        ]
        return [*lines, self.lattice_text()]

    def lattice_text(self) -> str:
        """How finely coordinates were recorded, as a clause."""
        if not self.lattices:
            return "coordinates of full precision: no lattice found"
        grouped: dict[tuple[str, str], list[str]] = {}
        for lattice in self.lattices:
            share = "" if lattice.share == 1 else f" for {100 * lattice.share:.0f} % of the points"
            grouped.setdefault((spacing_text(lattice.spacing, self.lattice_unit), share), []).append(
                lattice.axis
            )
        clauses = [f"{spacing} in {' and '.join(axes)}{share}" for (spacing, share), axes in grouped.items()]
        in_metres = self.lattice_unit.lower() in ("metre", "meter")
        metres = "" if self.lattice_m is None or in_metres else f"; that is {length_text(self.lattice_m)}"
        return f"coordinates recorded to {', '.join(clauses)}{metres}"

    def _area_lines(self) -> list[str]:
        return [
            f"{_count(self.parts, 'part')}, {_count(self.holes, 'hole')}, {self.vertices:,} vertices; area "
            f"{area_text(self.area_m2)}, perimeter {length_text(self.perimeter_m)}",
            f"{_count(self.polygons_read, 'polygon')} read and united; overlap {area_text(self.overlap_m2)}; "
            f"without area {self.flat_polygons:,}; features without geometry {self.area_null_geometries:,}, "
            f"other than polygons {self.area_other_geometries:,}",
            f"{_count(self.repaired_polygons, 'invalid polygon')} repaired"
            + (f", moving {percent(self.repair_change)} of the area" if self.repaired_polygons else ""),
        ]

    def _crs_lines(self) -> list[str]:
        if self.scale_error_distance is None or self.scale_error_area is None:
            scale = "scale not measured: a local plane has no curved ground to compare with"
        else:
            scale = (
                f"largest scale error over the study area: distances {percent(self.scale_error_distance)}, "
                f"areas {percent(self.scale_error_area)}"
            )
        turned = {True: "reprojected", False: "as recorded"}
        moved = f"points {turned[self.points_reprojected]}, study area {turned[self.area_reprojected]}"
        if self.vertices_added:
            moved += f" ({self.vertices_added:,} vertices added on edges that bend)"
        return [f"measured in {self.metric_crs}: {self.metric_crs_reason}", scale, moved]

    def _point_warnings(self) -> list[str]:
        found = []
        if self.points_outside > self.points_read / 2:
            found.append(
                f"more than half of the points ({self.points_outside:,} of {self.points_read:,}) lie outside "
                f"the study area, up to {length_text(self.furthest_outside_m)} away, and were dropped: is "
                "one of the layers the wrong one, or in the wrong CRS?"
            )
        elif self.points_outside:
            found.append(
                f"{self.points_outside:,} of {self.points_read:,} points lie outside the study area, up to "
                f"{length_text(self.furthest_outside_m)} away, and were dropped"
            )
        left_out = [
            (self.null_geometries, "without geometry"),
            (self.empty_geometries, "with an empty geometry"),
            (self.other_geometries, "with lines or polygons instead of points"),
        ]
        found += [f"{count:,} point features {what} were left out" for count, what in left_out if count]
        if self.nonfinite_points:
            found.append(
                f"{self.nonfinite_points:,} points were left out, as their coordinates are not finite or "
                "have no place in the metric CRS"
            )
        if self.coincident_points:
            found.append(
                f"{self.coincident_points:,} points share a place with another one "
                f"({self.coincident_places:,} places): recorded twice, or rounded? They "
                "were kept, and will look like tight clusters"
            )
        if self.lattice_m is not None and self.lattice_m > COARSE_LATTICE * self.median_nearest_m:
            found.append(
                f"coordinates are rounded to a lattice of {length_text(self.lattice_m)}, while the median "
                f"distance to the nearest neighbour is {length_text(self.median_nearest_m)}: distances of "
                "that size cannot be trusted"
            )
        return found

    def _area_warnings(self) -> list[str]:
        found = []
        if self.repaired_polygons:
            beyond = self.repair_change > REPAIR_LIMIT
            found.append(
                f"{self.repaired_polygons:,} invalid polygons of the study area were repaired, which moved "
                f"{percent(self.repair_change)} of its area"
                + (": the repair was asked for, but look at the result on a map" if beyond else "")
            )
        if self.overlap_m2:
            found.append(
                f"polygons of the study area overlap by {area_text(self.overlap_m2)} and were united: are "
                "there polygons too many?"
            )
        left_out = [
            (self.flat_polygons, "polygons without area"),
            (self.area_null_geometries, "features without geometry"),
            (self.area_other_geometries, "features with points or lines instead of polygons"),
        ]
        found += [f"{count:,} {what} of the study area were left out" for count, what in left_out if count]
        return found

    def _crs_warnings(self) -> list[str]:
        found = []
        distance, area = self.scale_error_distance, self.scale_error_area
        if distance is not None and area is not None and max(distance, area) > SCALE_LIMIT:
            found.append(
                f"no projection keeps scale within {percent(SCALE_LIMIT)} over a study area this large: in "
                f"{self.metric_crs}, the best one found, distances are wrong by up to {percent(distance)} "
                f"and areas by {percent(area)}"
            )
        if self.outside_area_of_use:
            found.append(
                f"the study area lies far outside the region that {self.area_source.crs} is made for: is "
                "this the CRS it was measured in?"
            )
        if self.datum_operation is not None:
            better = (
                "; a better one needs a grid of PROJ that is not installed" if self.datum_grid_missing else ""
            )
            if self.datum_accuracy_m is None:
                found.append(
                    "nobody has stated how accurate the change of datum between the layers is "
                    f"({self.datum_operation}): they may not fit by many metres{better}"
                )
            elif self.datum_accuracy_m > DATUM_ACCURACY:
                found.append(
                    f"the change of datum between the layers ({self.datum_operation}) is accurate to "
                    f"{self.datum_accuracy_m:g} m only{better}"
                )
        return found


def length_text(metres: float) -> str:
    """A length in the unit that reads best.

    Examples
    --------
    >>> length_text(2912.4), length_text(31.0), length_text(0.009)
    ('2.91 km', '31 m', '9 mm')
    """
    if metres >= 1000:
        return f"{metres / 1000:,.3g} km" if metres < 1e6 else f"{metres / 1000:,.0f} km"
    if metres == 0 or metres >= 0.1:
        return f"{metres:.3g} m"
    return f"{metres * 1000:.3g} mm" if metres >= 1e-6 else f"{metres * 1e6:.2g} µm"


def area_text(square_metres: float) -> str:
    """An area in hectares, or in square metres if it is small."""
    if square_metres == 0 or square_metres >= 1000:
        hectares = square_metres / 1e4
        return f"{hectares:,.0f} ha" if hectares >= 1000 else f"{hectares:.4g} ha"
    return f"{square_metres:.3g} m²"


def percent(share: float) -> str:
    """A share in per cent with two digits that count."""
    if 0 < share < 1e-6:
        return "below 0.0001 %"
    return f"{100 * share:.2g} %" if share < 1 else f"{100 * share:.0f} %"


def spacing_text(spacing: float, unit: str) -> str:
    """A spacing with its unit; degrees in minutes or seconds where that is the round number.

    Examples
    --------
    >>> spacing_text(0.001, "metre"), spacing_text(1 / 3600, "degree"), spacing_text(1e-5, "degree")
    ('0.001 metre', '1 second of arc', '0.00001 degree')
    """
    choices = [(unit, 1.0)]
    if unit == "degree":
        choices += [("minute of arc", 60.0), ("second of arc", 3600.0)]
    for name, factor in choices:
        value = spacing * factor
        if abs(value - float(f"{value:.2g}")) <= 1e-6 * value:
            return f"{_plain(float(f'{value:.2g}'))} {name}"
    return f"{_plain(spacing)} {unit}"


def _count(number: int, noun: str) -> str:
    return f"{number:,} {noun}" if number == 1 else f"{number:,} {noun}s"


def _plain(value: float) -> str:
    text = f"{value:.6g}"
    return f"{value:.12f}".rstrip("0") if "e-" in text and value >= 1e-9 else text


def _source(record: LayerRecord) -> str:
    place = f"{record.file}, layer '{record.layer}'" if record.layer is not None else record.file
    stated = ", as stated" if record.crs_stated else ""
    digest = f", sha256 {record.sha256[:12]}…" if record.sha256 else ""
    return f"{place} ({record.driver}): {_count(record.features, 'feature')} in {record.crs}{stated}{digest}"


def _indented(lines: list[str]) -> list[str]:
    return [f"  {line}" for line in lines]
