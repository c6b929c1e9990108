"""Identification against scipy's least squares on the same log, and what a log may do wrong, on the running service."""

from __future__ import annotations

import json
import socket
import subprocess
import sys

import numpy as np
import pytest
import underfoot
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation
from underfoot import build

from cases import FOOT as WALKER_FOOT
from cases import walker_urdf
from conftest import BINARY, ROOT
from made_up_walk import COLUMNS, FOOT, PATCHES, SETTINGS, csv, log, samples

RADIUS = np.sqrt((0.22**2 + 0.10**2) / 12)
"""Radius of gyration of the sole (m): the service weighs a moment as a force at this distance unless told otherwise."""


def unloaded(rows, begin):
    """The last row before the stance."""
    return rows[np.searchsorted(rows[:, 0], begin) - 1]


def residuals(parameters, rows, anchor):
    """Whitened wrench residuals of one stance: the law by quadrature, the rest pose level at the anchor plus a height."""
    from ground_reference import Bed

    k, b, height = parameters[0] * 1e6, parameters[1] * 1e4, parameters[2] * 1e-2
    yaw = Rotation.from_quat(anchor[10:14]).as_matrix()
    # The anchor's orientation is tilted onto the level plane by the smallest rotation.
    axis = np.cross(yaw[:, 2], [0.0, 0.0, 1.0])
    size = np.linalg.norm(axis)
    level = Rotation.from_rotvec(axis / size * np.arcsin(size)) if size > 0 else Rotation.identity()
    rest = level.as_matrix() @ yaw
    bed = Bed(np.array(FOOT), k, k, b, b, anchor[7:10] + [0.0, 0.0, height], rest)
    out = []
    for r in rows:
        rotation = Rotation.from_quat(r[10:14]).as_matrix()
        wrench = bed.wrench(r[7:10], rotation, r[14:17], r[17:20])
        out.append(np.concatenate([rotation.T @ wrench[:3] - r[1:4], (rotation.T @ wrench[3:] - r[4:7]) / RADIUS]))
    return np.concatenate(out)


def test_estimates_are_those_of_scipys_least_squares(client):
    """scipy.optimize.least_squares (Levenberg-Marquardt) on the nonlinear problem in k, b and the height, live."""
    rows = log(3, 0.004, 0.8, (2.0, 0.1))
    answer = client.identify(SETTINGS, samples(rows))
    assert answer.status == "identified" and len(answer.sole("left").stances) == 2
    for stance, patch in zip(answer.sole("left").stances, PATCHES):
        inside = rows[(rows[:, 0] >= stance.begin) & (rows[:, 0] <= stance.end)]
        assert len(inside) == stance.samples
        anchor = unloaded(rows, stance.begin)
        fit = least_squares(residuals, [1.0, 1.0, 0.0], args=(inside, anchor), method="lm", xtol=1e-14, ftol=1e-14, gtol=1e-14)
        k, b, height = fit.x * [1e6, 1e4, 1e-2]
        assert stance.parameter("stiffness").value == pytest.approx(k, rel=1e-6)
        assert stance.parameter("damping").value == pytest.approx(b, rel=1e-6)
        rest = stance.document["parameters"][2]["rest"]
        assert rest["value"] == pytest.approx(height, rel=1e-5, abs=1e-9)
        # Error bars from scipy's Jacobian, the noise of forces and of moments each from its own residuals.
        kind = np.tile([True] * 3 + [False] * 3, len(inside))
        spread = np.linalg.inv(fit.jac.T @ fit.jac)
        meat = np.zeros((3, 3))
        for group in (kind, ~kind):
            information = fit.jac[group].T @ fit.jac[group]
            left = group.sum() - np.trace(spread @ information)
            meat += information * (fit.fun[group] @ fit.fun[group]) / left
        deviations = np.sqrt(np.diag(spread @ meat @ spread)) * [1e6, 1e4, 1e-2]
        assert stance.parameter("stiffness").deviation == pytest.approx(deviations[0], rel=0.01)
        assert stance.parameter("damping").deviation == pytest.approx(deviations[1], rel=0.01)
        assert abs(k - patch.stiffness) < 4 * deviations[0] and abs(b - patch.damping) < 4 * deviations[1]
    assert answer.sole("left").stances[1].change < 1e-9


