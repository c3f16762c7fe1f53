import numpy as np

from fitter.inference.seeds import child_seed, random_state


def test_the_random_state_is_that_of_a_twister_seeded_alike():
    seed = np.random.SeedSequence(11)
    ours = np.random.RandomState(0)
    ours.set_state(random_state(child_seed(seed, 3)))
    theirs = np.random.RandomState(np.random.MT19937(child_seed(seed, 3)))
    assert np.array_equal(ours.random_sample(1000), theirs.random_sample(1000))
    assert np.array_equal(ours.standard_normal(7), theirs.standard_normal(7))


def test_a_child_depends_on_its_key_alone():
    seed = np.random.SeedSequence(11)
    first = child_seed(seed, 1).generate_state(4)
    child_seed(seed, 2)
    assert np.array_equal(child_seed(seed, 1).generate_state(4), first)
    assert not np.array_equal(child_seed(seed, 2).generate_state(4), first)
