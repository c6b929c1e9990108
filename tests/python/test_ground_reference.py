"""The quadrature itself, before the service is held against it.

Sources: finite-rotation moments of a rectangle about its centre, My = -k I_pitch sin(theta), and of a hexagonal sole:
derived (quadrature to 1e-13 by another rule).
"""

import numpy as np
from scipy.spatial.transform import Rotation

from ground_reference import Bed

RECTANGLE = np.array([[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]])
HEXAGON = np.array([[0.14, -0.03], [0.14, 0.02], [0.10, 0.05], [-0.08, 0.04], [-0.08, -0.04], [0.08, -0.05]])


def bed(polygon):
    return Bed(polygon, 3e6, 3e6, 1.5e4, 1.5e4, np.zeros(3), np.eye(3))


def test_finite_rotation_is_a_sine():
    turned = Rotation.from_rotvec([0, 0.5, 0]).as_matrix()
    w = bed(RECTANGLE).wrench(np.zeros(3), turned, np.zeros(3), np.zeros(3))
    assert abs(w[4] - -127.62307837643885) < 1e-9


def test_general_motion():
    turned = Rotation.from_rotvec([0.03, -0.05, 0.02]).as_matrix()
    arguments = np.array([0.001, -0.0015, -0.004]), turned, np.array([0.02, -0.01, -0.05]), np.array([0.1, 0.3, -0.2])
    w = bed(RECTANGLE).wrench(*arguments)
    assert np.allclose(w, [-72.6, 102.3, 280.5, -1.6567053241189467, 12.982256316142955, -5.931621908958925], rtol=1e-11, atol=0)
    w = bed(HEXAGON).wrench(*arguments)
    expected = [-60.94654203639363, 58.684077827203666, 163.08291358348845, -1.1454009614464178, 5.523661114485344, -2.872723414026121]
    assert np.allclose(w, expected, rtol=1e-11, atol=0)
