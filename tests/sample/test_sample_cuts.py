"""Cuts as data: what each form keeps, in what order it is counted, and what is refused."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitter.errors import InputError, InputErrors
from fitter.sample.cuts import one_per_object
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings

TABLE = """name,survey,z,zh,m,e,host,flag,field
a,low,0.005,0.005,12.0,0.1,31.0,1,x1
b,low,0.03,0.03,16.3,0.2,,0,x1
b,mid,0.03,0.03,16.4,0.1,,0,x2
c,mid,0.2,0.2,20.6,0.1,-9,0,x3
d,50,0.5,0.5,23.0,0.1,,0,x3
e,51,1.1,1.1,25.1,0.3,,1,
f,52,0.3,0.3,21.6,0.1,41.0,0,x4
"""


@pytest.fixture
def load(tmp_path):
    (tmp_path / "t.csv").write_text(TABLE)

    def _load(keep, calibrated=True, group="survey", **changes):
        columns = {"redshift": "z", "redshift_helio": "zh", "magnitude": "m", "calibrator_modulus": "host"}
        columns |= {"group": group} if group else {}
        given = {"table": "t.csv", "columns": columns, "uncertainty": [{"sigma": "e"}], "keep": keep} | changes
        given["distance_scale"] = "calibrated" if calibrated else "relative"
        return Sample.from_config(SampleSettings.model_validate(given), tmp_path)

    return _load


def rows(sample):
    return (sample.row - 1).tolist()


@pytest.mark.parametrize(
    ("keep", "expected"),
    [
        ({}, [1, 2, 3, 4, 5, 6, 7]),
        ({"redshift": [0.01, 0.6]}, [1, 2, 3, 4, 5, 7]),
        ({"redshift": [None, 0.2]}, [1, 2, 3, 4, 7]),
        ({"redshift": [0.2, None]}, [1, 4, 5, 6, 7]),
        ({"redshift": {"not": [0.1, 0.6]}}, [1, 2, 3, 6, 7]),
        ({"redshift": {"range": [0.02, 0.2]}}, [1, 2, 3, 4, 7]),
        ({"redshift": [0.01, 0.6], "calibrators": "too"}, [2, 3, 4, 5, 7]),
        ({"zh": [0.01, 0.6]}, [1, 2, 3, 4, 5, 7]),
        ({"redshift_helio": [0.01, 0.6], "calibrators": "too"}, [2, 3, 4, 5, 7]),
        ({"group": ["low", 50]}, [1, 2, 5]),
        ({"group": {"not": [50, 51]}}, [1, 2, 3, 4, 7]),
        ({"group": ["low", "mid"]}, [1, 2, 3, 4]),
        ({"survey": {"in": ["low"]}}, [1, 2]),
        ({"survey": {"not": ["low", 52]}, "host": {"range": [0, None]}}, None),
        ({"flag": 1}, [1, 6]),
        ({"flag": [1, 5]}, [1, 6]),
        ({"flag": True}, [1, 6]),
        ({"flag": {"in": [0, 1]}}, [1, 2, 3, 4, 5, 6, 7]),
        ({"field": ["x1", "x3"]}, [1, 2, 4, 5]),
        ({"e": [None, 0.1]}, [1, 3, 4, 5, 7]),
        ({2: [0.01, None]}, [1, 2, 3, 4, 5, 6, 7]),
        ({2: [0.01, None], "calibrators": "too"}, [2, 3, 4, 5, 6, 7]),
        ({"magnitude": [None, 20]}, [1, 2, 3]),
        ({"magnitude": {"group": {"low": [None, 13]}}}, [1, 3, 4, 5, 6, 7]),
        ({"redshift": {"group": {"mid": [0.1, None], "low": [0.01, 1]}, "others": [None, 1.0]}}, [1, 2, 4, 5, 7]),
        ({"one_per": "name"}, [1, 3, 4, 5, 6, 7]),
        ({"one_per": "name", "group": {"not": "mid"}}, [1, 2, 5, 6, 7]),
    ],
)
def test_what_is_kept(keep, expected, load):
    if expected is None:
        with pytest.raises(InputError, match="none of the 7"):
            load(keep)
    else:
        assert rows(load(keep)) == expected


def test_calibrators_can_be_dropped_or_are_ordinary_in_a_relative_fit(load):
    assert rows(load({"calibrators": "drop"}, calibrated=False)) == [2, 3, 4, 5, 6]
    assert rows(load({"redshift": [0.01, None]}, calibrated=False)) == [2, 3, 4, 5, 6, 7]


def test_removals_are_counted_in_order(load):
    sample = load({"redshift": [0.1, None], "group": {"not": ["low", 51]}, "one_per": "name"})
    assert list(sample.removed.items()) == [("redshift", 2), ("group", 2), ("one_per name", 0)]
    sample = load({"group": {"not": ["low", 51]}, "redshift": [0.1, None], "one_per": "name"}, calibrated=False)
    assert list(sample.removed.items()) == [("group", 3), ("redshift", 1), ("one_per name", 0)]


def test_a_missing_value_passes_no_range(load):
    assert rows(load({"host": [30, 42]}, calibrated=False)) == [1, 7]


def test_values_that_no_row_has_are_told(load):
    (note,) = load({"group": {"not": ["lwo", 50]}}).warnings
    assert "'lwo'" in note and "Did you mean low?" in note


@pytest.mark.parametrize(
    ("keep", "words"),
    [
        ({"redshift": [1, 0.1]}, "lower end of the range is above"),
        ({"group": ["low", None]}, "cannot hold null"),
        ({"surve": [1, 2]}, "Did you mean survey?"),
        ({"name": "a"}, None),
        ({"distance_modulus": [1, 2]}, "`columns` does not map it"),
        ({"redshift": {"group": {"lwo": [0, 1]}}}, "Did you mean low?"),
        ({"field": [1, None]}, "row 2, column field: this is not a number"),
        ({"redshift": [5, 6], "calibrators": "too"}, r"none of the 7 supernovae of \S+ \(removed by redshift 7\)"),
        ({"one_per": "nam"}, "Did you mean name?"),
    ],
)
def test_what_is_refused(keep, words, load):
    if words is None:  # a raw column that happens to be called like a role is itself
        assert rows(load(keep, calibrated=False)) == [1]
        return
    with pytest.raises(InputError, match=words.replace("?", r"\?")):
        load(keep)


def test_rules_per_group_need_groups(load):
    with pytest.raises(InputError, match="Map `group`"):
        load({"redshift": {"group": {"low": [0, 1]}}}, group=None)


def test_all_problems_at_once(load):
    with pytest.raises(InputErrors) as caught:
        load({"redshift": [1, 0], "surve": 3, "field": [0, 1]})
    assert len(caught.value.errors) == 3


def test_matrices_follow_one_per(load, tmp_path):
    matrix = np.diag(np.full(7, 0.01)) + np.outer(np.arange(7), np.arange(7)) * 1e-3
    np.save(tmp_path / "c.npy", matrix)
    sample = load({"one_per": "name"}, uncertainty=[{"sigma": "e"}, {"covariance": "c.npy"}])
    # With the covariance in it the first of the two rows of b is still the worse one.
    kept = np.array([0, 2, 3, 4, 5, 6])
    np.testing.assert_array_equal(sample.noise.dense, matrix[np.ix_(kept, kept)])
    assert rows(sample) == (kept + 1).tolist()


@given(
    objects=st.lists(st.sampled_from(["", "a", "b", "c"]), min_size=1, max_size=30),
    seed=st.integers(0, 1000),
)
@settings(max_examples=80)
def test_one_per_object(objects, seed):
    objects = np.array(objects, dtype=str)
    variance = np.random.default_rng(seed).integers(1, 4, len(objects)).astype(float)
    mask = one_per_object(objects, variance)
    for word in set(objects):
        here = np.flatnonzero(objects == word)
        if word == "":
            assert mask[here].all()
        else:
            best = here[np.argmin(variance[here])]
            assert mask[best] and mask[here].sum() == 1