def test_a_guess_and_forgetting_change_little_on_steady_ground(client):
    rows = log(4, 0.004, 0.8, (2.0, 0.1))
    plain = client.identify(SETTINGS, samples(rows))
    guess = {"stiffness": 2e6, "damping": 2e4}
    other = client.identify({**SETTINGS, "guess": guess, "forgetting": {"time_constant": 1.0}}, samples(rows))
    for a, b in zip(plain.sole("left").stances, other.sole("left").stances):
        for name in ("stiffness", "damping"):
            assert b.parameter(name).value == pytest.approx(a.parameter(name).value, rel=0.05)
            assert b.parameter(name).deviation > a.parameter(name).deviation


def test_normal_and_tangential_are_told_apart(client):
    rows = log(5, 0.004, 0.8, (1.0, 0.05))
    answer = client.identify({**SETTINGS, "directions": "split", "unknown": ["height", "tilt"]}, samples(rows))
    for stance, patch in zip(answer.sole("left").stances, PATCHES):
        for name, truth in (
            ("normal_stiffness", patch.stiffness), ("tangential_stiffness", patch.stiffness),
            ("normal_damping", patch.damping), ("tangential_damping", patch.damping),
        ):
            parameter = stance.parameter(name)
            assert abs(parameter.value - truth) < 4.5 * parameter.deviation + 0.01 * truth, (name, parameter)


def test_the_same_log_in_three_forms(client, tmp_path):
    rows = log(6, 0.004, 0.6, (2.0, 0.1))
    exact = csv(rows, digits="%.17g")
    lines = "\n".join(json.dumps(sample) for sample in samples(rows)) + "\n"
    whole = client.identify(SETTINGS, samples(rows)).document
    forms = [client.identify(SETTINGS, csv=exact).document, client.identify(SETTINGS, ndjson=lines).document]
    for form in forms:
        assert form["soles"] == whole["soles"] and form["rows"] == whole["rows"]
    # The command line answers the same; lines count from the log's first.
    (tmp_path / "log.csv").write_text(exact)
    (tmp_path / "settings.json").write_text(json.dumps(SETTINGS, indent=1))
    command = [BINARY, "identify", tmp_path / "log.csv", "--settings", tmp_path / "settings.json"]
    run = subprocess.run(command, capture_output=True, check=True)
    assert json.loads(run.stdout)["soles"] == whole["soles"] and run.stderr == b""
    assert json.loads(run.stdout)["fingerprint"] == forms[0]["fingerprint"]


def test_units_and_other_names_of_columns(client):
    rows = log(7, 0.004, 0.6, (2.0, 0.1))
    plain = client.identify(SETTINGS, csv=csv(rows))
    other = rows.copy()
    other[:, 0] *= 1e3
    other[:, 3] *= 1e-3
    other[:, 7:10] *= 1e3
    columns = list(COLUMNS)
    columns[0], columns[3] = "clock", "Fz"
    columns[7:10] = [f"left.position.{a} [mm]" for a in "xyz"]
    mapping = [{"column": "clock", "means": "time [ms]"}, {"column": "Fz", "means": "left.force.z [kN]"}]
    answer = client.identify({**SETTINGS, "mapping": mapping}, csv=csv(other, columns + ["temperature [K]"]))
    for a, b in zip(plain.soles[0].stances, answer.soles[0].stances):
        assert b.parameter("stiffness").value == pytest.approx(a.parameter("stiffness").value, rel=1e-5)
    assert {remark["code"] for remark in answer.remarks} == {"column-ignored", "time-gap"}


