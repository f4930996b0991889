from __future__ import annotations

import numpy as np
import pytest

from seedaudit.space import mni_to_talairach, talairach_to_mni

# CHECKS 10c, column "pooled"
WORKED = {
    (0, 0, 0): (-1.0423, -1.3940, 3.6475),
    (10, 20, 30): (8.1567, 15.1550, 32.1555),
    (10, 20, -30): (8.5887, 19.5110, -21.6465),
    (0, -53, 26): (-1.3832, -53.0804, 22.9761),
    (-38, -22, 56): (-37.0659, -25.8838, 51.8169),
}


def test_worked_coordinates():
    """CHECKS 10c."""
    found = mni_to_talairach(list(WORKED))
    np.testing.assert_allclose(found, list(WORKED.values()), atol=5.1e-5)


def test_a_published_talairach_seed():
    """CHECKS 10c, 16: read as MNI the coordinate would be 5 mm off (coordinate from memory)."""
    found = talairach_to_mni((-5, -49, 40))
    np.testing.assert_allclose(found, (-3.7405, -47.2502, 44.5458), atol=5.1e-5)
    assert np.linalg.norm(found - (-5, -49, 40)) == pytest.approx(5.0, abs=0.1)


def test_round_trip():
    """CHECKS 10c: back to 1e-10."""
    points = np.random.default_rng(0).uniform(-90, 90, (4, 25, 3))
    np.testing.assert_allclose(talairach_to_mni(mni_to_talairach(points)), points, atol=1e-10)


def test_matrix_as_published():
    """CHECKS 10a: determinant, and the mean of the two separate fits within 0.0071."""
    origin = mni_to_talairach((0, 0, 0))
    linear = np.stack([mni_to_talairach(axis) - origin for axis in np.eye(3)], axis=1)
    assert np.linalg.det(linear) == pytest.approx(0.7935604489, abs=1e-9)
    fit_a = [
        [0.9254, 0.0024, -0.0118, -1.0207],
        [-0.0048, 0.9316, -0.0871, -1.7667],
        [0.0152, 0.0883, 0.8924, 4.0926],
    ]
    fit_b = [
        [0.9464, 0.0034, -0.0026, -1.0680],
        [-0.0083, 0.9479, -0.0580, -1.0239],
        [0.0053, 0.0617, 0.9010, 3.1883],
    ]
    mean = (np.array(fit_a) + fit_b) / 2
    assert np.abs(np.column_stack([linear, origin]) - mean).max() <= 0.0071 + 1e-12
