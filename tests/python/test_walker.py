"""The invented robot of the checks stands as it is meant to."""

import numpy as np

from cases import walker_stance


def test_soles_lie_flat_and_carry_the_centre_of_mass():
    stance = walker_stance()
    soles = stance.soles()
    for position, rotation, *_ in soles:
        assert abs(position[2]) < 1e-12
        assert np.allclose(rotation, np.eye(3), atol=1e-12)
    centre = stance.robot.terms().center_of_mass
    assert abs(centre[1]) < 1e-9 and -0.05 < centre[0] - soles[0][0][0] < 0.08
    assert 36 < stance.robot.mass < 42
