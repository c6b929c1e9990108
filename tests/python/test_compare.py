"""POST /v1/compare against a general-purpose physics engine (PyPI `mujoco`), live: its terms are somebody else's.

They are handed over in the ENGINE'S conventions, straight from its arrays: free joint with a world-frame linear and a body-frame angular
velocity, quaternion [w, x, y, z], joints depth first through the tree (documentation of the engine, "Floating objects" and
"Kinematic tree"). Mistakes are made on the engine's side of the fence, before or after it computes.
"""

from __future__ import annotations

import json
import subprocess

import mujoco
import numpy as np
import pytest
from underfoot import build
from underfoot.transport import plain

import conftest
import physics_reference as reference
from cases import ROOT

DEMO = (ROOT / "src" / "cli" / "demo" / "biped.urdf").read_text()
LINKS = ("left_foot", "right_forearm")
SWAP = [3, 4, 5, 0, 1, 2]


class Theirs:
    """The engine's robot in one state, and its terms as its arrays hold them."""

    def __init__(self, rng, urdf=DEMO, change=None, rotor_inertia=None, gravity=(0.0, 0.0, -9.80665), quaternion=lambda x, y, z, w: (w, x, y, z)):
        self.robot = reference.Robot(change(urdf) if change else urdf, gravity=gravity, rotor_inertia=rotor_inertia)
        self.state = reference.random_state(rng, len(self.robot.joints))
        robot, model, data = self.robot, self.robot.model, self.robot.data
        robot.set(self.state.position, self.state.orientation, self.state.joints, self.state.nu)
        velocity = data.qvel.copy()
        data.qpos[3:7] = quaternion(*self.state.orientation)
        data.qvel[:] = velocity
        mujoco.mj_fwdPosition(model, data)
        mujoco.mj_fwdVelocity(model, data)
        mujoco.mj_subtreeVel(model, data)
        self.mass_matrix = np.zeros((model.nv, model.nv))
        mujoco.mj_fullM(model, data, self.mass_matrix)
        self.bias = data.qfrc_bias.copy()
        self.momentum = np.concatenate([robot.mass * data.subtree_linvel[0], data.subtree_angmom[0]])
        self.frames = [self.frame(link) for link in LINKS]
        # The base velocity as the engine takes it.
        self.engine_velocity = velocity[:6]
        self.joints = [mujoco.mj_id2name(model, mujoco.mjtObj.mjOBJ_JOINT, i) for i in range(1, model.njnt)]

    def frame(self, link):
        robot = self.robot
        jacobian, rate = np.zeros((6, robot.model.nv)), np.zeros((6, robot.model.nv))
        point, body = robot.data.xpos[robot.body(link)].copy(), robot.body(link)
        mujoco.mj_jac(robot.model, robot.data, jacobian[:3], jacobian[3:], point, body)
        mujoco.mj_jacDot(robot.model, robot.data, rate[:3], rate[3:], point, body)
        return {"name": link, "jacobian": jacobian, "bias_acceleration": rate @ robot.data.qvel}

    def terms(self):
        return {"mass_matrix": self.mass_matrix, "bias": self.bias, "momentum": self.momentum, "frames": self.frames}

    def reorder(self, columns, rows=range(6)):
        """The same with columns and rows in another order."""
        columns, rows = list(columns), list(rows)
        self.mass_matrix = self.mass_matrix[np.ix_(columns, columns)]
        self.bias = self.bias[columns]
        self.momentum = self.momentum[rows]
        self.frames = [
            {"name": f["name"], "jacobian": f["jacobian"][np.ix_(rows, columns)], "bias_acceleration": f["bias_acceleration"][rows]} for f in self.frames
        ]
        return self

    def request_state(self, engine_axes=True):
        """The state for the service, base velocity in the engine's axes (world, body) or in world axes."""
        s = self.state
        return build.state(
            joints=(self.robot.joints, s.joints, s.nu[6:]),
            base_position=s.position,
            base_orientation=s.orientation,
            base_velocity=self.engine_velocity if engine_axes else s.nu[:6],
            velocity_axes=("world", "base") if engine_axes else "world",
        )


