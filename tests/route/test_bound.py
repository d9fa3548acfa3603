"""Bounds on travel never exceed what enumeration or an exact solver finds, and come near it."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from known_tours import PUBLISHED, lattice, points, rounded_euclidean
from test_tour import QUESTIONS, enumerate_all, euclidean, tiny

from sampler.route.bound import site_seconds_lower, tour_lower_bound
from sampler.route.machine import Machine, to_machine_frame, travel_seconds
from sampler.route.tour import tour, tour_cost
from sampler.route.visit import plan_route

SIZE = (510.0, 515.0)


@pytest.mark.parametrize("question", QUESTIONS.values(), ids=QUESTIONS)
@pytest.mark.parametrize("n", [3, 4, 5, 7, 8])
def test_never_above_the_optimum(n, question):
    rng = np.random.default_rng(n)
    for xy in [*tiny(n), rng.uniform(size=(n, 2)), rng.normal(size=(n, 2))]:
        cost = euclidean(xy)
        optimum = enumerate_all(cost, **question)
        assert tour_lower_bound(cost, **question) <= optimum + 1e-12
        assert tour_lower_bound(cost, **question, upper=optimum * 2 + 1) <= optimum + 1e-12


def test_none_one_two():
    cost = np.array([[0.0, 3.0], [3.0, 0.0]])
    assert tour_lower_bound(np.zeros((0, 0))) == tour_lower_bound(cost[:1, :1]) == 0
    assert tour_lower_bound(cost) == tour_lower_bound(cost, start=0, end=1) == 3
    assert tour_lower_bound(cost, closed=True) == 6


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_optimum_from_below(name):
    """The bound of Held and Karp is usually within 1–2 % of the optimum (Johnson & McGeoch 1997)."""
    text, optimum = PUBLISHED[name]
    assert 0.98 * optimum <= tour_lower_bound(rounded_euclidean(points(text)), closed=True) <= optimum + 1e-6


@pytest.mark.parametrize("question", QUESTIONS.values(), ids=QUESTIONS)
def test_near_on_the_machine(question, rng):
    xy = rng.uniform(-250, 250, (50, 2))
    cost = travel_seconds(Machine(speed_mm_s=(300, 700)), xy[:, None], xy)
    upper = tour_cost(cost, tour(cost, **question, rng=rng), question.get("closed", False))
    assert 0.98 * upper <= tour_lower_bound(cost, **question, upper=upper) <= upper


def test_bounds_more_stops_as_well(rng):
    """With the triangle inequality, a bound for some of the stops holds for all tours of more."""
    xy = rng.uniform(-250, 250, (8, 2))
    cost = travel_seconds(Machine(), xy[:, None], xy)
    assert tour_lower_bound(cost[:5, :5]) <= enumerate_all(cost)


MACHINES = {"free": Machine(), "from": Machine(start_mm=(-260.0, -260.0)),
            "from to": Machine(start_mm=(0.0, 0.0), end_mm=(260.0, 0.0), origin="lower-left", rotation=90),
            "uneven": Machine(speed_mm_s=(100.0, 900.0), acceleration_mm_s2=(500.0, 9000.0), end_mm=(0.0, 0.0))}


@pytest.mark.parametrize("machine", MACHINES.values(), ids=MACHINES)
@pytest.mark.parametrize("sides", [1, 2])
def test_site_seconds_below_every_choice(machine, sides, rng):
    """Every subset of seven candidates, each by its quickest order."""
    for xy in (rng.uniform(-250, 250, (7, 2)), np.repeat(rng.uniform(-250, 250, (4, 2)), 2, axis=0)[:7],
               100 * lattice(3, 3)[:7] - 100):
        side = np.where(np.arange(7) % 3 == 0, "back", "front") if sides == 2 else None
        reads = np.where(np.arange(7) % 2, np.nan, 0.2)
        far = side == "back" if sides == 2 else None
        bound = site_seconds_lower(to_machine_frame(xy, machine, SIZE, False if far is None else far), machine, far=far,
                                   read_s=reads)
        for count in range(1, 8):
            for rows in map(list, combinations(range(7), count)):
                route = plan_route(xy[rows], machine, SIZE, side=None if side is None else side[rows], bound=False,
                                   read_s=reads[rows], iterations=20)
                assert bound.constant_s + bound.site_s[rows].sum() <= route.seconds - route.flip_s + 1e-9


def test_site_seconds_tight_on_a_lattice():
    """An even lattice on a machine that starts and ends on its own: every move is the shortest there is."""
    xy = 50.0 * lattice(8, 6)
    machine = Machine(load_s=0, unload_s=0, read_s=0, settling_s=0.1)
    bound = site_seconds_lower(xy, machine)
    assert bound.site_s == pytest.approx(np.full(48, 0.3))
    assert bound.constant_s == pytest.approx(-0.3)
    assert plan_route(xy, machine, (700, 700)).travel_s == pytest.approx(47 * 0.3, rel=0.01)


def test_spacing_raises_the_bound(rng):
    xy = 10.0 * lattice(12, 12)
    machine = Machine(start_mm=(0.0, 0.0))
    plain, apart = site_seconds_lower(xy, machine), site_seconds_lower(xy, machine, spacing_mm=30.0)
    assert (apart.site_s[1:] > plain.site_s[1:]).all()
    for _ in range(20):
        rows: list[int] = []
        for row in rng.permutation(144):
            if all(np.hypot(*(xy[row] - xy[other])) >= 30 for other in rows):
                rows.append(int(row))
        rows = rows[:rng.integers(1, len(rows) + 1)]
        # In a frame with zero at the panel's centre both frames agree.
        route = plan_route(xy[rows], machine, SIZE, bound=False, iterations=20)
        assert apart.constant_s + apart.site_s[rows].sum() <= route.seconds + 1e-9


def test_spacing_holds_along_the_diagonal():
    """Chosen sites one spacing apart at 45°, the quickest direction: both axes move at once."""
    xy, machine = 10.0 * lattice(13, 13), Machine()
    rows = np.arange(0, 169, 28)  # (0, 0), (20, 20), …
    bound = site_seconds_lower(xy, machine, spacing_mm=20 * np.sqrt(2.0))
    route = plan_route(xy[rows], machine, SIZE, bound=False)
    assert bound.constant_s + bound.site_s[rows].sum() == pytest.approx(route.seconds)


def test_cheapest_moves_exact_or_less(rng):
    """Against all pairs, many more candidates than are looked at; on uneven axes the bound may fall short, not pass."""
    xy = np.vstack([rng.uniform(-250, 250, (300, 2)), np.zeros((40, 2))])
    for machine, exact in ((Machine(load_s=0, read_s=0), True), (MACHINES["uneven"], False)):
        cost = travel_seconds(machine, xy[:, None], xy) + np.diag(np.full(len(xy), np.inf))
        if machine.end_mm is not None:
            cost = np.column_stack([cost, travel_seconds(machine, xy, machine.end_mm)])
        true = np.sort(cost, axis=1)[:, :2].sum(axis=1) / 2 + machine.read_s
        bound = site_seconds_lower(xy, machine).site_s
        assert (bound <= true + 1e-12).all()
        if exact:
            assert bound == pytest.approx(true)
        assert bound.sum() > 0.7 * true.sum()


def test_no_candidates_and_one():
    machine = Machine(load_s=3, unload_s=4, read_s=1)
    assert site_seconds_lower(np.zeros((0, 2)), machine).constant_s == 7
    one = site_seconds_lower(np.zeros((1, 2)), machine)
    assert one.site_s.tolist() == [1] and one.constant_s == 7
