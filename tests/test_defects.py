"""The validator catches every mistake that is made on purpose, in the macros or in the tables."""

from __future__ import annotations

import re

import pytest
from defects import CAUGHT
from defects.cases import MODELS
from defects.defects import DEFECTS, TAMPERINGS, Tampering
from defects.project import Defect, Proof
from harness import ROOT
from spellcurve.check import AGREES, DISAGREES, STALE

PUBLIC = {
    f"{folder}/{file.name}"
    for folder in ("spells", "estimates", "readouts", "comparisons")
    for file in (ROOT / "macros" / folder).glob("[!_]*.sql")
}
NAMES = [one.name for one in (*DEFECTS, *TAMPERINGS)]


@pytest.fixture(scope="module")
def proof(tmp_path_factory) -> Proof:
    return Proof(tmp_path_factory.mktemp("proof"))


def test_there_are_many_defects_and_each_has_a_name_of_its_own():
    assert len(NAMES) >= 60
    assert len(set(NAMES)) == len(NAMES)


def test_every_public_macro_has_a_defect_and_a_model():
    assert PUBLIC - {defect.file for defect in DEFECTS} == set()
    called = {re.split(r"\W", call, maxsplit=1)[0] for call in MODELS.values()}
    assert {file.split("/")[1].removesuffix(".sql") for file in PUBLIC} == called


def test_without_a_defect_everything_agrees(proof):
    project = proof.project()
    proof.build(project, list(MODELS))
    checked = proof.check(project, list(MODELS))
    wrong = {
        call.model: [call.verdict, call.note, *call.sentences] for call in checked if call.verdict != AGREES
    }
    assert wrong == {}
    assert all(call.figures for call in checked)


@pytest.mark.parametrize("defect", [pytest.param(defect, id=defect.name) for defect in DEFECTS])
def test_defects_in_macros_are_caught(proof, defect: Defect):
    CAUGHT[defect.name] = False
    places = proof.places(defect)
    assert len(places) == 1, f"its text stands {len(places)} times in {defect.file}"
    for model in defect.models:
        assert places[0] in proof.macros_of(model), f"{model} does not call {places[0]}"
    project = proof.project(defect)
    proof.build(project, defect.models)
    checked = proof.check(project, defect.models)
    assert {call.model: call.verdict for call in checked} == dict.fromkeys(defect.models, DISAGREES)
    assert all(call.sentences for call in checked)
    CAUGHT[defect.name] = True


@pytest.mark.parametrize("tampering", [pytest.param(one, id=one.name) for one in TAMPERINGS])
def test_tables_that_are_not_what_their_models_say_are_caught(proof, tampering: Tampering):
    CAUGHT[tampering.name] = False
    project = proof.project()
    proof.build(project, tampering.models, tampering.built_with)
    for statement in tampering.done:
        proof.engine.execute(statement)
    try:
        checked = proof.check(project, tampering.models)
    finally:
        for statement in tampering.undone:
            proof.engine.execute(statement)
    assert {call.model: call.verdict for call in checked} == dict.fromkeys(tampering.models, STALE)
    assert all(tampering.said in call.note for call in checked)
    CAUGHT[tampering.name] = True