def ask(client, theirs, model=None, engine_axes=True, **members):
    model = model or client.add_model(DEMO)
    return client.compare(model, theirs.request_state(engine_axes), **{**theirs.terms(), **members})


def test_the_engine_agrees_where_the_request_is_in_its_conventions(client, rng):
    theirs = Theirs(rng)
    # Its joint order is ours on this robot; a check that the next tests change one thing only.
    assert theirs.joints == theirs.robot.joints
    found = ask(client, theirs, tolerance=1e-9)
    assert found.verdict == "agrees", found.document
    assert not found.explanations and max(found.velocities.values()) < 1e-9


def test_its_free_joint_is_recognised(client, rng):
    found = ask(client, Theirs(rng), engine_axes=False)
    assert found.verdict == "explained"
    assert found.explanations == (("velocity-axes",),)
    assert found.texts == ("the base part of your generalised velocity has its linear part in world axes, angular part in base axes",)
    assert max(q["relative"] for q in found.document["quantities"]) > 1e-2
    assert max(q["relative"] for q in found.document["after"]) < 1e-6
    # Rows of joints against joints are right from the start; what is wrong is in the base's angular part.
    blocks = {(b["rows"], b["columns"]): b["relative"] for q in found.document["quantities"] if q["quantity"] == "mass_matrix" for b in q["blocks"]}
    assert blocks["joints", "joints"] < 1e-9 and blocks["base linear", "base linear"] < 1e-9
    assert blocks["base angular", "joints"] > 1e-3


def test_depth_first_joints_are_recognised(client, rng):
    """A description whose joints are not in tree order: the engine walks the tree, the document does not."""
    urdf = reference.random_urdf(np.random.default_rng(20), 12)
    start, end = urdf.index("<joint"), urdf.rindex("</joint>") + len("</joint>")
    joints = [part + "</joint>" for part in urdf[start:end].split("</joint>") if "<joint" in part]
    urdf = urdf[:start] + "".join(reversed(joints)) + urdf[end:]
    robot = reference.Robot(urdf)
    order = [mujoco.mj_id2name(robot.model, mujoco.mjtObj.mjOBJ_JOINT, i) for i in range(1, robot.model.njnt)]
    assert order != robot.joints
    state = reference.random_state(rng, len(robot.joints))
    robot.set(state.position, state.orientation, state.joints, state.nu)
    mass_matrix = np.zeros((robot.model.nv, robot.model.nv))
    mujoco.mj_fullM(robot.model, robot.data, mass_matrix)
    document = build.state(
        joints=(robot.joints, state.joints, state.nu[6:]), base_position=state.position, base_orientation=state.orientation,
        base_velocity=np.concatenate([state.nu[:3], robot.data.qvel[3:6]]), velocity_axes=("world", "base"),
    )
    found = client.compare(client.add_model(urdf), document, mass_matrix=mass_matrix, bias=robot.data.qfrc_bias)
    assert found.explanations[0] == ("joint-order",)
    assert list(found.joints) == order


@pytest.mark.parametrize(("name", "build_theirs", "code"), [
    ("gravity", lambda rng: Theirs(rng, gravity=(0, 0, 9.80665)), "gravity-sign"),
    ("no gravity", lambda rng: Theirs(rng, gravity=(0, 0, 0)), "gravity-missing"),
    ("xyzw read as wxyz", lambda rng: Theirs(rng, quaternion=lambda x, y, z, w: (x, y, z, w)), "quaternion-read-scalar-first"),
    ("inverse", lambda rng: Theirs(rng, quaternion=lambda x, y, z, w: (w, -x, -y, -z)), "quaternion-inverse"),
    ("angular first", lambda rng: Theirs(rng).reorder([*SWAP, *range(6, 25)], SWAP), "angular-first"),
    ("angular first in the columns", lambda rng: Theirs(rng).reorder([*SWAP, *range(6, 25)]), "angular-first-columns"),
    ("angular first in the rows", lambda rng: Theirs(rng).reorder(range(25), SWAP), "angular-first-rows"),
    ("joints by name", lambda rng: by_name(Theirs(rng)), "joint-order"),
], ids=lambda value: value if isinstance(value, str) and " " in value else None)
def test_one_mistake_is_named(client, rng, name, build_theirs, code):
    found = ask(client, build_theirs(rng))
    assert found.verdict == "explained", found.document["nearest"]
    assert found.explanations == ((code,),), found.explanations


