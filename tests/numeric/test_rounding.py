"""Random and controlled rounding: unbiased, near, additive."""

import numpy as np
import pytest
from steadfield.algorithms.numeric.disclosure import Rules
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.rounding import (
    check_base,
    controlled_rounding,
    keyed_uniforms,
    random_rounding,
)


class Forced:
    """Stands in for a random generator: takes given branches and keeps their probabilities."""

    def __init__(self, branches):
        self.branches = list(branches)
        self.taken = []
        self.weight = 1

    def integers(self, whole):
        return _Draw(self, whole)


class _Draw:
    """A draw below `whole` that is compared once with a limit."""

    def __init__(self, forced, whole):
        self.forced, self.whole = forced, whole

    def __lt__(self, limit):
        from fractions import Fraction

        branch = self.forced.branches.pop(0) if self.forced.branches else True
        self.forced.taken.append(branch)
        chance = Fraction(int(limit), int(self.whole))
        self.forced.weight *= chance if branch else 1 - chance
        return branch


def every_outcome(rows, columns, values, base):
    """All roundings with their exact probabilities, by taking every branch."""
    waiting, outcomes = [[]], []
    while waiting:
        prefix = waiting.pop()
        forced = Forced(prefix)
        rounded = controlled_rounding(rows, columns, values, base, forced)
        outcomes.append((forced.weight, rounded))
        for place in range(len(prefix), len(forced.taken)):
            waiting.append([*forced.taken[:place], not forced.taken[place]])
    return outcomes


@pytest.mark.parametrize("base", [3, 5, 10])
def test_random_rounding_is_unbiased_and_never_moves_by_the_base(base):
    values = np.arange(2 * base + 1)
    draws = 100_000
    uniforms = np.random.default_rng(7).random((draws, len(values)))
    rounded = random_rounding(np.broadcast_to(values, uniforms.shape), base, uniforms)
    assert (rounded % base == 0).all()
    assert np.abs(rounded - values).max() < base
    remainder = values % base
    error = np.sqrt(remainder * (base - remainder) / draws)
    assert (np.abs(rounded.mean(0) - values) <= 3 * error + 1e-12).all()


@pytest.mark.parametrize(
    ("shape", "base", "seed"), [((2, 2), 3, 0), ((3, 2), 5, 1), ((2, 3), 10, 2), ((4, 1), 5, 3)]
)
def test_controlled_rounding_has_mean_error_zero_exactly(shape, base, seed):
    values = np.random.default_rng(seed).integers(0, 3 * base, shape)
    rows, columns = (place.ravel() for place in np.indices(shape))
    outcomes = every_outcome(rows, columns, values.ravel(), base)
    assert sum(weight for weight, _ in outcomes) == 1
    mean = sum(weight * rounded.astype(object) for weight, rounded in outcomes)
    assert mean.tolist() == values.ravel().tolist()


@pytest.mark.parametrize("seed", range(20))
def test_controlled_rounding_rounds_every_total_to_a_neighbouring_multiple(seed):
    rng = np.random.default_rng(seed)
    base = int(rng.choice([3, 5, 10]))
    pairs = np.unique(rng.integers(0, [60, 7], (120, 2)), axis=0)
    values = rng.integers(0, 4 * base, len(pairs))
    rounded = controlled_rounding(pairs[:, 0], pairs[:, 1], values, base, rng)
    for members in (np.arange(len(pairs)), pairs[:, 0], pairs[:, 1], np.zeros(len(pairs), int)):
        before, after = np.bincount(members, values), np.bincount(members, rounded)
        assert (after % base == 0).all()
        assert np.abs(after - before).max() < base
        assert (after[before % base == 0] == before[before % base == 0]).all()


def test_controlled_rounding_without_entries_and_of_zeros_stays():
    rng = np.random.default_rng(0)
    empty = np.empty(0, int)
    assert len(controlled_rounding(empty, empty, empty, 5, rng)) == 0
    assert controlled_rounding([0, 1], [0, 0], np.zeros(2), 5, rng).tolist() == [0, 0]


def test_the_same_cell_is_rounded_alike_in_every_release_under_one_key():
    cells, values = np.arange(2000), np.full(2000, 7)
    first = random_rounding(values, 10, keyed_uniforms(5, cells, values))
    again = random_rounding(values[::-1], 10, keyed_uniforms(5, cells[::-1], values))[::-1]
    other = random_rounding(values, 10, keyed_uniforms(6, cells, values))
    assert (first == again).all()
    assert (first != other).any()
    uniforms = keyed_uniforms(5, cells, values)
    assert uniforms.min() >= 0 and uniforms.max() < 1
    # mean and variance of the uniform distribution, within 4 standard errors
    assert abs(uniforms.mean() - 0.5) < 4 / np.sqrt(12 * 2000)


def test_averaging_releases_under_several_keys_would_uncover_a_count():
    values = np.arange(20)
    releases = [
        random_rounding(values, 10, keyed_uniforms(key, np.arange(20), values))
        for key in range(2000)
    ]
    assert np.abs(np.mean(releases, axis=0) - values).max() < 0.5


@pytest.mark.parametrize("base", [1, 2.5, 9])
def test_a_base_that_tells_the_unsafe_from_the_safe_is_refused(base):
    with pytest.raises(InputError, match="ROUNDING_BASE"):
        check_base(base, Rules(10))


def test_controlled_rounding_refuses_what_is_not_whole():
    with pytest.raises(InputError, match="whole numbers"):
        controlled_rounding([0], [0], [1.5], 5, np.random.default_rng(0))
