"""The training review page: what review.json says, in the report's look, whatever classes are called."""

from __future__ import annotations

import copy
import html
import re

import pytest

from classify.errors import DataError
from classify.report import write_review

NAME = "<b>Grass</b> & =1+1"


def review() -> dict:
    """Two classes, three bands, one suspect; layout as the training stage writes it."""

    def signature(level):
        return {
            "mean": [level, level * 2, level * 3], "sd": [0.01] * 3,
            "low": [level * 0.8, level * 1.8, level * 2.8], "high": [level * 1.2, level * 2.2, level * 3.2],
        }  # fmt: skip

    def one(code, name, level):
        return {
            "code": code, "name": name, "colour": "#44aa99", "material": "dry plants", "polygons": 3, "pixels": 120,
            "area_m2": 12_345.0, "clear_share": 0.5, "signature": signature(level),
        }  # fmt: skip

    polygon = {"polygon": 7, "code": 1, "class_name": NAME, "mean": [0.1, 0.2, 0.3]}
    check = {"name": "red edge", "value": 1.2345, "above": 2.0, "below": None, "met": False, "sentence": "too flat"}
    pair = {
        "a": 1, "b": 2, "jeffries_matusita": 1.234, "transformed_divergence": 1.9, "verdict": "fair",
        "best_features": [{"feature": "nir", "jeffries_matusita": 0.9}], "advice": "Add a band.",
    }  # fmt: skip
    point = {"polygons": 2.0, "mean": 0.7, "low": 0.6, "high": 0.8}
    return {
        "schema": 1, "title": "A <i>review</i>", "meaning": "It says nothing about the accuracy of a map.",
        "bands": [{"role": r, "wavelength_nm": w} for r, w in (("green", 560.0), ("red", 665.0), ("nir", 842.0))],
        "classes": [one(1, NAME, 0.1), one(2, "Water", 0.02)], "polygons": [polygon], "conflicts": [],
        "separability": {"scale": "0..1.414", "pairs": [pair]},
        "materials": [{"polygon": 7, "class_name": NAME, "material": "dry plants", "met": False, "checks": [check]}],
        "suspects": [{"rank": 1, "polygon": 7, "code": 1, "class_name": NAME, "score": 0.91, "looks_like": "Water",
                      "reasons": ["held out"], "sentence": "It looks like water."}],
        "screening": None,
        "learning_curve": {"classes": [{"code": 1, "name": NAME, "points": [point, {**point, "polygons": 4.0}]}],
                           "overall": [], "sentence": "More would help.", "advice": ["Draw more."]},
        "problems": [{"what": "a finding", "where": "polygons", "fix": "mend it", "severity": "warning"}],
    }  # fmt: skip


def cells(page: str, table: str) -> list[str]:
    body = re.search(rf'<table id="table-{table}".*?<tbody>(.*?)</tbody>', page, re.S).group(1)
    return [
        html.unescape(re.sub(r"<[^>]*>", "", c)).strip() for c in re.findall(r"<t[dh][^>]*>(.*?)</t[dh]>", body, re.S)
    ]


def test_page_says_what_the_review_says(tmp_path):
    page = write_review(review(), tmp_path).read_text("utf-8")
    assert cells(page, "suspects") == ["7", NAME, "Water", "0.91", "It looks like water."]
    assert "exclude = [7]" in page
    assert cells(page, "balance")[:6] == [NAME, "dry plants", "3", "120", "1.23", "50"]
    assert cells(page, "separability")[:4] == [NAME, "Water", "1.23", "1.90"]
    assert cells(page, "materials") == ["7", NAME, "dry plants", "1.234", "too flat"]
    assert len(re.findall(r'<figure id="figure-(spectra|signatures|learning)"', page)) == 3
    assert "screening accuracy" in page and "<b>Grass" not in page and "<i>review" not in page


def test_unknown_wavelengths_and_empty_classes_are_drawn_by_band(tmp_path):
    content = review()
    for band in content["bands"]:
        band["wavelength_nm"] = None
    content["classes"][1]["signature"] = None
    content["suspects"], content["learning_curve"] = [], None
    page = write_review(content, tmp_path).read_text("utf-8")
    assert ">green</text>" in page and ">nm</text>" not in page
    assert "No training polygon stands out" in page


def test_a_review_that_lacks_something_is_one_message(tmp_path):
    content = copy.deepcopy(review())
    del content["separability"]
    with pytest.raises(DataError, match="the review cannot be read: KeyError"):
        write_review(content, tmp_path)
    assert not (tmp_path / "review.html").exists()
