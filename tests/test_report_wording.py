"""Words follow the evidence; what is missing is named; settings and bad input are answered in plain words."""

from __future__ import annotations

import dataclasses
import re
import tomllib
from pathlib import Path

import pytest
from report_projects import change_project, screening_project

import classify.report.messages as messages_module
from classify.assessment.evidence import EVIDENCE
from classify.errors import DataError, SettingsError
from classify.files import read_json, write_json
from classify.report import gather_facts, write_report
from classify.report.content import write_document
from classify.report.document import Figure, Listing, Paragraph, Table
from classify.report.html import render_html
from classify.report.messages import languages, load_messages
from classify.settings import load_project


def texts(document, keys=None) -> str:
    """All running text of a document, or of some sections."""
    found = []
    for section in document.sections:
        if keys is not None and section.key not in keys:
            continue
        for block in section.blocks:
            if isinstance(block, Paragraph):
                found.append("".join(span.text for span in block.text))
            elif isinstance(block, Listing):
                found += ["".join(span.text for span in item) for item in block.items]
            elif isinstance(block, Table):
                found += [block.title, block.note]
            elif isinstance(block, Figure):
                found.append(block.caption)
    return "\n".join(found)


def with_settings(folder: Path, lines: str):
    """The project of a folder with more lines under [report]."""
    file = folder / "project.toml"
    file.write_text(file.read_text("utf-8") + lines, encoding="utf-8")
    return load_project(folder)


def test_without_a_sample_page_one_says_screening_and_claims_no_accuracy(tmp_path):
    document = write_document(gather_facts(screening_project(tmp_path), tmp_path / "outputs"))
    assert document.kind == "Screening report"
    first = document.sections[0]
    assert first.evidence == "training"
    answer = texts(document, ["answer"])
    assert "This is a screening." in answer
    assert "confidence interval" not in answer and "±" not in answer
    assert {"accuracy", "matrix", "agreement", "confusion"}.isdisjoint(section.key for section in document.sections)


def test_places_that_were_chosen_get_no_interval_and_no_claim_for_the_map(tmp_path):
    project = change_project(tmp_path)
    path = tmp_path / "outputs" / "assessment" / "assessment.json"
    content = read_json(path)
    content["evidence"] = "purposive sample"
    for key in ("users_accuracy", "producers_accuracy", "f1", "area"):
        for estimate in content[key].values():
            estimate.update(standard_error=None, lower=None, upper=None, interval=None)
    content["overall_accuracy"].update(standard_error=None, lower=None, upper=None, interval=None)
    write_json(path, content)
    document = write_document(gather_facts(project, tmp_path / "outputs"))
    assert document.kind == "Agreement report"
    answer = texts(document, ["answer"])
    assert "not an accuracy of the map" in answer
    assert "±" not in answer and "most likely lies between" not in answer
    assert "Use the estimated areas" not in texts(document)


def test_claims_are_those_of_the_levels_of_evidence():
    words = load_messages("en")
    for name, key in (("probability sample", "probability"), ("purposive sample", "purposive")):
        assert words.text(f"method.claim_{key}") == EVIDENCE[name].claim
    assert words.text("method.claim_training") == EVIDENCE["held-out training polygons"].claim
    assert words.text("cautions.sample") == EVIDENCE["probability sample"].caution
    assert words.text("cautions.purposive") == EVIDENCE["purposive sample"].caution


def test_training_evidence_is_never_called_map_accuracy(tmp_path):
    document = write_document(gather_facts(change_project(tmp_path), tmp_path / "outputs"))
    section = next(s for s in document.sections if s.key == "training")
    assert section.evidence == "training"
    for sentence in re.split(r"(?<=[.:])\s", texts(document, ["training"])):
        if "accuracy" in sentence:
            assert "screening accuracy" in sentence.casefold() or "not the accuracy" in sentence


@pytest.mark.parametrize("lost", ["model/model.json", "map/cover.tif", "assessment/assessment.json", "run.json"])
def test_a_missing_stage_is_named_and_the_rest_is_reported(tmp_path, lost):
    project, outputs = change_project(tmp_path), tmp_path / "outputs"
    (outputs / lost).unlink()
    facts = gather_facts(project, outputs)
    document = write_document(facts)
    assert document.title in render_html(document, facts)
    answer = texts(document, ["answer"])
    stage = {"model": "train", "map": "classify", "assessment": "assess"}.get(lost.partition("/")[0])
    if stage is not None:
        assert load_messages("en").text(f"stage.{stage}") in answer


def test_warnings_of_every_stage_appear_once(tmp_path):
    facts = gather_facts(change_project(tmp_path), tmp_path / "outputs")
    facts = dataclasses.replace(facts, warnings=(*facts.warnings, *facts.warnings))
    cautions = texts(write_document(facts), ["cautions"])
    assert cautions.count("band red has 3 % no data") == 1
    assert "local rules and licensed practitioners decide" in cautions


@pytest.mark.parametrize("language", [name for name in languages() if name != "en"])
def test_every_language_has_the_same_sentences_with_the_same_places(language):
    folder = Path(messages_module.__file__).parent / "messages"

    def leaves(part, path=""):
        for key, value in part.items():
            if isinstance(value, dict) and f"{path}{key}" != "glossary.terms":
                yield from leaves(value, f"{path}{key}.")
            elif isinstance(value, str):
                yield f"{path}{key}", sorted(re.findall(r"\{\w+\}", value))
            else:
                yield f"{path}{key}", len(value)

    english, other = (dict(leaves(tomllib.loads((folder / f"{n}.toml").read_text("utf-8")))) for n in ("en", language))
    assert english == other


def test_another_language_changes_words_and_decimals_not_numbers(tmp_path):
    change_project(tmp_path)
    project = with_settings(tmp_path, 'language = "es"\n')
    outputs = tmp_path / "outputs"
    write_report(gather_facts(project, outputs), outputs / "report")
    page = (outputs / "report" / "report.html").read_text("utf-8")
    assert '<html lang="es"' in page
    assert "Si se visitara cada lugar del mapa" in page
    assert ">88,0</td>" in page and ">88.0</td>" not in page


def test_an_unknown_language_or_section_names_the_valid_ones(tmp_path):
    change_project(tmp_path)
    project = with_settings(tmp_path, 'language = "xx"\n')
    with pytest.raises(SettingsError, match="en, es"):
        write_document(gather_facts(project, tmp_path / "outputs"))
    facts = dataclasses.replace(gather_facts(project, tmp_path / "outputs"), language="en", sections=("maps",))
    with pytest.raises(SettingsError, match="sections are answer, map"):
        write_document(facts)


def test_chosen_sections_keep_answer_and_cautions(tmp_path):
    facts = gather_facts(change_project(tmp_path), tmp_path / "outputs")
    document = write_document(dataclasses.replace(facts, sections=("matrix",)))
    assert [section.key for section in document.sections] == ["answer", "matrix", "cautions"]


def test_a_logo_that_is_no_picture_is_refused_and_nothing_is_written(tmp_path):
    change_project(tmp_path)
    (tmp_path / "logo.png").write_text("not a picture")
    project = with_settings(tmp_path, 'logo = "logo.png"\n')
    with pytest.raises(DataError, match=r"logo\.png: the logo is not a picture"):
        gather_facts(project, tmp_path / "outputs")
    assert not (tmp_path / "outputs" / "report").exists()
