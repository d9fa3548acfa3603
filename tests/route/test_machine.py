"""Move times against Newton's laws, and the machine's frame as an exact change of coordinates."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sampler.errors import InputError
from sampler.route.machine import (
    CORNERS,
    QUARTER_TURNS,
    Machine,
    move_time,
    to_machine_frame,
    to_panel_frame,
    travel_seconds,
)

SIZE = (510.0, 515.0)
FRAMES = [Machine(origin=origin, rotation=rotation, mirrored=mirrored, flip_axis=axis)
          for origin, rotation, mirrored, axis in product(CORNERS, QUARTER_TURNS, (False, True), "xy")]


@pytest.mark.parametrize(("distance", "speed", "acceleration", "seconds"), [
    # The project's table of closed forms for panel grids, `move_time` (Newton's laws).
    (10, 500, 5000, 0.08944271909999159), (50, 500, 5000, 0.2), (100, 500, 5000, 0.3), (510, 500, 5000, 1.12),
    (515, 1000, 9806.65, 0.6169716212977928), (90, 300, 1000, 0.6), (1, 1000, 10000, 0.02)])
def test_move_time_known(distance, speed, acceleration, seconds):
    assert move_time(distance, speed, acceleration) == pytest.approx(seconds, rel=1e-14)
    assert move_time([-distance, 0.0], speed, acceleration).tolist() == pytest.approx([seconds, 0.0], rel=1e-14)


def test_move_time_simulated():
    """The same by integrating the velocity in small steps: full acceleration until the brakes must take over."""
    for distance in (30.0, 200.0):
        speed, acceleration, step = 400.0, 3000.0, 1e-6
        clock = np.arange(0, 2, step)
        seconds = float(move_time(distance, speed, acceleration))
        velocity = np.minimum(np.minimum(acceleration * clock, speed), np.maximum(acceleration * (seconds - clock), 0))
        assert velocity.sum() * step == pytest.approx(distance, rel=1e-4)


coordinate = st.floats(-300, 300)
point = st.tuples(coordinate, coordinate)


@given(point, point, point)
def test_travel_is_a_metric(a, b, c):
    machine = Machine(speed_mm_s=(300, 900), acceleration_mm_s2=(8000, 1500), settling_s=0.04)
    direct = travel_seconds(machine, a, c)
    assert direct <= travel_seconds(machine, a, b) + travel_seconds(machine, b, c) + 1e-12
    assert direct == travel_seconds(machine, c, a)
    assert travel_seconds(machine, a, a) == 0


def test_axes_move_at_once_and_settling_follows():
    machine = Machine(speed_mm_s=(500, 300), acceleration_mm_s2=(5000, 1000), settling_s=0.07)
    assert travel_seconds(machine, [0, 0], [100, 0]) == pytest.approx(0.37)
    assert travel_seconds(machine, [0, 0], [100, 90]) == pytest.approx(0.67)
    assert travel_seconds(machine, np.zeros((3, 1, 2)), np.ones((4, 2))).shape == (3, 4)


@pytest.mark.parametrize("machine", FRAMES, ids=str)
def test_frame_laws(machine, rng):
    """There and back is the identity, lengths stay, and only a mirror or a panel turned over changes handedness."""
    xy = np.round(rng.uniform(-250, 250, (20, 2)), 1)
    far = rng.random(20) < 0.5
    seen = to_machine_frame(xy, machine, SIZE, far)
    np.testing.assert_allclose(to_panel_frame(seen, machine, SIZE, far), xy, atol=1e-12)
    corner = np.multiply(CORNERS[machine.origin], SIZE)
    assert to_machine_frame(corner[None], machine, SIZE).tolist() == [[0.0, 0.0]]
    for side in (False, True):
        triangle = to_machine_frame(np.array([[0.0, 0.0], [1, 0], [0, 1]]), machine, SIZE, np.full(3, side))
        edges = triangle[1:] - triangle[0]
        np.testing.assert_allclose(edges @ edges.T, np.eye(2), atol=1e-12)
        assert np.linalg.det(edges) == pytest.approx(-1 if machine.mirrored != side else 1)


def test_rotations_compose(rng):
    xy = rng.uniform(-200, 200, (5, 2))
    turned = xy
    for rotation in (90, 180, 270, 0):
        turned = to_machine_frame(turned, Machine(rotation=90), SIZE)
        np.testing.assert_allclose(turned, to_machine_frame(xy, Machine(rotation=rotation), SIZE), atol=1e-12)


@pytest.mark.parametrize(("machine", "seen"), [
    (Machine(), [10, 20]),
    (Machine(origin="lower-left"), [265, 277.5]),
    (Machine(origin="upper-right", rotation=180), [245, 237.5]),
    (Machine(origin="upper-left", mirrored=True, rotation=180), [265, 237.5]),  # y down
    (Machine(origin="lower-right", mirrored=True), [245, 277.5]),
    (Machine(rotation=90), [-20, 10])])
def test_frame_by_hand(machine, seen):
    assert to_machine_frame(np.array([[10.0, 20.0]]), machine, SIZE)[0].tolist() == pytest.approx(seen)


def test_far_side_by_hand():
    xy = np.array([[10.0, 20.0]])
    assert to_machine_frame(xy, Machine(flip_axis="y"), SIZE, np.array([True]))[0].tolist() == [-10, 20]
    assert to_machine_frame(xy, Machine(flip_axis="x"), SIZE, np.array([True]))[0].tolist() == [10, -20]


def test_all_faults_at_once():
    with pytest.raises(InputError) as error:
        Machine(speed_mm_s=(0.0, 500.0), acceleration_mm_s2=(np.inf, 1.0), settling_s=-1.0, read_s=np.nan,
                start_mm=(np.nan, 0.0), origin="top", rotation=45, flip_axis="z", first_side="left")
    named = [fault.split()[1] for fault in error.value.faults]
    assert named == ["speed_mm_s", "acceleration_mm_s2", "settling_s", "read_s", "start_mm", "origin", "rotation",
                     "flip_axis", "first_side"]
    assert "0, 90, 180, 270" in error.value.faults[6]