def by_name(theirs):
    return theirs.reorder([*range(6), *(6 + np.argsort(theirs.joints))])


def test_a_shuffled_order_is_found_from_the_numbers(client, rng):
    """No program orders joints so: the order has to come out of the terms."""
    theirs = Theirs(rng)
    shuffle = rng.permutation(len(theirs.joints))
    theirs.reorder([*range(6), *(6 + shuffle)])
    found = ask(client, theirs)
    assert found.explanations == (("joint-order",),)
    assert list(found.joints) == [theirs.joints[i] for i in shuffle]


def test_rotor_inertia_that_was_forgotten(client, rng):
    model = client.add_model(DEMO, joints=[build.joint("left_knee", rotor_inertia=0.05), build.joint("right_hip_roll", rotor_inertia=0.03)])
    found = ask(client, Theirs(rng), model=model)
    assert found.explanations == (("rotor-inertia-missing",),)
    assert found.velocities["left_knee"] > 1e-2 > 1e-6 > found.velocities["left_elbow"]
    agreeing = Theirs(rng, rotor_inertia={"left_knee": 0.05, "right_hip_roll": 0.03})
    assert ask(client, agreeing, model=model).verdict == "agrees"


def test_rows_in_the_frames_own_axes(client, rng):
    theirs = Theirs(rng)
    for frame in theirs.frames:
        turn = np.kron(np.eye(2), theirs.robot.data.xmat[theirs.robot.body(frame["name"])].reshape(3, 3).T)
        frame["jacobian"] = turn @ frame["jacobian"]
        frame["bias_acceleration"] = turn @ frame["bias_acceleration"]
    assert ask(client, theirs).explanations == (("rows-in-frame-axes",),)


@pytest.mark.parametrize(("point", "code"), [("base", "momentum-about-base"), ("origin", "momentum-about-world-origin")])
def test_momentum_about_another_point(client, rng, point, code):
    theirs = Theirs(rng)
    arm = theirs.robot.data.subtree_com[0] - (theirs.state.position if point == "base" else 0.0)
    theirs.momentum = theirs.momentum + np.concatenate([np.zeros(3), np.cross(arm, theirs.momentum[:3])])
    assert ask(client, theirs).explanations == ((code,),)


@pytest.mark.parametrize(("build_theirs", "codes"), [
    (lambda rng: Theirs(rng, gravity=(0, 0, 9.80665)), {"velocity-axes", "gravity-sign"}),
    (lambda rng: by_name(Theirs(rng)), {"velocity-axes", "joint-order"}),
    (lambda rng: Theirs(rng).reorder([*SWAP, *range(6, 25)], SWAP), {"velocity-axes", "angular-first"}),
], ids=["gravity", "joints by name", "angular first"])
def test_two_at_once_are_named(client, rng, build_theirs, codes):
    """The request in world axes, the engine in its own, and one thing more."""
    found = ask(client, build_theirs(rng), engine_axes=False)
    assert found.verdict == "explained", found.document["nearest"]
    assert set(found.explanations[0]) == codes
    assert len(found.explanations) == 1, found.explanations


