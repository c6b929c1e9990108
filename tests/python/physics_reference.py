"""Rigid-body terms of a URDF from a general-purpose physics engine (PyPI `mujoco`), in Underfoot's convention.

The engine is the outside reference: nothing here comes from the project. Convention of everything returned:
generalised velocity nu = (v_B, omega_B, q_dot), both base parts in world axes, v_B that of the base link origin,
joints in the order of the URDF document; Jacobians with linear rows first, world axes; moments of momentum about
the centre of mass, world axes.

The engine's free joint has a world-frame linear but a BODY-frame angular velocity: nu_engine = T nu with
T = diag(I, R', I). T_dot nu = (0, R_dot' omega, 0) = (0, -R'(omega x omega), 0) = 0, hence M = T' M_e T, h = T' h_e,
J = J_e T and J_dot nu = J_dot_e nu_e.
"""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from dataclasses import dataclass

import mujoco
import numpy as np

Array = np.ndarray


@dataclass(frozen=True)
class Terms:
    """Everything the engine says about one state."""

    mass_matrix: Array
    bias: Array
    center_of_mass: Array
    center_of_mass_velocity: Array
    momentum: Array
    kinetic_energy: float
    potential_energy: float


def strip(urdf: str) -> str:
    """The URDF without what has no mass, and without joint limits, friction and damping, which are not dynamics terms."""
    root = ElementTree.fromstring(urdf)
    for link in root.findall("link"):
        for tag in ("visual", "collision"):
            for element in link.findall(tag):
                link.remove(element)
    for element in list(root):
        if element.tag not in ("link", "joint"):
            root.remove(element)
    for joint in root.findall("joint"):
        for element in joint.findall("dynamics"):
            joint.remove(element)
    return ElementTree.tostring(root, encoding="unicode")


def quaternion_matrix(q: Array) -> Array:
    """Rotation matrix of a unit quaternion [x, y, z, w]."""
    x, y, z, w = q
    return np.array(
        [
            [1 - 2 * (y * y + z * z), 2 * (x * y - z * w), 2 * (x * z + y * w)],
            [2 * (x * y + z * w), 1 - 2 * (x * x + z * z), 2 * (y * z - x * w)],
            [2 * (x * z - y * w), 2 * (y * z + x * w), 1 - 2 * (x * x + y * y)],
        ]
    )


class Robot:
    """A URDF in the physics engine."""

    def __init__(self, urdf: str, fixed_base: bool = False, gravity: tuple[float, float, float] = (0.0, 0.0, -9.80665), rotor_inertia: dict[str, float] | None = None) -> None:
        spec = mujoco.MjSpec.from_string(strip(urdf))
        spec.compiler.fusestatic = False
        spec.compiler.balanceinertia = False
        spec.compiler.inertiafromgeom = mujoco.mjtInertiaFromGeom.mjINERTIAFROMGEOM_FALSE
        root = spec.worldbody.first_body()
        if not fixed_base:
            root.add_freejoint()
        for name, inertia in (rotor_inertia or {}).items():
            spec.joint(name).armature = inertia
        self.fixed_base = fixed_base
        self.root = root.name
        self.model = spec.compile()
        self.model.opt.gravity[:] = gravity
        # Contacts, limits and passive forces are not wanted: only M, bias and Jacobians are read.
        self.data = mujoco.MjData(self.model)
        document = [j for j in ElementTree.fromstring(urdf).findall("joint") if j.get("type") in ("revolute", "continuous", "prismatic")]
        self.joints = [j.get("name") for j in document]
        ids = [mujoco.mj_name2id(self.model, mujoco.mjtObj.mjOBJ_JOINT, n) for n in self.joints]
        assert min(ids, default=0) >= 0, "a joint is missing in the engine"
        self.offset = 0 if fixed_base else 6
        self._q = np.array([self.model.jnt_qposadr[i] for i in ids], dtype=int)
        dofs = np.array([self.model.jnt_dofadr[i] for i in ids], dtype=int)
        # Engine column of each of our columns.
        self._columns = np.concatenate([np.arange(self.offset), dofs]).astype(int)
        assert self.model.nv == self.offset + len(ids), "a joint is missing in the description"
        self.mass = float(self.model.body_subtreemass[0])

    def body(self, link: str) -> int:
        """Engine number of a link."""
        number = mujoco.mj_name2id(self.model, mujoco.mjtObj.mjOBJ_BODY, link)
        assert number >= 0, f"no link {link}"
        return number

    def set(self, position: Array, orientation: Array, joints: Array, nu: Array) -> None:
        """Takes a state: base position (m) and quaternion [x, y, z, w], joint positions, generalised velocity."""
        d = self.data
        self._turn = quaternion_matrix(orientation)
        if self.fixed_base:
            # The engine welds the base at its own origin; the placement of a fixed base is moved into the model.
            root = self.body(self.root)
            self.model.body_pos[root] = position
            self.model.body_quat[root] = [orientation[3], *orientation[:3]]
        else:
            d.qpos[:3] = position
            d.qpos[3:7] = [orientation[3], *orientation[:3]]
        d.qpos[self._q] = joints
        velocity = np.zeros(self.model.nv)
        velocity[self._columns] = nu
        if not self.fixed_base:
            velocity[3:6] = self._turn.T @ np.asarray(nu)[3:6]
        d.qvel[:] = velocity
        d.qacc[:] = 0.0
        mujoco.mj_fwdPosition(self.model, d)
        mujoco.mj_fwdVelocity(self.model, d)

    def _ours(self, columns: Array) -> Array:
        """Engine columns into ours: reordered, base angular part turned to world axes."""
        out = columns[..., self._columns].copy()
        if not self.fixed_base:
            out[..., 3:6] = out[..., 3:6] @ self._turn.T
        return out

    def mass_matrix(self) -> Array:
        """M."""
        dense = np.zeros((self.model.nv, self.model.nv))
        mujoco.mj_fullM(self.model, self.data, dense)
        half = self._ours(dense)
        return self._ours(half.T).T

    def bias(self) -> Array:
        """h: Coriolis, centrifugal and gravity terms, M nu_dot + h = generalised forces."""
        return self._ours(self.data.qfrc_bias.copy())

    def pose(self, link: str) -> tuple[Array, Array]:
        """Position and rotation matrix of a link frame."""
        b = self.body(link)
        return self.data.xpos[b].copy(), self.data.xmat[b].reshape(3, 3).copy()

    def jacobian(self, link: str, point: Array = np.zeros(3)) -> Array:
        """Jacobian of a point of a link (given in link axes), 6 rows, linear first, world axes."""
        p, r = self.pose(link)
        out = np.zeros((6, self.model.nv))
        mujoco.mj_jac(self.model, self.data, out[:3], out[3:], p + r @ point, self.body(link))
        return self._ours(out)

    def bias_acceleration(self, link: str, point: Array = np.zeros(3)) -> Array:
        """J_dot nu of a point of a link: its acceleration with nu_dot = 0."""
        p, r = self.pose(link)
        out = np.zeros((6, self.model.nv))
        mujoco.mj_jacDot(self.model, self.data, out[:3], out[3:], p + r @ point, self.body(link))
        return out @ self.data.qvel

    def terms(self) -> Terms:
        """Mass matrix, bias, centre of mass, momentum, energies."""
        m, d = self.model, self.data
        mujoco.mj_subtreeVel(m, d)
        mujoco.mj_energyPos(m, d)
        mujoco.mj_energyVel(m, d)
        return Terms(
            mass_matrix=self.mass_matrix(),
            bias=self.bias(),
            center_of_mass=d.subtree_com[0].copy(),
            center_of_mass_velocity=d.subtree_linvel[0].copy(),
            momentum=np.concatenate([self.mass * d.subtree_linvel[0], d.subtree_angmom[0]]),
            kinetic_energy=float(d.energy[1]),
            potential_energy=float(d.energy[0]),
        )


