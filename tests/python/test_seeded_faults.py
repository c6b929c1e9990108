"""Audits of good answers and of answers with one fault each: no false alarm, and who is caught and named.

Source of the good answers, and of those to mistaken questions: the active-set method of Goldfarb and Idnani 1983 (PyPI `quadprog`) on
the exported problem, optimality conditions verified in hierarchy.py. `tests/seeded_faults` runs the long campaign.
"""

from __future__ import annotations

import multiprocessing
import os
from collections import Counter
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import pytest
import seeded
import underfoot
from underfoot import build

STATES = int(os.environ.get("UNDERFOOT_STATES", "12"))
SEED = int(os.environ.get("UNDERFOOT_SEED", "0"))
MOST_DRAWS = 3
"""Draws per state wanted: some have no answer, or none the checker is sure of."""

QUESTIONS = {
    "gravity": seeded.gravity,
    "friction_coefficient": seeded.friction,
    "priorities": seeded.priorities,
    "stiffness": seeded.stiffness,
    "velocity_axes": seeded.velocity_axes,
    "quaternion": seeded.quaternion,
}
FAULTS = {
    "torque_sign": "sign of one torque flipped",
    "joints_swapped": "two joints swapped",
    "gravity": "gravity 2 % off",
    "friction_coefficient": "friction .7 for .6",
    "limit_ignored": "a limit ignored",
    "priorities": "priorities inverted",
    "stiffness": "k wrong by 20 %",
    "delay": "one tick of delay",
    "velocity_axes": "base velocity in the wrong axes",
    "quaternion": "quaternion order",
    "rotor_inertia": "rotor inertia forgotten",
}


def answer_of(torques: dict[str, float]):
    return build.controller_answer(list(torques.items()))


def why(fault: str, subject: set[str], good: seeded.Good) -> str:
    """Why a fault left the torques what they are, within tolerance."""
    if fault == "friction_coefficient" and not any(name.startswith("friction:") for name in good.touching):
        return "no friction limit is touched"
    if fault in ("friction_coefficient", "limit_ignored"):
        # Vertex forces are not unique: those of an answer may touch their cones while the wrench has room, and a limit may be
        # touched without holding anything back.
        return "touched, but holds nothing back"
    return "changes torques by less than the tolerance"


def judged(client, fault: str, subject: set[str], request, good: seeded.Good, torques: dict[str, float]) -> dict:
    """What the audit makes of one faulty answer."""
    try:
        audit = client.audit(request, answer_of(torques))
    except underfoot.Refused as refused:
        # No verdict counts as not caught.
        return {"fault": fault, "equivalent": False, "verdict": f"refused, {refused.code}", "named": False, "alone": False, "nearest": False}
    readings = audit.document["judgements"][0]["comparisons"][0]["torques"]
    off = max(abs(torques[t["name"]] - good.torques[t["name"]]) / t["tolerance"] for t in readings) if readings else np.inf
    ours = lambda h: h.mistake == fault and (not subject or set(h.subject.split(" and ")) == subject or h.subject in subject)  # noqa: E731
    return {
        "fault": fault,
        "equivalent": bool(off <= 1),
        "why": why(fault, subject, good) if off <= 1 else "",
        "verdict": audit.verdict,
        "named": any(ours(h) for h in audit.causes),
        "alone": bool(audit.causes) and all(h.mistake == fault for h in audit.causes),
        "nearest": bool(audit.hypotheses) and ours(audit.hypotheses[0]),
    }