def test_headers_that_cannot_be_used_are_refused_with_the_column(client):
    rows = log(7, 0.01, 0.2, (2.0, 0.1))
    columns = list(COLUMNS)
    columns[3], columns[8], columns[9] = "left.force.z", "left.position.y [ft]", "left.position.zz [m]"
    with pytest.raises(underfoot.Refused) as refused:
        client.identify(SETTINGS, csv=csv(rows, columns))
    assert refused.value.status == 422 and refused.value.code == "unusable-log"
    text = " ".join(f"{fault.expected} {fault.got}" for fault in refused.value.faults)
    assert all(word in text for word in ("left.force.z", "ft", "left.position.z"))
    assert all(fault.line == 2 for fault in refused.value.faults)


def test_faults_in_rows_are_told_with_lines_and_nothing_is_dropped_in_silence(client):
    rows = log(8, 0.004, 0.6, (2.0, 0.1), PATCHES[:1])
    lines = csv(rows).split("\n")[:-1]
    # Lines count the settings as 1 and the header as 2, so that row i stands on line i + 3.
    cells = lines[41].split(",")
    cells[3] = ""
    lines[41] = ",".join(cells)
    lines[51] = lines[51].replace(lines[51].split(",")[8], "n/a", 1)
    lines[61] = lines[61].split(",", 1)[1].join([lines[60].split(",")[0] + ",", ""])
    lines[71] = "0.001," + lines[71].split(",", 1)[1]
    lines[81] = "," + lines[81].split(",", 1)[1]
    answer = client.identify(SETTINGS, csv="\n".join(lines) + "\n")
    found = {remark["code"]: remark for remark in answer.remarks}
    places = {"empty-cell": [43, 83], "not-a-number": [53], "time-repeats": [63], "time-goes-back": [73], "no-time": [83]}
    for code, expected in places.items():
        seen = sorted(line for remark in answer.remarks if remark["code"] == code for line in remark["lines"])
        assert seen == expected, (code, answer.remarks)
    assert answer.document["rows"] == len(rows) and answer.document["skipped"] == 3
    assert found["incomplete-sample"]["lines"] == [53]


def test_kilonewtons_taken_for_newtons_are_noticed(client):
    rows = log(9, 0.004, 0.6, (2.0, 0.1), PATCHES[:1])
    rows[:, 1:7] *= 1000.0
    answer = client.identify(SETTINGS, samples(rows))
    remark = next(remark for remark in answer.remarks if remark["code"] == "unit-of-force")
    assert "times the weight" in remark["text"] and remark["lines"]
    rows[:, 1:7] *= -1e-3
    answer = client.identify(SETTINGS, samples(rows))
    assert [remark["code"] for remark in answer.remarks] == ["never-stands"] and answer.status == "not_identified"


def test_sensor_sign_frame_offset_and_mass_below(client):
    """A log seen by a turned, shifted sensor that reads the reaction, with 1.5 kg between it and the ground."""
    rows = log(10, 0.002, 0.8, (0.0, 0.0))
    mass, centre, where = 1.5, np.array([0.01, 0.0, 0.02]), np.array([0.02, -0.01, 0.06])
    turned = Rotation.from_rotvec([0.0, 0.0, 0.5 * np.pi])
    gravity = np.array([0.0, 0.0, -9.80665])
    seen = rows.copy()
    for i, r in enumerate(rows):
        near = slice(max(i - 1, 0), i + 2)
        times, speeds = rows[near, 0], rows[near, 14:17]
        acceleration = (speeds[-1] - speeds[0]) / (times[-1] - times[0])
        carried = Rotation.from_quat(r[10:14]).inv().apply(mass * (acceleration - gravity))
        force, moment = r[1:4] - carried, r[4:7] - np.cross(centre, carried)
        moment = moment - np.cross(where, force)
        seen[i, 1:4], seen[i, 4:7] = -turned.inv().apply(force), -turned.inv().apply(moment)
    sensor = {
        "reads": "robot_on_ground", "position": list(where), "orientation": list(turned.as_quat()),
        "mass_below": mass, "center_below": list(centre),
    }
    settings = {**SETTINGS, "soles": [{**SETTINGS["soles"][0], "sensor": sensor}], "half_window": 1}
    answer = client.identify(settings, samples(seen))
    for stance, patch in zip(answer.soles[0].stances, PATCHES):
        assert stance.parameter("stiffness").value == pytest.approx(patch.stiffness, rel=0.01)
        assert stance.parameter("damping").value == pytest.approx(patch.damping, rel=0.03)


