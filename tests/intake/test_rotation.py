"""Rotations: signs on every axis, order, orthogonality, against an independent implementation."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from wakeledger.core.rotation import rotation_matrix

ANGLE = np.radians(3.0)
STREAM = np.array([10.0, 0.0, 0.0])
NOSE = np.array([-1.0, 0.0, 0.0])
STARBOARD = np.array([0.0, 1.0, 0.0])
TOP = np.array([0.0, 0.0, 1.0])


def flow_angles(velocity):
    u, v, w = velocity
    return np.arctan2(w, u), np.arcsin(v / np.linalg.norm(velocity))


def test_pitch_is_nose_up_and_reads_upwash():
    turn = rotation_matrix(ANGLE, 0.0, 0.0)
    np.testing.assert_allclose(turn @ NOSE, [-np.cos(ANGLE), 0, np.sin(ANGLE)], atol=1e-15)
    pitch, yaw = flow_angles(turn.T @ STREAM)
    assert pitch == pytest.approx(ANGLE, rel=1e-13)
    assert yaw == pytest.approx(0.0, abs=1e-15)


def test_yaw_is_nose_to_port_and_reads_flow_to_port():
    turn = rotation_matrix(0.0, ANGLE, 0.0)
    np.testing.assert_allclose(turn @ NOSE, [-np.cos(ANGLE), -np.sin(ANGLE), 0], atol=1e-15)
    pitch, yaw = flow_angles(turn.T @ STREAM)
    assert yaw == pytest.approx(-ANGLE, rel=1e-13)
    assert pitch == pytest.approx(0.0, abs=1e-15)


def test_roll_is_counter_clockwise_from_behind():
    turn = rotation_matrix(0.0, 0.0, ANGLE)
    # Seen from behind starboard is to the right and up is up: counter-clockwise lifts the starboard side.
    np.testing.assert_allclose(turn @ STARBOARD, [0, np.cos(ANGLE), np.sin(ANGLE)], atol=1e-15)
    np.testing.assert_allclose(turn @ TOP, [0, -np.sin(ANGLE), np.cos(ANGLE)], atol=1e-15)
    np.testing.assert_allclose(turn.T @ STREAM, STREAM, atol=1e-15)


def test_order_is_yaw_then_pitch_then_roll_about_turned_axes():
    generator = np.random.default_rng(12)
    pitch, yaw, roll = generator.uniform(-1, 1, (3, 7))
    turn = rotation_matrix(pitch, yaw, roll)
    oracle = Rotation.from_euler("ZYX", np.column_stack([yaw, pitch, roll])).as_matrix()
    np.testing.assert_allclose(turn, oracle, atol=1e-15)
    np.testing.assert_allclose(turn @ turn.swapaxes(-1, -2), np.broadcast_to(np.eye(3), (7, 3, 3)), atol=1e-15)


def test_shapes_broadcast():
    assert rotation_matrix(0.0, 0.0, 0.0).shape == (3, 3)
    assert rotation_matrix(np.zeros((4, 1)), np.zeros(5), 0.0).shape == (4, 5, 3, 3)
    np.testing.assert_array_equal(rotation_matrix(0.0, 0.0, 0.0), np.eye(3))