def _number(value: float) -> str:
    return repr(float(value))


def _three(values: Array) -> str:
    return " ".join(_number(v) for v in values)


def random_urdf(rng: np.random.Generator, joints: int, name: str = "random") -> str:
    """A random tree with every joint type, oblique axes, rotated inertias and links of no mass.

    Inertias are those of random solid ellipsoids (a physical tensor by construction), turned by a random rpy.
    """
    links = ["base"]
    text = []
    for i in range(joints + joints // 4):
        links.append(f"link{i}")

    def link(name: str, massless: bool) -> str:
        if massless:
            return f'<link name="{name}"/>'
        mass = rng.uniform(0.3, 6.0)
        a, b, c = rng.uniform(0.03, 0.25, 3) ** 2
        i = mass / 5.0 * np.array([b + c, a + c, a + b])
        # A turned tensor with products of inertia, on top of the rpy of the frame.
        turn = np.linalg.qr(rng.normal(size=(3, 3)))[0]
        tensor = turn @ np.diag(i) @ turn.T
        return (
            f'<link name="{name}"><inertial><origin xyz="{_three(rng.uniform(-0.1, 0.1, 3))}" rpy="{_three(rng.uniform(-3, 3, 3))}"/>'
            f'<mass value="{_number(mass)}"/><inertia ixx="{_number(tensor[0, 0])}" iyy="{_number(tensor[1, 1])}" izz="{_number(tensor[2, 2])}" '
            f'ixy="{_number(tensor[0, 1])}" ixz="{_number(tensor[0, 2])}" iyz="{_number(tensor[1, 2])}"/></inertial></link>'
        )

    kinds = ["revolute", "continuous", "prismatic"]
    fixed = set(rng.choice(np.arange(1, len(links)), size=len(links) - 1 - joints, replace=False).tolist())
    text.append(link("base", False))
    moving = 0
    for i in range(1, len(links)):
        parent = links[max(0, i - 1 - int(rng.integers(0, 4)))]
        kind = "fixed" if i in fixed else kinds[moving % 3]
        text.append(link(links[i], kind == "fixed" and rng.random() < 0.5))
        axis = "" if kind == "fixed" else f'<axis xyz="{_three(rng.normal(size=3))}"/>'
        limit = '<limit lower="-3" upper="3" effort="200" velocity="20"/>' if kind in ("revolute", "prismatic") else ""
        text.append(
            f'<joint name="joint{i}" type="{kind}"><parent link="{parent}"/><child link="{links[i]}"/>'
            f'<origin xyz="{_three(rng.uniform(-0.3, 0.3, 3))}" rpy="{_three(rng.uniform(-3, 3, 3))}"/>{axis}{limit}</joint>'
        )
        moving += kind != "fixed"
    return f'<?xml version="1.0"?>\n<robot name="{name}">\n' + "\n".join(text) + "\n</robot>\n"


@dataclass(frozen=True)
class Sample:
    """A random state."""

    position: Array
    orientation: Array
    joints: Array
    nu: Array


def random_state(rng: np.random.Generator, joints: int, reach: float = 1.5) -> Sample:
    """A random state: any base orientation, joint positions within `reach` (rad or m), speeds of a few units."""
    q = rng.normal(size=4)
    return Sample(rng.uniform(-1, 1, 3), q / np.linalg.norm(q), rng.uniform(-reach, reach, joints), rng.uniform(-2, 2, 6 + joints))