def test_still_feet_are_warned_of(client):
    rows = log(11, 0.004, 0.6, (2.0, 0.1), PATCHES[:1])
    answer = client.identify({**SETTINGS, "still_feet": True}, samples(rows))
    assert "still-feet" in [remark["code"] for remark in answer.remarks]
    rows[:, 7:14] = rows[0, 7:14]
    answer = client.identify(SETTINGS, samples(rows))
    assert "still-feet" in [remark["code"] for remark in answer.remarks]
    assert "still-feet" not in [remark["code"] for remark in client.identify(SETTINGS, samples(log(11, 0.004, 0.6, (2.0, 0.1)))).remarks]


def test_the_ground_block_goes_into_a_solve_request(client):
    request = json.loads((ROOT / "schemas/example-solve.json").read_text())
    ground = client.identify(SETTINGS, samples(log(12, 0.004, 0.8, (2.0, 0.1)))).sole("left").ground
    for contact in request["contacts"]:
        contact["law"] = ground["law"]
    answer = client.solve({**request, "spread": ground["spread"]})
    assert answer.status == "solved" and answer.document["spread"] is not None


def test_base_and_joint_states_give_what_sole_poses_give(client):
    """The service's own kinematics of a model, which is checked against a physics engine elsewhere, against poses given."""
    model = client.add_model(walker_urdf(), soles=[build.sole(f"{s}_sole", f"{s}_foot", WALKER_FOOT, position=[0, 0, -0.05]) for s in ("left", "right")])
    rng = np.random.default_rng(5)
    direct, by_state = [], []
    still = np.zeros(len(model.joints))
    for i in range(150):
        t = 0.004 * i
        wave = np.sin(8 * t + np.arange(len(still)))
        joints, speeds = 0.02 * wave, 0.16 * np.cos(8 * t + np.arange(len(still)))
        base, velocity = np.array([0.0, 0.0, 0.9 - 0.003 * (1 - np.cos(20 * t))]), np.array([0, 0, -0.06 * np.sin(20 * t), 0.1, 0.0, 0.05])
        state = build.state(joints=(model.joints, joints, speeds), base_position=base, base_orientation=[0, 0, 0, 1.0], base_velocity=velocity)
        sole = client.dynamics(model, state).frame("left_sole")
        force, moment = 300 + 50 * rng.standard_normal(3), 5 * rng.standard_normal(3)
        reading = {"sole": "left_sole", "force": list(force), "moment": list(moment)}
        motion = {
            "position": list(sole.position), "orientation": list(sole.orientation),
            "linear_velocity": list(sole.twist[:3]), "angular_velocity": list(sole.twist[3:]),
        }
        direct.append({"time": t, "soles": [{**reading, **motion}]})
        by_state.append({
            "time": t, "soles": [reading], "base_position": list(base), "base_orientation": [0, 0, 0, 1],
            "base_linear_velocity": list(velocity[:3]), "base_angular_velocity": list(velocity[3:]),
            "positions": list(joints[::-1]), "velocities": list(speeds[::-1]),
        })
    common = {"touchdown": {"kind": "force", "on": 20.0}}
    vertices = [[float(x) for x in vertex] for vertex in WALKER_FOOT]
    a = client.identify({**common, "soles": [{"name": "left_sole", "vertices": vertices}]}, direct)
    b = client.identify({**common, "soles": [{"name": "left_sole"}], "model": model, "joints": list(model.joints)[::-1]}, by_state)
    for first, second in zip(a.soles[0].stances[0].parameters, b.soles[0].stances[0].parameters):
        assert second.value == pytest.approx(first.value, rel=1e-6)


