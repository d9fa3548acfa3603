"""Contradictory rules are found, and the smallest group is named; against enumeration of every 0/1 choice."""

from __future__ import annotations

from itertools import combinations, product

import numpy as np
import pytest

from sampler.optimise.contradiction import counting, smallest_contradiction


def random_statements(rng, n=6):
    statements = []
    for number in range(rng.integers(2, 7)):
        members = rng.permutation(n)[:rng.integers(1, n + 1)]
        lower = int(rng.integers(0, len(members) + 1))
        upper = int(rng.integers(lower, len(members) + 2)) if rng.random() < 0.8 else np.inf
        statements.append(counting(f"rule {number}", members, n, lower, upper))
    return statements


def satisfiable(statements, group, n=6):
    choices = np.array(list(product([0, 1], repeat=n)))
    holds = np.ones(len(choices), bool)
    for index in group:
        sums = choices @ statements[index].rows.toarray().T
        holds &= ((sums >= statements[index].lower) & (sums <= statements[index].upper)).all(axis=1)
    return holds.any()


def test_against_enumeration(rng):
    contradictions = 0
    for _ in range(150):
        statements = random_statements(rng)
        found = smallest_contradiction(statements)
        everything = range(len(statements))
        if satisfiable(statements, everything):
            assert found is None
            continue
        contradictions += 1
        smallest = next(size for size in range(1, len(statements) + 1)
                        if any(not satisfiable(statements, group) for group in combinations(everything, size)))
        assert len(found) == smallest
        assert not satisfiable(statements, found)
    assert contradictions > 30


def test_many_rules_give_an_irreducible_group():
    n = 200
    statements = [counting(f"at most one of pair {i}", np.array([2 * i, 2 * i + 1]), n, 0, 1) for i in range(100)]
    statements += [counting("at least 101", np.arange(n), n, 101, np.inf)]
    found = smallest_contradiction(statements)
    assert len(found) == 101  # dropping any pair's rule lets both of it be chosen


def test_nothing_to_contradict():
    assert smallest_contradiction([]) is None


def test_a_rule_on_no_site():
    empty = counting("at least one in an empty cell", np.zeros(0, np.int64), 3, 1, np.inf)
    assert smallest_contradiction([empty]) == (0,)


@pytest.mark.parametrize("upper", [1, 2])
def test_required_and_at_most(upper):
    statements = [counting("required A", np.array([0]), 3, 1, 1), counting("required B", np.array([1]), 3, 1, 1),
                  counting("at most", np.array([0, 1, 2]), 3, 0, upper)]
    assert smallest_contradiction(statements) == ((0, 1, 2) if upper == 1 else None)
