"""Units matched across sortings: coincidences by brute force, groups by hand."""

import itertools

import numpy as np
import pytest
from scipy.optimize import linear_sum_assignment

from odograph.provenance.compare.match import TOLERANCE_S, Relation, coincidences, match_units


@pytest.mark.parametrize("seed", range(30))
def test_coincidences_are_a_largest_matching(seed):
    """scipy's assignment on the matrix of which spikes are near enough; windows overlap."""
    rng = np.random.default_rng(seed)
    a, b = np.sort(rng.uniform(0, 1, 25)), np.sort(rng.uniform(0, 1, 30))
    near = np.abs(a[:, None] - b) <= 0.03
    rows, columns = linear_sum_assignment(-near.astype(float))
    assert coincidences(a, b, 0.03) == int(near[rows, columns].sum())
    assert coincidences(b, a, 0.03) == coincidences(a, b, 0.03)


def test_coincidences_by_hand():
    a, b = np.array([0.0, 1.0, 1.0004, 2.0]), np.array([0.0005, 1.0002, 2.001])
    assert coincidences(a, b) == 2  # one spike of b near two of a counts once; 1 ms is too far
    assert coincidences(a, np.empty(0)) == 0


def train(rng, n=400):
    return np.sort(rng.uniform(0, 600, n))


@pytest.fixture
def sortings():
    """Six units; in the second sorting 1 and 2 are merged, 3 is split, 4 changed in part, 5 lost, 9 new."""
    rng = np.random.default_rng(3)
    before = {unit: train(rng) for unit in range(1, 7)}
    half = rng.random(400) < 0.5
    after = {
        7: np.sort(np.concatenate([before[1], before[2]])) + 0.0002,
        8: before[3][half],
        10: before[3][~half],
        4: np.sort(np.concatenate([before[4][:380], train(rng, 20)])),
        6: before[6],
        9: train(rng),
    }
    return before, after


def test_what_became_of_each_unit(sortings):
    found = match_units(*sortings)
    assert [(one.kind, one.before, one.after) for one in found] == [
        ("same", (6,), (6,)),
        ("changed", (4,), (4,)),
        ("merged", (1, 2), (7,)),
        ("split", (3,), (8, 10)),
        ("lost", (5,), ()),
        ("new", (), (9,)),
    ]
    assert {one.kind: one.shared for one in found}["merged"] >= 795
    assert {one.kind: one.shared for one in found}["changed"] >= 380


def test_the_order_of_units_does_not_matter(sortings):
    before, after = sortings
    expected = match_units(before, after)
    for one, other in itertools.islice(itertools.product(permuted(before), permuted(after)), 4):
        assert match_units(one, other) == expected


def permuted(units):
    yield dict(reversed(units.items()))
    yield dict(sorted(units.items(), key=lambda item: -len(item[1]) - item[0] % 3))


def test_renumbered_units_are_the_same(sortings):
    before, _ = sortings
    after = {unit + 100: spikes for unit, spikes in before.items()}
    assert match_units(before, after) == [
        Relation("same", (unit,), (unit + 100,), 400) for unit in sorted(before)
    ]


def test_a_busy_unit_does_not_swallow_a_quiet_one():
    """60 Hz against 1 Hz: by chance one in 17 spikes of the quiet one lies within half a millisecond."""
    rng = np.random.default_rng(1)
    quiet, busy = train(rng, 600), train(rng, 36_000)
    shared = coincidences(quiet, busy)
    assert 0.02 < shared / 600 < 0.1 and TOLERANCE_S == 0.0005
    kinds = [one.kind for one in match_units({1: quiet, 2: busy}, {1: quiet, 2: busy})]
    assert kinds == ["same", "same"]


def test_two_that_exchange_spikes_are_rearranged():
    rng = np.random.default_rng(2)
    a, b = train(rng), train(rng)
    after = {3: np.sort(np.concatenate([a[:200], b[:200]])), 4: np.sort(np.concatenate([a[200:], b[200:]]))}
    (found,) = match_units({1: a, 2: b}, after)
    assert (found.kind, found.before, found.after) == ("rearranged", (1, 2), (3, 4))


def test_nothing_to_match():
    assert match_units({}, {}) == []
    assert match_units({1: np.array([1.0])}, {}) == [Relation("lost", (1,), (), 0)]
