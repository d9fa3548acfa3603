"""Routes over both sides, second by second."""

from __future__ import annotations

from itertools import permutations

import numpy as np
import pytest

from sampler.route.bound import travel_lower_bound
from sampler.route.machine import Machine, to_machine_frame, travel_seconds
from sampler.route.tour import places, visiting_order
from sampler.route.visit import follow, plan_route

SIZE = (510.0, 515.0)
MACHINE = Machine(settling_s=0.1, read_s=0.5, flip_s=20, load_s=3, unload_s=4)
MACHINES = {"free": MACHINE, "from": Machine(start_mm=(-260.0, -260.0)), "to": Machine(end_mm=(260.0, 100.0)),
            "from to": Machine(start_mm=(0.0, 0.0), end_mm=(0.0, 0.0), origin="lower-left", rotation=90),
            "back first": Machine(start_mm=(-260.0, -260.0), first_side="back", flip_axis="x")}


def test_every_second_by_hand():
    """100 mm in 0.3 s and 50 mm in 0.2 s (Newton's laws), 0.1 s to settle each time."""
    xy = np.array([[0.0, 0.0], [100, 0], [100, 50]])
    route = follow(np.array([0, 1, 2]), xy, MACHINE, SIZE, read_s=np.array([np.nan, 2.0, np.nan]))
    assert route.at_s == pytest.approx([3.0, 3.9, 6.2])
    assert (route.read_s, route.travel_s, route.flip_s, route.handling_s) == pytest.approx((3.0, 0.7, 0.0, 7.0))
    assert route.seconds == pytest.approx(10.7)
    assert route.seconds == pytest.approx(route.at_s[2] + 0.5 + 4)


def test_turning_over_by_hand():
    """The back mark at x = -100 appears at +100, where the last front mark was: no move, one flip."""
    xy = np.array([[0.0, 0.0], [100, 0], [-100, 0]])
    route = plan_route(xy, MACHINE, SIZE, side=np.array(["front", "front", "back"]))
    assert route.order.tolist() == [0, 1, 2]
    assert route.machine_xy_mm.tolist() == [[0, 0], [100, 0], [100, 0]]
    assert (route.travel_s, route.flip_s) == pytest.approx((0.4, 20))
    assert route.at_s == pytest.approx([3.0, 3.9, 24.4])


def quickest(xy, far, machine):
    """By enumeration: the least travel over all orders that turn the panel over at most once, first side first."""
    seen = to_machine_frame(xy, machine, SIZE, far)
    late = far == (machine.first_side == "front")
    best = np.inf
    for order in map(list, permutations(range(len(xy)))):
        if (np.diff(late[order].astype(int)) < 0).any():
            continue
        stands = np.vstack([machine.start_mm or seen[order[0]], seen[order], machine.end_mm or seen[order[-1]]])
        best = min(best, travel_seconds(machine, stands[:-1], stands[1:]).sum())
    return best


@pytest.mark.parametrize("machine", MACHINES.values(), ids=MACHINES)
@pytest.mark.parametrize("n", [1, 2, 5, 6])
def test_quickest_of_all_orders(machine, n, rng):
    for far in (np.zeros(n, bool), np.ones(n, bool), np.arange(n) % 2 == 0, np.arange(n) == n - 1):
        xy = rng.uniform(-250, 250, (n, 2))
        route = plan_route(xy, machine, SIZE, side=np.where(far, "back", "front"))
        assert route.travel_s == pytest.approx(quickest(xy, far, machine))
        assert route.travel_at_least_s <= route.travel_s + 1e-9
        assert route.flip_s == (machine.flip_s if far.any() and not far.all() else 0)


@pytest.mark.parametrize("machine", MACHINES.values(), ids=MACHINES)
def test_sides_one_after_the_other(machine, rng):
    xy, far = rng.uniform(-250, 250, (60, 2)), rng.random(60) < 0.4
    route = plan_route(xy, machine, SIZE, side=np.where(far, "back", "front"))
    late = far[route.order] == (machine.first_side == "front")
    assert sorted(route.order.tolist()) == list(range(60))
    assert (np.diff(late.astype(int)) >= 0).all()
    assert 0 <= route.within_s < 0.02 * route.travel_s
    again = follow(route.order, xy, machine, SIZE, side=np.where(far, "back", "front"))
    assert again.seconds == route.seconds and again.travel_at_least_s == 0


def test_order_of_input_and_seed(rng):
    xy = np.round(rng.uniform(-250, 250, (40, 2)), 0)
    xy[30:] = xy[:10]
    ids = np.array([f"M{k}" for k in range(40)])
    named = ids[plan_route(xy, MACHINE, SIZE, key=ids).order]
    for _ in range(3):
        rows = rng.permutation(40)
        assert (ids[rows][plan_route(xy[rows], MACHINE, SIZE, key=ids[rows]).order] == named).all()
    assert sorted(plan_route(xy, MACHINE, SIZE, seed=2).order.tolist()) == list(range(40))


def test_one_place_and_nowhere():
    route = plan_route(np.zeros((12, 2)), MACHINE, SIZE)
    assert route.order.tolist() == list(range(12))
    assert (route.travel_s, route.travel_at_least_s) == (0, 0)
    both = plan_route(np.zeros((4, 2)), MACHINE, SIZE, side=np.array(["back", "front", "back", "front"]))
    assert both.order.tolist() == [1, 3, 0, 2] and both.flip_s == 20
    none = plan_route(np.zeros((0, 2)), MACHINE, SIZE)
    assert none.seconds == 7 and len(none.order) == 0


def test_places_of_both_sides():
    """Start with the first side, end with the second; the four places come sorted, with one change of side priced."""
    machine = Machine(start_mm=(0.0, 0.0), end_mm=(9.0, 9.0))
    found = places(np.array([[5.0, 5.0], [1, 1], [5, 5], [1, 1]]), machine, np.array([True, False, True, False]))
    assert found.place_of.tolist() == [1, 0, 1, 0]
    assert (found.start, found.end, found.late.tolist()) == (2, 3, [False, True])
    assert ((found.cost > found.crossing) == [[0, 1, 0, 1], [1, 0, 1, 0], [0, 1, 0, 1], [1, 0, 1, 0]]).all()
    assert visiting_order(np.array([[5.0, 5.0], [1, 1]]), machine, late=np.array([True, False])).tolist() == [1, 0]


def test_less_travel_than_more_sites(rng):
    xy = rng.uniform(-250, 250, (30, 2))
    for machine in MACHINES.values():
        assert travel_lower_bound(xy[:20], machine) <= plan_route(xy, machine, (0.0, 0.0), bound=False).travel_s
    assert travel_lower_bound(xy[:0], MACHINE) == 0