def test_a_shuffled_order_in_other_axes(client, rng):
    theirs = Theirs(rng)
    shuffle = rng.permutation(len(theirs.joints))
    theirs.reorder([*range(6), *(6 + shuffle)])
    found = ask(client, theirs, engine_axes=False)
    assert set(found.explanations[0]) == {"velocity-axes", "joint-order"}
    assert list(found.joints) == [theirs.joints[i] for i in shuffle]


def test_what_no_convention_explains_is_located(client, rng):
    """A forearm 5 % too heavy: nothing explains it, and the joints that are off are those that carry it, no others."""
    heavier = lambda urdf: urdf.replace('<mass value="0.8"/>', '<mass value="0.84"/>', 1)  # noqa: E731 - the left forearm comes first
    assert DEMO.index('<mass value="0.8"/>') > DEMO.index('name="left_forearm"')
    found = ask(client, Theirs(rng, change=heavier))
    assert found.verdict == "unexplained" and not found.explanations
    off = {name for name, error in found.velocities.items() if error > 1e-6 and not name.startswith("base:")}
    assert off == {"waist_yaw", "left_shoulder_pitch", "left_shoulder_roll", "left_elbow"}
    matrix = next(q for q in found.document["quantities"] if q["quantity"] == "mass_matrix")
    assert {matrix["worst"]["row"], matrix["worst"]["column"]} <= off


def test_a_state_at_rest_tells_little_and_says_so(client, rng):
    """Upright and at rest, axes and quaternion order cannot be told apart: they are listed as unseen, not as explanations."""
    robot = reference.Robot(DEMO)
    joints = rng.normal(scale=0.3, size=len(robot.joints))
    robot.set(np.zeros(3), np.array([0, 0, 0, 1.0]), joints, np.zeros(6 + len(joints)))
    document = build.state(joints=(robot.joints, joints, 0 * joints), base_position=[0, 0, 0], base_orientation=[0, 0, 0, 1])
    found = client.compare(client.add_model(DEMO), document, mass_matrix=robot.mass_matrix(), bias=robot.bias())
    assert found.verdict == "agrees"
    unseen = {c["code"] for c in found.document["unseen"]}
    assert {"velocity-axes", "velocity-read-in-other-axes", "quaternion-inverse", "bias-at-rest", "momentum-about-base", "rotor-inertia-missing"} <= unseen
    assert "gravity-sign" not in unseen and "joint-order" not in unseen


def test_the_command_line_gives_the_same(client, rng, tmp_path):
    theirs = Theirs(rng)
    request = plain({"format": "underfoot/1", "model": {"urdf": DEMO}, "state": theirs.request_state(False), "yours": theirs.terms()})
    file = tmp_path / "compare.json"
    file.write_text(json.dumps(request))
    out = subprocess.run([conftest.BINARY, "compare", file], capture_output=True)
    assert out.returncode == 1
    assert out.stdout == client.raw("POST", "/v1/compare", file.read_bytes()).body
    table = subprocess.run([conftest.BINARY, "compare", file, "--table"], capture_output=True, text=True)
    assert table.stdout.startswith("explained\n") and "angular part in base axes" in table.stdout


def test_refusals_point_at_the_member(client, rng):
    import underfoot

    theirs = Theirs(rng)
    wrong = {
        "/yours/mass_matrix": {"mass_matrix": theirs.mass_matrix[:-1]},
        "/yours/bias": {"bias": theirs.bias[:-1]},
        "/yours/frames/0/name": {"frames": [{"name": "nowhere", "jacobian": theirs.frames[0]["jacobian"]}]},
        "/yours/frames/0/jacobian": {"frames": [{"name": "left_foot", "jacobian": theirs.mass_matrix}]},
        "/tolerance": {"tolerance": 0.5},
        "/yours": {"mass_matrix": None, "bias": None, "momentum": None, "frames": ()},
    }
    for pointer, members in wrong.items():
        with pytest.raises(underfoot.Refused) as refused:
            ask(client, theirs, **members)
        assert [f.pointer for f in refused.value.faults] == [pointer]
