"""The report page and the model card say what must be said, and nothing from elsewhere."""

from __future__ import annotations

import copy
import json
from html.parser import HTMLParser

import pytest

from learnclosure.report.cautions import CAUTIONS
from learnclosure.report.model_card import render_model_card
from learnclosure.report.summary import findings
from learnclosure.report.tables import layers

VOID = {"meta", "img", "br", "hr", "link", "input"}


class Outline(HTMLParser):
    """Collects anchors, sources, pictures without words, and tags left open."""

    def __init__(self):
        super().__init__()
        self.open, self.anchors, self.links, self.sources, self.silent = [], set(), set(), [], 0

    def handle_starttag(self, tag, attrs):
        """Note what a tag brings."""
        found = dict(attrs)
        if tag not in VOID:
            self.open.append(tag)
        if "id" in found:
            self.anchors.add(found["id"])
        if tag == "a":
            self.links.add(found["href"])
        if "src" in found:
            self.sources.append(found["src"])
        if tag == "img" and not found.get("alt"):
            self.silent += 1

    def handle_endtag(self, tag):
        """Refuse a tag that closes another."""
        assert self.open.pop() == tag


@pytest.fixture(scope="module")
def evaluation(finished):
    return json.loads((finished / "results" / "evaluation.json").read_text())


@pytest.fixture(scope="module")
def page(finished):
    return (finished / "results" / "report.html").read_text(encoding="utf-8")


def test_the_page_is_whole_and_loads_nothing_from_elsewhere(page):
    outline = Outline()
    outline.feed(page)
    assert outline.open == []
    assert outline.silent == 0
    assert len(outline.sources) >= 8
    assert all(source.startswith("data:image/png;base64,") for source in outline.sources)
    assert {link.removeprefix("#") for link in outline.links} <= outline.anchors
    assert "http" not in page


def test_the_page_shows_scores_ceiling_audit_and_every_caution(page, evaluation):
    for family, record in evaluation["families"].items():
        assert family in page
        assert layers(record["regions"]["west"]["scores"]["flux_r2"]) in page
    assert layers(evaluation["ceiling"]["west"]["flux_r2"]) in page
    assert "tensor of an independent half" in page
    for check in evaluation["audit"]["mean-field"]:
        assert check["check"] in page
    for text in CAUTIONS:
        assert text.replace("'", "&#39;") in page


def test_a_closure_that_loses_to_a_baseline_is_said_to(evaluation):
    worse = copy.deepcopy(evaluation)
    worse["families"]["mean-field"]["regions"]["west"]["scores"]["flux_r2"] = [-9.0, -9.0]
    text = " ".join(findings(worse))
    assert "it does not beat" in text
    better = copy.deepcopy(evaluation)
    for record in better["families"].values():
        record["regions"]["west"]["scores"]["flux_r2"] = [0.99, 0.99]
    text = " ".join(findings(better))
    assert "it does not beat" not in text
    assert "more than each baseline" in text


def test_a_failed_audit_is_told_first(evaluation):
    broken = copy.deepcopy(evaluation)
    broken["audit"]["mean-field"][0]["passed"] = False
    assert any("Do not ship" in sentence for sentence in findings(broken))
    assert not any("Do not ship" in sentence for sentence in findings(evaluation))


def test_without_a_held_out_region_the_page_says_so(evaluation):
    alone = copy.deepcopy(evaluation)
    for record in alone["families"].values():
        del record["regions"]["west"]
    assert "No region was held out" in findings(alone)[0]


def test_of_many_layers_the_ends_and_the_mean_are_written():
    assert layers([0.1, 0.2]) == "0.10 / 0.20"
    assert layers([0.0, 0.5, None, 1.0]) == "0.00 … 1.00, mean 0.50"


def test_the_model_card_holds_regime_scores_audit_and_cautions(finished):
    bundle = finished / "results" / "bundle" / "local-energy"
    card = (bundle / "MODEL_CARD.md").read_text(encoding="utf-8")
    manifest = json.loads((bundle / "manifest.json").read_text())
    for row in manifest["inputs"]:
        assert f"`{row['name']}`" in card
    for region in manifest["training"]["regions"]:
        assert region["name"] in card
    for text in CAUTIONS:
        assert text in card
    assert "modelling centre's own validation" in card
    assert "## Not for" in card
    assert manifest["licence"] in card
    assert manifest["citation"] in card
    regime = card.partition("## Regime")[2].partition("##")[0]
    assert "Coriolis parameter" in regime
    assert "deformation radius" in regime


def test_a_card_without_scores_still_warns():
    card = render_model_card({"name": "bare", "family": "mean-field"})
    assert "# bare" in card
    assert CAUTIONS[0] in card
