"""The cutter axis from lead and lean, and the tip from the contact."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast.cutter import Cutter
from anticlast.passes.tilt import (
    angle_between,
    lead_and_lean,
    reference_from_contact,
    tip_from_contact,
    turned_between,
    wished_axis,
)

NANO = 1e-9
UP, AHEAD = np.array([[0.0, 0.0, 1.0]]), np.array([[1.0, 0.0, 0.0]])
BALL = Cutter(1, "ball", 3.0, 3.0, 2, 18.0, 3.0, 30.0)
BULL = Cutter(2, "bull", 5.0, 1.0, 4, 18.0, 5.0, 30.0)
FLAT = Cutter(3, "flat", 5.0, 0.0, 4, 18.0, 5.0, 30.0)


def frames(seed: int, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Random normals with a random tangent square to each."""
    rng = np.random.default_rng(seed)
    normal = rng.normal(size=(count, 3))
    normal /= np.linalg.norm(normal, axis=1, keepdims=True)
    tangent = np.cross(normal, rng.normal(size=(count, 3)))
    return normal, tangent / np.linalg.norm(tangent, axis=1, keepdims=True)


def test_lead_leans_toward_the_feed_and_lean_to_its_left():
    # Signs as the job file defines them: feed along +X on a flat, left is +Y.
    lead = wished_axis(UP, AHEAD, math.radians(15.0), 0.0)[0]
    assert lead == pytest.approx([math.sin(math.radians(15.0)), 0.0, math.cos(math.radians(15.0))], abs=NANO)
    lean = wished_axis(UP, AHEAD, 0.0, math.radians(10.0))[0]
    assert lean == pytest.approx([0.0, math.sin(math.radians(10.0)), math.cos(math.radians(10.0))], abs=NANO)


@settings(derandomize=True, max_examples=50, deadline=None)
@given(st.floats(-80.0, 80.0), st.floats(-80.0, 80.0), st.integers(0, 10_000))
def test_views_from_the_side_and_along_the_feed_show_lead_and_lean(lead, lean, seed):
    normal, tangent = frames(seed, 4)
    axis = wished_axis(normal, tangent, math.radians(lead), math.radians(lean))
    left = np.cross(normal, tangent)
    side_view = np.degrees(np.arctan2((axis * tangent).sum(1), (axis * normal).sum(1)))
    front_view = np.degrees(np.arctan2((axis * left).sum(1), (axis * normal).sum(1)))
    assert np.abs(side_view - lead).max() < NANO
    assert np.abs(front_view - lean).max() < NANO
    assert np.abs(np.linalg.norm(axis, axis=1) - 1.0).max() < NANO
    back = lead_and_lean(axis, normal, tangent)
    assert np.degrees(back[0]) == pytest.approx(lead, abs=NANO)
    assert np.degrees(back[1]) == pytest.approx(lean, abs=NANO)


def test_whole_tilt_follows_from_both_angles():
    # 1/cos^2 = 1 + tan^2 + tan^2: length of n + tan(lead) t + tan(lean) b, derived here.
    normal, tangent = frames(3, 20)
    axis = wished_axis(normal, tangent, 0.4, -0.7)
    whole = 1.0 / (axis * normal).sum(1) ** 2
    assert whole == pytest.approx(1.0 + math.tan(0.4) ** 2 + math.tan(0.7) ** 2, abs=NANO)


def test_axis_in_the_surface_is_refused():
    with pytest.raises(ValueError, match="below 90 degrees"):
        wished_axis(UP, AHEAD, math.pi / 2, 0.0)


@pytest.mark.parametrize("cutter", [BALL, BULL, FLAT])
def test_the_placed_cutter_touches_the_tangent_plane_at_the_contact_only(cutter):
    # Outside truth: the corner arc's circle sampled as points, spheres of the corner radius about them.
    normal, tangent = frames(5, 12)
    rng = np.random.default_rng(6)
    contact = rng.uniform(-20.0, 20.0, (12, 3))
    axis = wished_axis(normal, tangent, rng.uniform(-1.0, 1.0, 12), rng.uniform(-1.0, 1.0, 12))
    tip = tip_from_contact(contact, normal, axis, cutter, 0.2)
    across = np.cross(axis, tangent)
    across /= np.linalg.norm(across, axis=1, keepdims=True)
    other = np.cross(across, axis)
    turn = np.linspace(0.0, 2.0 * math.pi, 20001)
    out = cutter.radius_mm - cutter.corner_radius_mm
    for i in range(12):
        ring = tip[i] + cutter.corner_radius_mm * axis[i]
        ring = ring + out * (np.cos(turn)[:, None] * across[i] + np.sin(turn)[:, None] * other[i])
        height = (ring - contact[i]) @ normal[i] - cutter.corner_radius_mm
        assert height.min() == pytest.approx(0.2, abs=1e-6)
        lowest = ring[height.argmin()] - cutter.corner_radius_mm * normal[i]
        assert np.linalg.norm(lowest - contact[i] - 0.2 * normal[i]) < 2.0 * math.pi * 5.0 / 20000


def test_ball_centre_does_not_depend_on_the_axis():
    normal, tangent = frames(8, 10)
    contact = np.zeros((10, 3))
    for lead in (0.0, 0.3, -1.0):
        axis = wished_axis(normal, tangent, lead, 0.2)
        centre = tip_from_contact(contact, normal, axis, BALL) + 3.0 * axis
        assert np.abs(centre - 3.0 * normal).max() < NANO


def test_flat_end_mill_standing_on_the_normal_is_centred_over_the_contact():
    reference = reference_from_contact(np.zeros((1, 3)), UP, UP, FLAT, 0.0)
    assert np.abs(reference).max() < NANO


def test_turn_between_axes_is_even_and_stays_in_their_plane():
    start, end = frames(11, 30)
    whole = angle_between(start, end)
    for fraction in (0.0, 0.25, 0.6, 1.0):
        part = turned_between(start, end, np.full(30, fraction))
        assert angle_between(start, part) == pytest.approx(fraction * whole, abs=NANO)
        assert np.abs((part * np.cross(start, end)).sum(1)).max() < NANO
    same = turned_between(start, start, np.full(30, 0.5))
    assert np.abs(same - start).max() < NANO


def test_small_angles_are_measured_without_loss():
    tilted = np.array([[math.sin(1e-9), 0.0, math.cos(1e-9)]])
    assert angle_between(UP, tilted)[0] == pytest.approx(1e-9, rel=1e-6)
