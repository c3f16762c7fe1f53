import numpy as np
import pytest

from fitter.inference.resampling import systematic


@pytest.mark.parametrize("offset", [0.0, 0.5, 0.999999])
def test_each_row_as_often_as_its_weight_says_within_one(offset):
    weight = np.random.default_rng(1).dirichlet(np.full(50, 0.3))
    times = np.bincount(systematic(weight, 700, offset), minlength=50)
    assert times.sum() == 700
    # The count of a row is the number of rungs in an interval as long as its weight.
    assert np.abs(times - 700 * weight).max() < 1 + 1e-9


def test_weights_that_add_up_to_a_little_less_than_one_have_a_row_for_every_rung():
    assert systematic(np.array([0.5, 0.5 - 1e-9]), 10, 1 - 1e-12).max() == 1
