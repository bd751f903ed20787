"""Figures: what is drawn is what was computed, in the colours of the layers, and small enough for a page."""

from __future__ import annotations

import dataclasses
import doctest
import re
import threading

import matplotlib
import numpy as np
import pytest
import shapely
from pyproj import CRS, Transformer

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import OutputError, UsageError
from geoclust.layers import styles
from geoclust.layers.raster import grid_over
from geoclust.report import canvas, figures, maps, words


def test_numbers_in_words():
    failed, tried = doctest.testmod(words)
    assert tried >= 10
    assert failed == 0


def test_colours_are_those_of_the_layers():
    sheets = "".join(styles.vector_styles().values())
    for colour in (canvas.INK, canvas.CLUSTER, canvas.UNSURE, canvas.BACKGROUND):
        assert colour in sheets
    assert matplotlib.colors.to_hex(canvas.RAMP_COLOURS(0.0)) == styles.RAMP[0]
    assert matplotlib.colors.to_hex(canvas.RAMP_COLOURS(1.0)) == styles.RAMP[-1]


def test_ramp_reads_in_grey():
    grey = [canvas.RAMP_COLOURS(k / 50)[:3] @ np.array([0.299, 0.587, 0.114]) for k in range(51)]
    assert (np.diff(grey) < 0).all()


def test_breaks_are_spread_evenly_over_the_ramp():
    places = canvas.ramp_places([0.0, 1.0, 2.0, 3.0, 10.0, 99.0, np.nan], np.array([1.0, 3.0, 10.0]))
    assert places[:6] == pytest.approx([0.0, 0.0, 0.25, 0.5, 1.0, 1.0])
    assert np.isnan(places[6])
    assert list(canvas.ramp_places([0.0, 1.0], np.array([0.0]))) == [0.0, 1.0]


def every_figure(example):
    zones = example.centres.zones
    return [
        maps.survey_map(example.survey, zones=zones, unsurveyed=example.centres.unsurveyed),
        maps.centre_map(example.centres, example.survey),
        maps.probability_map(example.centres, example.survey),
        maps.clusters_map(example.centres, example.survey),
        figures.curve_figure(example.envelopes["L"], fit=example.fit),
        figures.curve_figure(example.envelopes["g"]),
        figures.contrast_figure(example.fit),
        figures.number_figure(example.centres),
        figures.zones_figure(zones, list(zones["name"])),
    ]


def test_drawing_leaves_no_traces(example):
    import matplotlib.pyplot as plt

    before = dict(matplotlib.rcParams)
    for figure in every_figure(example):
        assert len(canvas.svg_text(figure)) < 600_000
    assert dict(matplotlib.rcParams) == before
    assert plt.get_fignums() == []


def test_map_has_one_scale_in_both_directions(example):
    figure = maps.survey_map(example.survey)
    box = figure.axes[0]
    width, height = (box.get_position().width * figure.get_size_inches()[0],
                     box.get_position().height * figure.get_size_inches()[1])  # fmt: skip
    (west, east), (south, north) = box.get_xlim(), box.get_ylim()
    assert (east - west) / width == pytest.approx((north - south) / height)
    a, b, c, d = example.survey.area.bounds
    assert west < a < c < east
    assert south < b < d < north


def test_scale_bar_is_as_long_as_it_says(example):
    figure = maps.survey_map(example.survey)
    strip = figure.axes[1]
    halves = [patch.get_width() for patch in strip.patches[:2]]
    said = float(re.match(r"([\d.]+)", strip.texts[2].get_text())[1])
    box = figure.axes[0]
    per_inch = np.ptp(box.get_xlim()) / (box.get_position().width * figure.get_size_inches()[0])
    assert sum(halves) * per_inch == pytest.approx(said * (1000 if "km" in strip.texts[2].get_text() else 1))
    assert strip.texts[-1].get_text() == "N"


def tall_survey(n: int) -> Survey:
    area = StudyArea(shapely.box(500_000, 5_600_000, 500_100, 5_600_900), CRS("EPSG:25832"))
    return Survey(area.uniform_points(n, 1), area)