def test_a_point_foot_and_a_logged_touchdown(client):
    """Force alone, k and b per sole; the log says when the foot stands. Beside numpy's batch solution of the same rows."""
    rng = np.random.default_rng(17)
    k, b, list_, rows, y = 4e4, 400.0, [], [], []
    for i in range(400):
        t = 0.005 * (i - 50)
        stands = t >= 0.0
        sway = np.array([0.001 * np.sin(5 * t), 0.0005 * np.sin(7 * t), -0.006 * (1 - np.cos(12 * t)) / 2]) * stands
        speed = np.array([0.005 * np.cos(5 * t), 0.0035 * np.cos(7 * t), -0.036 * np.sin(12 * t)]) * stands
        force = (-k * sway - b * speed) * stands + rng.standard_normal(3)
        list_.append({"time": t, "soles": [{
            "sole": "toe", "force": list(force), "position": list(sway + [1.0, 2.0, 0.1]), "linear_velocity": list(speed), "stands": bool(stands),
        }]})
        if stands:
            rows.append(np.stack([-sway, -speed], 1))
            y.append(force)
    settings = {
        "soles": [{"name": "toe", "kind": "point"}], "touchdown": {"kind": "logged"}, "ground": {"point": [0, 0, 0.1]}, "unknown": [],
    }
    answer = client.identify(settings, list_)
    stance = answer.soles[0].stances[0]
    expected = np.linalg.lstsq(np.concatenate(rows), np.concatenate(y), rcond=None)[0]
    assert [p.unit for p in stance.parameters] == ["N/m", "N s/m"]
    assert [p.value for p in stance.parameters] == pytest.approx(list(expected), rel=1e-7)
    assert answer.soles[0].ground["law"]["per"] == "sole" and answer.soles[0].area is None
    assert abs(stance.parameters[0].value - k) < 4 * stance.parameters[0].deviation


def test_scale_and_bias_of_a_sensor(client):
    """A sensor that reads 10 % too much and 15 N too much sideways; the ground plane is known."""
    rows = log(13, 0.004, 1.5, (1.0, 0.05), PATCHES[:1])
    loaded = rows[rows[:, 0] >= 0.1]
    mean = np.trapezoid(loaded[:, 3], loaded[:, 0]) / (rows[-1, 0] - rows[0, 0])
    rows[:, 1:7] *= 1.1
    scaled = client.identify({**SETTINGS, "weight": float(mean), "scale": True}, samples(rows))
    assert scaled.document["scale"]["value"] == pytest.approx(1.1, abs=0.01)
    assert scaled.soles[0].stances[0].parameter("stiffness").value == pytest.approx(PATCHES[0].stiffness, rel=0.02)
    rows[:, 1:7] /= 1.1
    rows[:, 1] += 15.0
    settings = {**SETTINGS, "ground": {"point": [0, 0, 0]}, "unknown": ["force_bias"]}
    biased = client.identify(settings, samples(rows)).soles[0].stances[0]
    assert biased.parameter("force_bias_x").value == pytest.approx(15.0, abs=1.0)
    assert biased.parameter("stiffness").value == pytest.approx(PATCHES[0].stiffness, rel=0.02)


def test_other_bodies_are_refused(client):
    for media, status in (("text/plain", 415), ("application/x-www-form-urlencoded", 415)):
        assert client.raw("POST", "/v1/identify", b"{}", {"Content-Type": media}).status == status
    reply = client.raw("POST", "/v1/identify", b'{"format":"underfoot/1","soles":[]}\n', {"Content-Type": "text/csv"})
    assert reply.status == 422
    reply = client.raw("POST", "/v1/identify", b"x" * 100, {"Content-Type": "application/x-ndjson"})
    assert reply.status == 400
    with pytest.raises(underfoot.Refused) as refused:
        client.identify({"soles": [{"name": "a"}], "lag": {"delays": [0.1] * 50}}, [])
    assert {fault.pointer for fault in refused.value.faults} == {"/soles/0/vertices", "/lag"}


