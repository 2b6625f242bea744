"""The practice district, whose true risk is known, under many zonings of its base units."""

import numpy as np
import pytest
from steadfield.algorithms.numeric.contiguity import contiguity
from steadfield.algorithms.numeric.practice import make_district
from steadfield.algorithms.numeric.scenarios import problem
from steadfield.algorithms.numeric.zones import recipes, simulate


@pytest.fixture(scope="module")
def district():
    return make_district(1)


@pytest.fixture(scope="module")
def verdicts(district):
    made = problem(
        contiguity(district.units.polygons), district.units.falls, district.units.residents
    )
    plan = recipes(made, "grown", [30, 50, 82, 136, 225], np.random.default_rng(0))
    return simulate(made, plan, 100, 1).verdicts()


def test_the_true_area_that_straddles_a_border_holds(district, verdicts):
    raised = district.units.true_risk > 1.6 * np.median(district.units.true_risk)
    straddles = raised & np.isin(district.units.ward, district.wards.straddled)
    assert len(set(district.units.ward[straddles])) == 2
    assert np.average(verdicts[straddles] == 1, weights=district.units.residents[straddles]) > 0.5


def test_the_ward_that_is_highest_by_small_numbers_does_not_hold(district, verdicts):
    wards = district.wards
    assert np.argmax(wards.falls / wards.residents) == wards.small
    assert not (verdicts[district.units.ward == wards.small] == 1).any()


def test_hardly_anything_holds_where_the_true_risk_is_not_raised(district, verdicts):
    plain = district.units.true_risk < 1.05 * np.median(district.units.true_risk)
    assert np.mean(verdicts[plain] != 0) < 0.05
