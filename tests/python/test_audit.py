"""Audits through the client: documents follow their schema, sources of torques other than ours are judged alike, tolerances are used."""

from __future__ import annotations

import copy
import json

import jsonschema
import numpy as np
import pytest
import scenes
from cases import ROOT, walker_stance
from underfoot import build

EXAMPLE = json.loads((ROOT / "schemas/example-audit.json").read_text())


@pytest.fixture(scope="module")
def schema(client):
    return json.loads(client.raw("GET", "/schemas/audit-answer").body)


@pytest.fixture(scope="module")
def walker(client):
    return scenes.add_walker(client)


@pytest.fixture(scope="module")
def question(client, walker):
    return scenes.standing(client, walker, levels=True)


def test_the_example_passes_and_follows_its_schema(client, schema):
    audit = client.audit(EXAMPLE["request"], EXAMPLE["answer"])
    assert audit.passed and not audit.reasons and audit.conclusion is None
    jsonschema.validate(audit.document, schema)
    again = client.audit(EXAMPLE["request"], EXAMPLE["answer"])
    assert again.body == audit.body


def test_the_services_own_answer_passes(client, question):
    answer = client.solve(question)
    audit = client.audit(question, answer)
    assert audit.passed, audit.reasons
    # The rule is the controller's to plan with; what held torques do is judged beside it, and no verdict is hidden.
    rules = [j["rule"] for j in audit.document["judgements"]]
    assert rules == ["backward_euler", "held"]
    assert audit.rule_dependent == (audit.document["judgements"][1]["verdict"] != "pass")


def test_implied_motion_is_that_of_the_equation_of_motion(client, question):
    """Derived: M nu_dot + h = S' tau + sum J' w_bar with M, h and J of a physics engine (PyPI `mujoco`) holds for any torques."""
    stance = walker_stance()
    answer = client.solve(question)
    rng = np.random.default_rng(3)
    torques = answer.torques + rng.uniform(-5, 5, len(answer.torques))
    audit = client.audit(question, build.controller_answer(list(zip(answer.joints, torques))), causes=False)
    for judgement in audit.document["judgements"]:
        implied = judgement["implied"]
        base = implied["base_acceleration"]
        change = np.concatenate([base["linear"], base["angular"], [j["acceleration"] for j in implied["joints"]]])
        stance.put()
        left = stance.robot.mass_matrix() @ change + stance.robot.bias()
        left[6:] -= torques
        for sole, (_, _, _, jacobian, _) in zip(implied["soles"], stance.soles()):
            left -= jacobian.T @ np.concatenate([sole["wrench_over_tick"]["force"], sole["wrench_over_tick"]["moment"]])
        assert np.abs(left).max() < 1e-7 * stance.robot.mass * 9.80665, judgement["rule"]


@pytest.mark.parametrize(
    ("change", "mistake"),
    [
        (lambda q: q["gravity"].__setitem__(2, q["gravity"][2] * 1.02), "gravity"),
        (lambda q: [t.__setitem__("priority", 4 - t["priority"]) for t in q["tasks"]], "priorities"),
        (lambda q: [c.__setitem__("law", build.rigid()) or c.pop("rest") for c in q["contacts"]], None),
    ],
    ids=["gravity", "priorities", "rigid"],
)
def test_mistaken_questions_are_told(client, schema, question, change, mistake):
    question = {**copy.deepcopy(question), "gravity": [0, 0, -9.80665]}
    mistaken = copy.deepcopy(question)
    change(mistaken)
    if mistake is None:
        # Taken for rigid, with the wrenches of the moment measured: only then is a second rate of momentum known.
        for contact, sole in zip(mistaken["contacts"], client.solve(question).soles):
            contact["measured_wrench"] = {"force": sole.present[:3].tolist(), "moment": sole.present[3:].tolist()}
        mistake = "rigid_ground"
    answer = client.solve(mistaken)
    audit = client.audit(question, build.controller_answer(list(zip(answer.joints, answer.torques))))
    assert audit.verdict == "fail"
    assert mistake in {h.mistake for h in audit.causes}, audit.hypotheses[:3]
    jsonschema.validate(audit.document, schema)


def test_tolerances_decide(client, question):
    answer = client.solve(question)
    torques = answer.torques.copy()
    torques[0] += 0.05
    claim = build.controller_answer(list(zip(answer.joints, torques)))
    assert client.audit(question, claim).verdict == "fail"
    # A tolerance for torques alone leaves what follows from them to be judged.
    assert client.audit(question, claim, tolerances={"torque": 0.1}).verdict == "fail"
    assert client.audit(question, claim, tolerances={"relative": 1.0}).verdict == "pass"
    with pytest.raises(Exception, match="/tolerances/torque"):
        client.audit(question, claim, tolerances={"torque": 0.0})


def test_unknown_causes_are_called_unknown(client, question):
    answer = client.solve(question)
    rng = np.random.default_rng(5)
    torques = answer.torques + rng.uniform(-0.3, 0.3, len(answer.torques))
    audit = client.audit(question, build.controller_answer(list(zip(answer.joints, torques))))
    assert (audit.verdict, audit.causes) == ("fail", ())
    assert audit.conclusion in ("unknown", "broken_constraint")
    quiet = client.audit(question, build.controller_answer(list(zip(answer.joints, torques))), causes=False)
    assert quiet.conclusion is None and quiet.verdict == "fail"