def test_tall_and_small_areas_fit_on_a_sheet():
    width, height = maps.survey_map(tall_survey(20)).get_size_inches()
    assert height < 1.5 * width


def test_many_points_become_pixels():
    few, many = (canvas.svg_text(maps.survey_map(tall_survey(n))) for n in (4_000, 30_000))
    assert "<image" not in few
    assert "<image" in many
    assert len(many) < 1.5 * len(few)


def test_template_in_another_system_is_drawn_where_it_lies(example):
    """Longitude and latitude: the cell under each point of the map has that cell's colour."""
    to_degrees = Transformer.from_crs(example.survey.area.crs, "OGC:CRS84", always_xy=True)
    west, south, east, north = example.survey.area.bounds
    lon, lat = to_degrees.transform([west, west, east, east], [south, north, south, north])
    grid = grid_over((min(lon), min(lat), max(lon), max(lat)), 0.002, CRS("OGC:CRS84"))
    values = np.random.default_rng(2).uniform(size=grid.shape)
    there = dataclasses.replace(example.centres, grid=grid, mean=values, cell_areas=np.ones(grid.shape))
    limits = (west, east), (south, north)
    seen = maps._seen_from(example.survey.area.crs, limits, there, values)
    step = (east - west) / 800
    x, y = west + 300.5 * step, north - 200.5 * step
    lon, lat = to_degrees.transform(x, y)
    row, column, _ = grid.cells_of(np.array([[lon, lat]]))
    assert seen[200, 300] == values[row[0], column[0]]
    canvas.svg_text(maps.centre_map(there, example.survey))


def test_best_fit_lies_in_the_valley(example):
    rho, scales, ratio = figures._ratio(example.fit.surface, np.empty((0, 2)))
    a = np.abs(np.log(rho / (example.fit.parameters["parent_intensity"] * 1e4))).argmin()
    b = np.abs(np.log(scales / example.fit.parameters["sigma"])).argmin()
    assert ratio.min() >= 1
    assert ratio[a, b] < 1.05


def test_fit_without_surface_has_no_such_figure(example):
    assert figures.contrast_figure(dataclasses.replace(example.fit, surface=None)) is None


def test_one_sided_envelope_is_drawn(example):
    test = example.envelopes["L"]
    open_below = dataclasses.replace(test.curve, lower=np.full_like(test.curve.radii, -np.inf))
    figure = figures.curve_figure(dataclasses.replace(test, curve=open_below))
    assert np.isfinite(figure.axes[0].get_ylim()).all()


def test_figures_become_files_all_or_none(example, tmp_path):
    drawn = {
        "L.svg": figures.curve_figure(example.envelopes["L"]),
        "g.png": figures.curve_figure(example.envelopes["g"]),
    }
    canvas.save_figures(drawn, tmp_path / "out")
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["L.svg", "g.png"]
    assert (tmp_path / "out" / "g.png").read_bytes().startswith(b"\x89PNG")
    with pytest.raises(OutputError):
        canvas.save_figures(drawn, tmp_path / "out")
    canvas.save_figures(drawn, tmp_path / "out", overwrite=True)
    with pytest.raises(UsageError):
        canvas.save_figures({"L.docx": drawn["L.svg"]}, tmp_path / "other")
    assert not (tmp_path / "other").exists()


def test_names_are_no_formulas(example):
    zones = example.centres.zones
    text = canvas.svg_text(figures.zones_figure(zones, ["$x_{", "a & b", "<c>", "d", "e"]))
    assert "$x_{" in text
    assert "a &amp; b" in text


def test_drawing_in_threads_gives_the_same(example):
    alone = canvas.svg_text(figures.number_figure(example.centres))
    found: list[str] = []
    thread = threading.Thread(
        target=lambda: found.append(canvas.svg_text(figures.number_figure(example.centres)))
    )
    thread.start()
    thread.join()
    assert found == [alone]