def one_state(job: tuple[str, int]) -> dict:
    """One state: its good answer and one fault of each kind."""
    address, number = job
    rng = np.random.default_rng([SEED, 7, number])
    with underfoot.Client(address, timeout=120) as client:
        models = seeded.Models.register(client)
        try:
            request, stance = seeded.draw(rng, models, number)
            request = seeded.with_torque_limit(rng, client, request)
            good = seeded.solve(client, request)
        except seeded.NoAnswer as none:
            return {"none": str(none).split(":")[0]}
        audit = client.audit(request, answer_of(good.torques))
        out = {"good": audit.verdict, "reasons": audit.reasons, "number": number, "faults": [],
               "reference": audit.document["judgements"][0]["comparisons"][0]["reference"]}
        names = list(good.torques)
        a, b = (names[int(i)] for i in rng.choice(len(names), 2, replace=False))
        flipped = {**good.torques, a: -good.torques[a]}
        swapped = {**good.torques, a: good.torques[b], b: good.torques[a]}
        group = str(rng.choice(good.touching)) if good.touching else "torque"
        mistaken = {fault: change(rng, request) for fault, change in QUESTIONS.items()}
        mistaken["limit_ignored"] = seeded.ignoring(request, group)
        mistaken["rotor_inertia"] = seeded.rotor_inertia(models, request)
        out["faults"].append(judged(client, "torque_sign", {a}, request, good, flipped))
        out["faults"].append(judged(client, "joints_swapped", {a, b}, request, good, swapped))
        for fault, question in mistaken.items():
            try:
                torques = seeded.solve(client, question, twice=fault in ("quaternion", "priorities")).torques
            except seeded.NoAnswer as none:
                out["faults"].append({"fault": fault, "none": str(none).split(":")[0]})
                continue
            out["faults"].append(judged(client, fault, {group} if fault == "limit_ignored" else set(), request, good, torques))
        later = seeded.next_tick(request, stance, good)
        try:
            now = seeded.solve(client, later, twice=False)
            out["faults"].append(judged(client, "delay", set(), later, now, good.torques))
        except seeded.NoAnswer as none:
            out["faults"].append({"fault": "delay", "none": str(none).split(":")[0]})
    return out


@pytest.mark.seeded
def test_seeded_faults(address, row):
    states, drawn, none = [], 0, Counter()
    workers = max(1, int(os.environ.get("UNDERFOOT_WORKERS", os.cpu_count() or 1)))
    with ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn")) as pool:
        while len(states) < STATES and drawn < MOST_DRAWS * STATES:
            batch = range(drawn, drawn + min(4 * workers, STATES - len(states)))
            for state in pool.map(one_state, [(address, number) for number in batch]):
                if "none" in state:
                    none[state["none"]] += 1
                else:
                    states.append(state)
            drawn += len(batch)
    assert len(states) == STATES, (drawn, none)
    alarms = [s for s in states if s["good"] == "fail"]
    undecided = sum(s["good"] == "undecided" for s in states)
    references = Counter(s["reference"] for s in states)
    row(f"feasible states audited (of {drawn} drawn; without a good answer: {dict(none)})", f"{len(states)}, references {dict(references)}")
    row("good answers: false alarms / undecided", f"{len(alarms)} / {undecided}")
    totals = Counter()
    for fault, text in FAULTS.items():
        entries = [f for s in states for f in s["faults"] if f["fault"] == fault]
        missing = sum("none" in f for f in entries)
        injected = [f for f in entries if "none" not in f]
        alike = [f for f in injected if f["equivalent"]]
        real = [f for f in injected if not f["equivalent"]]
        caught = sum(f["verdict"] == "fail" for f in real)
        named = sum(f["named"] for f in real)
        nearest = sum(f["nearest"] for f in real)
        alone = sum(f["named"] and f["alone"] for f in real)
        totals.update(injected=len(injected), equivalent=len(alike), caught=caught, named=named, real=len(real))
        row(
            f"{text}: injected / equivalent / caught / named (as the only kind) / nearest",
            f"{len(injected)} / {len(alike)} / {caught} / {named} ({alone}) / {nearest}"
            + (f"; {missing} without an answer" if missing else "")
            + (f"; equivalent: {dict(Counter(f['why'] for f in alike))}" if alike else ""),
        )
    row("all: injected / equivalent / caught / named", f"{totals['injected']} / {totals['equivalent']} / {totals['caught']} / {totals['named']}")
    missed = [(s["number"], f) for s in states for f in s["faults"] if "none" not in f and not f["equivalent"] and f["verdict"] != "fail"]
    print("missed:", missed[:20])
    assert not alarms, [(s["number"], s["reasons"]) for s in alarms[:3]]
    assert totals["caught"] >= 0.99 * totals["real"], missed[:20]
    assert totals["equivalent"] <= 0.10 * totals["injected"], totals
