import pytest
from pydantic import ValidationError

from fitter.errors import InputError
from fitter.inference.settings import DEFAULT_SEED, SamplingSettings


def test_defaults():
    s = SamplingSettings()
    assert (s.replicas, s.walkers, s.target_ess, s.seed) == (4, 128, 10_000, DEFAULT_SEED)


@pytest.mark.parametrize("wrong", [{"walkers": 33}, {"walker": 32}, {"replicas": 0}, {"move": "other"}, {"seed": -1}])
def test_refused(wrong):
    with pytest.raises(ValidationError):
        SamplingSettings(**wrong)


def test_ensemble_must_span_the_parameters():
    SamplingSettings(walkers=8).check_dimension(3)
    with pytest.raises(InputError, match="more than 8 walkers"):
        SamplingSettings(walkers=8).check_dimension(4)
    with pytest.raises(InputError, match="all are fixed"):
        SamplingSettings().check_dimension(0)