def test_a_log_longer_than_a_json_body_streams(client):
    """Some 13 MB of CSV, three times what a JSON request may have, and the same estimates as in one piece."""
    rows = log(15, 0.0005, 12.0, (2.0, 0.1), PATCHES[:1])
    text = csv(rows, digits="%.25g")
    assert len(text) > 3 * 4 * 2**20
    answer = client.identify(SETTINGS, csv=text)
    assert answer.document["rows"] == len(rows) and answer.status == "identified"
    assert answer.soles[0].stances[0].parameter("stiffness").value == pytest.approx(PATCHES[0].stiffness, rel=0.01)
    assert len(answer.soles[0].times) <= 401


def test_a_log_that_breaks_off_is_no_answer(address):
    """A chunked body whose connection closes in the middle must not pass for a whole log; the service goes on."""
    host, port = address.split("//")[1].split(":")
    head = json.dumps(SETTINGS) + "\n" + csv(log(16, 0.01, 0.5, (2.0, 0.1)))
    for chunk in (head.encode()[:3000], head.encode()):
        with socket.create_connection((host, int(port))) as peer:
            peer.sendall(b"POST /v1/identify HTTP/1.1\r\nHost: localhost\r\nContent-Type: text/csv\r\nTransfer-Encoding: chunked\r\n\r\n")
            peer.sendall(b"%x\r\n%s\r\n" % (len(chunk), chunk))
            peer.shutdown(socket.SHUT_WR)
            reply = peer.recv(65536)
        assert not reply.startswith(b"HTTP/1.1 200"), reply[:200]
    with underfoot.Client(address) as fresh:
        assert fresh.health()["status"] == "ok"


def test_settings_are_judged_before_the_log_has_come(address):
    """A client that sends the settings and waits hears what is wrong with them."""
    host, port = address.split("//")[1].split(":")
    first = b'{"format":"underfoot/1","soles":[]}\n'
    with socket.create_connection((host, int(port)), timeout=5.0) as peer:
        peer.sendall(b"POST /v1/identify HTTP/1.1\r\nHost: localhost\r\nContent-Type: text/csv\r\nTransfer-Encoding: chunked\r\n\r\n")
        peer.sendall(b"%x\r\n%s\r\n" % (len(first), first))
        assert peer.recv(65536).startswith(b"HTTP/1.1 422")


def test_memory_does_not_grow_with_the_log(tmp_path):
    """Peak memory of the command over 10 000 and over 200 000 rows (60 MB of text)."""
    rows = csv(log(14, 0.001, 4.8, (2.0, 0.1))).split("\n")
    head, body = rows[0], [row.split(",", 1)[1] for row in rows[1:-1]]
    peak = []
    for repeat in (1, 20):
        path = tmp_path / "log.csv"
        with path.open("w") as file:
            file.write(head + "\n")
            for i in range(repeat):
                for k, row in enumerate(body):
                    file.write(f"{0.001 * (i * (len(body) + 500) + k):.6f},{row}\n")
        (tmp_path / "settings.json").write_text(json.dumps(SETTINGS))
        script = (
            "import resource, subprocess, sys\n"
            "subprocess.run(sys.argv[1:], stdout=subprocess.DEVNULL)\n"
            "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss)"
        )
        command = [sys.executable, "-c", script, str(BINARY), "identify", str(path), "--settings", str(tmp_path / "settings.json")]
        peak.append(int(subprocess.run(command, capture_output=True, check=True, text=True).stdout))
    assert peak[1] < peak[0] + 8_000, f"peak memory in kB: {peak}"
