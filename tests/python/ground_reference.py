"""The bonded ground law by quadrature, independent of the service's closed form.

At sole point r: p = o + R r, p0 = o0 + R0 r, traction rho = K (p0 - p) - B (p_dot - p0_dot) per unit area, with
K = k_t (I - n n') + k_n n n'. Force and moment about the sole origin are the integrals of rho and (R r) x rho.
Both integrands are polynomials of degree two at most in r, so the three edge midpoints of each triangle of a fan
integrate them exactly (the classical degree-two rule of a triangle).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

Array = np.ndarray


def quadrature(polygon: Array) -> tuple[Array, Array]:
    """Points (n, 3) and weights (n) that integrate quadratics over a convex polygon in the plane z = 0."""
    points, weights = [], []
    a = np.asarray(polygon[0], float)
    for b, c in zip(polygon[1:-1], polygon[2:]):
        b, c = np.asarray(b, float), np.asarray(c, float)
        area = 0.5 * ((b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]))
        for p, q in ((a, b), (b, c), (c, a)):
            points.append([*(p + q) / 2, 0.0])
            weights.append(area / 3)
    return np.array(points), np.array(weights)


@dataclass
class Bed:
    """Bonded ground under one sole polygon; stiffness in N/m^3, damping in N s/m^3."""

    polygon: Array
    normal_stiffness: float
    tangential_stiffness: float
    normal_damping: float
    tangential_damping: float
    rest_position: Array
    rest_rotation: Array
    normal: Array = field(default_factory=lambda: np.array([0.0, 0.0, 1.0]))

    def __post_init__(self) -> None:
        self.points, self.weights = quadrature(self.polygon)
        n = np.outer(self.normal, self.normal)
        self.k = self.tangential_stiffness * (np.eye(3) - n) + self.normal_stiffness * n
        self.b = self.tangential_damping * (np.eye(3) - n) + self.normal_damping * n

    def wrench(self, position: Array, rotation: Array, linear: Array, angular: Array) -> Array:
        """Force and moment about the sole origin that the ground exerts on the sole, world axes."""
        arm = self.points @ rotation.T
        gap = (self.rest_position + self.points @ self.rest_rotation.T) - (position + arm)
        speed = linear + np.cross(angular, arm)
        traction = gap @ self.k - speed @ self.b
        force = self.weights @ traction
        moment = self.weights @ np.cross(arm, traction)
        return np.concatenate([force, moment])
