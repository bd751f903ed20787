"""The page: self-contained, accessible, honest, with the right figures in the right units."""

from __future__ import annotations

import base64
import dataclasses
import re
from html.parser import HTMLParser
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from example_models import example as example_model

from geoclust.fitting.status import REASONS
from geoclust.models.catalogue import MODELS
from geoclust.report import answer, method
from geoclust.report.page import write_page
from geoclust.workflow import FILES

VOID = {"meta", "link", "img", "br", "hr", "input", "col"}


class Parsed(HTMLParser):
    """Elements with their attributes; complains if tags do not nest."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if "style" not in self.open:
            self.text += data

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.elements if name == tag]

    @property
    def plain(self) -> str:
        return re.sub(r"\s+", " ", self.text.replace("\u00a0", " "))


def page_of(folder: Path, example, **changes) -> str:
    given = {
        "survey": example.survey,
        "audit": example.survey.audit,
        "envelopes": example.envelopes,
        "fit": example.fit,
        "status": "ok",
        "reason": "",
        "centres": example.centres,
        "choices": {"edge_weight": "isotropic", "simulations": 39, "seed": 123456},
        "versions": {"geoclust": "0.1.0"},
        "command": "geoclust analyse a.gpkg b.gpkg --out results",
        "title": "Ant wood",
        "files": FILES,
    }
    write_page(folder / "page.html", **{**given, **changes})
    return (folder / "page.html").read_text(encoding="utf-8")


def cannot_tell(example, status: str = "flat-valley"):
    reason = "Very different values fit almost equally well."
    fit = dataclasses.replace(example.fit, status=status, reason=reason)
    return {"fit": fit, "status": status, "reason": reason, "centres": None}


@pytest.fixture(scope="module")
def text(example, tmp_path_factory) -> str:
    return page_of(tmp_path_factory.mktemp("page"), example)


@pytest.fixture(scope="module")
def untold(example, tmp_path_factory) -> str:
    return page_of(tmp_path_factory.mktemp("page"), example, **cannot_tell(example))


def outside_references(text: str) -> list[str]:
    """Everything in a page that makes a browser fetch something."""
    parsed = Parsed(text)
    found = [tag for tag, _ in parsed.elements if tag in {"script", "iframe", "object", "embed", "base"}]
    for _, attributes in parsed.elements:
        for name in ("src", "href", "srcset", "action", "poster", "data"):
            value = attributes.get(name)
            if value and not value.startswith(("#", "data:")):
                found.append(value)
    found += re.findall(r"@import[^;]*|url\([^)]*\)", text)
    for image in parsed.all("img"):
        picture = base64.b64decode(str(image["src"]).split(",", 1)[1]).decode()
        links = re.findall(r'(?:xlink:)?href="([^"]*)"', picture)
        found += [link for link in links if not link.startswith(("#", "data:image/png;base64,"))]
        found += [u for u in re.findall(r"url\(([^)]*)\)", picture) if not u.startswith("#")]
        found += re.findall(r"<script|<foreignObject|@import", picture)
    return found


def test_no_request_leaves_the_page(text, untold):
    assert outside_references(text) == []
    assert outside_references(untold) == []
    policy = next(m["content"] for m in Parsed(text).all("meta") if "http-equiv" in m)
    assert "default-src 'none'" in str(policy)


@pytest.mark.parametrize(
    "bad",
    [
        '<img alt="x" src="https://example.org/x.png">',
        "<script>1</script>",
        "<style>@import 'x.css';</style>",
        '<link href="x.css">',
    ],
)
def test_the_check_for_requests_finds_them(bad):
    assert outside_references(
        bad.replace('<img alt="x" src="https', '<a href="https').replace('png">', 'png"></a>')
    )


def test_page_is_accessible(text, untold):
    for page in (text, untold):
        parsed = Parsed(page)
        assert parsed.all("html")[0]["lang"] == "en"
        assert all(len(str(image["alt"])) > 20 for image in parsed.all("img"))
        assert all(header.get("scope") in ("row", "col") for header in parsed.all("th"))
        identities = [a["id"] for _, a in parsed.elements if a.get("id")]
        assert len(identities) == len(set(identities))
        targets = {str(a["href"])[1:] for a in parsed.all("a")}
        assert targets <= set(identities)
        order = [int(tag[1]) for tag, _ in parsed.elements if re.fullmatch(r"h[1-6]", tag)]
        assert order[0] == 1
        assert order.count(1) == 1
        assert max(np.diff(order)) <= 2


def luminance(colour: str) -> float:
    """Relative luminance, Web Content Accessibility Guidelines 2.1 (w3.org/TR/WCAG21, from memory)."""
    parts = np.array([int(colour[k : k + 2], 16) / 255 for k in (1, 3, 5)])
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def test_type_stands_out_from_its_ground():
    style = (files("geoclust.report") / "templates" / "style.css").read_text()
    colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", style))
    for ink in ("ink", "soft", "teal", "deep"):
        for ground in ("paper", "sheet", "pale"):
            light, dark = luminance(colours[ground]), luminance(colours[ink])
            # level AA for text of normal size
            assert (light + 0.05) / (dark + 0.05) >= 4.5, (ink, ground)


def test_answer_has_the_figures_in_units_of_people(text, example):
    plain = Parsed(text).plain
    fit = example.fit
    sigma, low, high = fit.parameters["sigma"], *fit.intervals["sigma"]
    # Gaussian per axis: half within 1.1774 sigma, 95 % within 2.4477 sigma (common practice)
    for factor, told in ((1.1774, "points lie within"), (2.4477, "and 95 % within")):
        shown = re.search(rf"{told} ([\d.]+) m[^(]*\(95 % interval ([\d.]+) to ([\d.]+) m\)", plain)
        assert shown is not None
        expected = factor * np.array([sigma, low, high])
        assert np.array(shown.groups(), float) == pytest.approx(expected, abs=0.051)
    assert f"{fit.parameters['parent_intensity'] * 1e4:.3f} cluster centres per hectare" in plain
    mean, low, high = example.centres.interval_inside()
    assert f"{mean:.0f} centres (95 % interval {low:.0f} to {high:.0f}" in plain
    assert f"p = {example.envelopes['L'].p_value:.2g}" in plain
    assert "an estimate, not a clearance" in plain
    assert "sensitive" in plain


def test_unwalked_part_and_zones_are_told(text, example):
    plain = Parsed(text).plain
    row = example.centres.unsurveyed.iloc[0]
    assert f"{row['points_mean']:.0f} points (95 % interval {row['points_low']:.0f}" in plain
    for name in example.centres.zones["name"]:
        assert name in plain


def test_everything_that_was_chosen_is_told(text, example):
    plain = Parsed(text).plain
    audit = example.survey.audit
    for expected in ("123456", audit.points_source.sha256, "geoclust analyse a.gpkg", "0.1.0",
                     "Diggle & Gratton 1984", audit.metric_crs, "812", "1.0040"):  # fmt: skip
        assert expected in plain
    for line in audit.lines():
        assert line.strip() in plain
    for name, _ in FILES:
        assert name in plain


def test_no_map_pretends_when_the_data_cannot_tell(untold, text):
    parsed = Parsed(untold)
    assert "The data cannot tell" in parsed.plain
    assert "Very different values fit almost equally well." in parsed.plain
    assert "What you can do" in parsed.plain
    told = " ".join(str(image["alt"]) for image in parsed.all("img"))
    assert "centres per hectare; about" not in told
    assert "clusters" not in told
    assert "not to be used" in parsed.plain
    # the same page with an answer does show them
    assert "clusters" in " ".join(str(image["alt"]) for image in Parsed(text).all("img"))


def test_centres_are_left_out_if_the_status_is_not_ok(example, tmp_path):
    changes = cannot_tell(example) | {"centres": example.centres}
    parsed = Parsed(page_of(tmp_path, example, **changes))
    assert "Map of expected" not in " ".join(str(image["alt"]) for image in parsed.all("img"))


def test_page_without_any_fit(example, tmp_path):
    reason = "The survey holds 3 points."
    parsed = Parsed(page_of(tmp_path, example, fit=None, centres=None, envelopes=None,
                            status="too-few-points", reason=reason, command=None))  # fmt: skip
    assert reason in parsed.plain
    assert len(parsed.all("img")) == 1


def test_runs_that_do_not_agree_are_told_first(example, tmp_path):
    weak = dataclasses.replace(example.centres, converged=False, r_hat=1.08, effective_sample_size=55.0)
    plain = Parsed(page_of(tmp_path, example, centres=weak)).plain
    assert plain.index("Not settled") < plain.index("Are the points clustered?")
    assert "1.080" in plain
    assert "do not agree yet" in plain


def test_texts_of_users_stay_texts(example, tmp_path):
    zones = example.centres.zones.copy()
    zones["name"] = ["<b>a</b>", "$x_{", "5 < 6 & 7", "** bold **", "plain"]
    odd = dataclasses.replace(example.centres, zones=zones)
    text = page_of(tmp_path, example, title="<script>alert(1)</script>", centres=odd)
    assert outside_references(text) == []
    plain = Parsed(text).plain
    assert "<script>alert(1)</script>" in plain
    assert "<b>a</b>" in plain
    assert "$x_{" in plain


def test_same_results_same_page(text, example, tmp_path):
    assert page_of(tmp_path, example) == text


@pytest.mark.parametrize("status", REASONS)
def test_every_reason_has_its_advice(status, example):
    assert status in answer.ADVICE
    reply = answer.compose(
        survey=example.survey, envelopes=example.envelopes, fit=None, status=status, reason="Because.",
        centres=None,
    )  # fmt: skip
    assert reply.advice == answer.ADVICE[status]
    assert reply.tiles == []


def test_every_source_has_its_reference(example):
    taken = method.steps(example.fit, True)
    found = method.references(taken)
    for piece in "; ".join(step.source for step in taken).split(";"):
        name, year = re.findall(r"([\w\- ]+?)(?: et al\.)?,? (?:&.*)?(\d{4})", piece.strip())[0]
        assert any(name.strip().split(" &")[0] in reference and year in reference for reference in found), (
            piece
        )
    assert len(found) == len(set(found))


def test_every_model_is_explained(example):
    for name, kind in MODELS.items():
        model = example_model(kind)
        taken = method.steps(dataclasses.replace(example.fit, model=model, intervals={}), True)
        assert any(name in step.name.replace(" ", "-") and step.formulas for step in taken)
        year = re.findall(r"\d{4}", kind.source)[0]
        assert any(year in reference for reference in method.references(taken))


def test_half_of_the_centres_lie_on_the_share_that_is_told(example):
    share = answer.share_holding_half(example.centres)
    inside = example.centres.cell_areas > 0
    order = np.argsort(-example.centres.mean[inside])
    area = example.centres.cell_areas[inside][order]
    held = np.cumsum(example.centres.mean[inside][order] * area)
    cells = np.count_nonzero(held < held[-1] / 2) + 1
    assert share == pytest.approx(area[:cells].sum() / area.sum())
    # more than the clusters' share of one half would be no concentration at all
    assert share < 0.5


def test_more_neighbours_than_the_fit_explains(example):
    """The mounds were drawn with groups of clusters, 60 m wide, which one level of clusters leaves over."""
    stretch = answer.more_than_fitted(example.envelopes["g"], example.fit)
    assert stretch is not None
    assert 30 < stretch[0] < 120
    # a curve that is the model's own leaves nothing over
    test = example.envelopes["g"]
    own = dataclasses.replace(test.curve, values=example.fit.model.pair_correlation(test.curve.radii))
    assert answer.more_than_fitted(dataclasses.replace(test, curve=own), example.fit) is None
