"""Tours against enumeration, published optima, theorems and an exact solver."""

from __future__ import annotations

from itertools import pairwise, permutations

import numpy as np
import pytest
from known_tours import PUBLISHED, exact_tour, lattice, points, rounded_euclidean

from sampler.route.machine import Machine, travel_seconds
from sampler.route.tour import tour, tour_cost

QUESTIONS = {"closed": {"closed": True}, "closed from": {"closed": True, "start": 2}, "open": {}, "from": {"start": 1},
             "to": {"end": 1}, "from to": {"start": 2, "end": 0}}


def euclidean(xy):
    return np.linalg.norm(xy[:, None] - xy[None], axis=2)


def enumerate_all(cost, start=None, end=None, closed=False):
    orders = np.array(list(permutations(range(len(cost)))))
    if start is not None:
        orders = orders[orders[:, 0] == start]
    if end is not None:
        orders = orders[orders[:, -1] == end]
    length = cost[orders[:, :-1], orders[:, 1:]].sum(axis=1) + (cost[orders[:, -1], orders[:, 0]] if closed else 0)
    return length.min()


def tiny(n):
    """Point sets of n points that have troubled tour searches: spread, one place, a line, two places, a lattice."""
    rng = np.random.default_rng(n)
    return [rng.uniform(size=(n, 2)), np.zeros((n, 2)), np.column_stack([rng.permutation(n), np.zeros(n)]),
            np.eye(2)[rng.integers(0, 2, n)], lattice(3, 3)[:n]]


@pytest.mark.parametrize("question", QUESTIONS.values(), ids=QUESTIONS)
@pytest.mark.parametrize("n", [3, 4, 5, 6, 7, 8])
def test_exhaustive(n, question):
    for xy in tiny(n):
        for cost in (euclidean(xy), travel_seconds(Machine(speed_mm_s=(3, 1), acceleration_mm_s2=(9, 2)), xy[:, None], xy)):
            order = tour(cost, **question, rng=np.random.default_rng(1))
            assert sorted(order.tolist()) == list(range(n))
            assert order[0] == question.get("start", order[0])
            assert order[-1] == question.get("end", order[-1])
            closed = question.get("closed", False)
            assert tour_cost(cost, order, closed) == pytest.approx(enumerate_all(cost, **question), abs=1e-12)


@pytest.mark.parametrize("question", QUESTIONS.values(), ids=QUESTIONS)
def test_exhaustive_nine(question):
    cost = euclidean(np.random.default_rng(99).uniform(size=(9, 2)))
    order = tour(cost, **question, rng=np.random.default_rng(1))
    assert tour_cost(cost, order, question.get("closed", False)) == pytest.approx(enumerate_all(cost, **question))


def test_none_one_two():
    cost = np.array([[0.0, 3.0], [3.0, 0.0]])
    rng = np.random.default_rng(1)
    assert tour(np.zeros((0, 0)), rng=rng).tolist() == []
    assert tour_cost(np.zeros((0, 0)), np.zeros(0, int), closed=True) == 0
    assert tour(cost[:1, :1], start=0, end=0, rng=rng).tolist() == [0]
    assert tour(cost, rng=rng).tolist() == [0, 1]
    assert tour(cost, start=1, rng=rng).tolist() == [1, 0]
    assert tour(cost, end=0, rng=rng).tolist() == [1, 0]
    assert tour(cost, start=1, end=0, rng=rng).tolist() == [1, 0]
    assert tour(cost, start=1, closed=True, rng=rng).tolist() == [1, 0]


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_within_one_percent(name):
    text, optimum = PUBLISHED[name]
    cost = rounded_euclidean(points(text))
    order = tour(cost, closed=True, rng=np.random.default_rng(1))
    assert sorted(order.tolist()) == list(range(len(cost)))
    assert optimum <= tour_cost(cost, order, closed=True) <= 1.01 * optimum


@pytest.mark.parametrize("name", ["berlin52", "eil51", "st70", "eil76"])
def test_published_optimum_confirmed(name):
    text, optimum = PUBLISHED[name]
    assert exact_tour(rounded_euclidean(points(text))) == pytest.approx(optimum)


@pytest.mark.parametrize("shape", [(4, 4), (6, 5), (10, 10), (12, 2)])
def test_lattice_theorem(shape):
    xy = lattice(*shape)
    order = tour(euclidean(xy), closed=True, rng=np.random.default_rng(1))
    assert tour_cost(euclidean(xy), order, closed=True) <= 1.01 * len(xy)
    order = tour(euclidean(xy), rng=np.random.default_rng(1))
    assert tour_cost(euclidean(xy), order) <= 1.01 * (len(xy) - 1)


@pytest.mark.parametrize("question", QUESTIONS.values(), ids=QUESTIONS)
def test_one_place_many_times_ends(question):
    for xy in (np.zeros((40, 2)), np.repeat(lattice(3, 3), 6, axis=0), np.column_stack([np.arange(60.0), np.zeros(60)])):
        order = tour(euclidean(xy), **question, rng=np.random.default_rng(1), iterations=300)
        assert sorted(order.tolist()) == list(range(len(xy)))
    cost = euclidean(np.repeat(lattice(4, 2), 6, axis=0))
    assert tour_cost(cost, tour(cost, closed=True, rng=np.random.default_rng(1)), closed=True) == pytest.approx(8)


def test_line_is_walked_once():
    cost = euclidean(np.column_stack([np.random.default_rng(3).permutation(60), np.zeros(60)]))
    assert tour_cost(cost, tour(cost, rng=np.random.default_rng(1))) == pytest.approx(59)
    assert tour_cost(cost, tour(cost, closed=True, rng=np.random.default_rng(1)), closed=True) == pytest.approx(118)


def test_one_seed_one_answer_and_one_direction(rng):
    cost = euclidean(rng.uniform(size=(30, 2)))
    for question in QUESTIONS.values():
        first = tour(cost, **question, rng=np.random.default_rng(5), iterations=100)
        assert first.tolist() == tour(cost, **question, rng=np.random.default_rng(5), iterations=100).tolist()
    assert tour(cost, rng=np.random.default_rng(5))[0] < tour(cost, rng=np.random.default_rng(5))[-1]
    closed = tour(cost, closed=True, rng=np.random.default_rng(5))
    assert closed[0] == 0 and closed[1] < closed[-1]


def test_more_kicks_never_hurt(rng):
    cost = euclidean(rng.uniform(size=(60, 2)))
    lengths = [tour_cost(cost, tour(cost, closed=True, rng=np.random.default_rng(1), iterations=k), True)
               for k in range(0, 300, 12)]
    assert all(later <= earlier + 1e-9 for earlier, later in pairwise(lengths))
    assert lengths[-1] < lengths[0]


@pytest.mark.parametrize("question", [{"start": 9}, {"end": -1}, {"start": 1, "end": 1}, {"closed": True, "end": 1}])
def test_questions_without_sense(question):
    with pytest.raises(ValueError, match=r"start|end|closed"):
        tour(np.zeros((4, 4)), **question, rng=np.random.default_rng(1))
