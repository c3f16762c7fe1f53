"""The `sample:` section: what is accepted, what is refused and in which words."""

import pytest
from pydantic import ValidationError

from fitter.sample.settings import SampleSettings

COLUMNS = {"redshift": "z", "distance_modulus": "mu"}


def make(uncertainty=({"sigma": "e"},), **changes):
    return SampleSettings.model_validate({"table": "t.csv", "columns": COLUMNS, "uncertainty": list(uncertainty), **changes})


def refusal(*args, **changes):
    with pytest.raises(ValidationError) as caught:
        make(*args, **changes)
    return caught.value.errors()


def test_everything_round_trips():
    settings = make(
        [
            {"sigma": "e"},
            {"covariance": "c.txt", "label": "calibration"},
            {"modes": "shifts.csv", "use": ["a", 3]},
            {"peculiar_velocity": 250},
            {"lensing": 0.055},
            {"intrinsic": {"uniform": [0, 0.5]}},
            {"zero_point": "group", "sigma": {10: 0.02, "low": 0.01}},
            {"covariance_scale": {"log_uniform": [0.5, 2]}},
        ],
        columns={"redshift": 0, "magnitude": 3, "group": "s", "calibrator_modulus": "h"},
        keep={"redshift": [0.01, None], "group": {"not": [50, 51]}, 7: {"group": {5: [1, 2]}, "others": 3}, "one_per": "name"},
        distance_scale="calibrated",
        missing_values=[-9],
    )
    assert SampleSettings.model_validate(settings.model_dump(by_alias=True)) == settings
    assert SampleSettings.model_validate(settings.model_dump(by_alias=True, exclude_none=True, mode="json")) == settings
    assert settings.intrinsic_prior == {"uniform": [0, 0.5]} and settings.covariance_scale_prior == {"log_uniform": [0.5, 2]}
    assert list(settings.keep.rules) == ["redshift", "group", "7"] and settings.data_kind == "magnitude"
    assert SampleSettings.model_json_schema()["properties"].keys() >= {"table", "columns", "uncertainty", "keep"}


def test_empty_keep_keeps_all():
    assert make(keep=None).keep.rules == {}


@pytest.mark.parametrize(
    ("item", "words"),
    [
        ({"sigmaa": "e"}, "did you mean `sigma`? The terms are"),
        ({"nonsense": 1}, "no uncertainty term is called `nonsense`. The terms are"),
        ({"label": "x"}, "no uncertainty term is called `label`"),
        ({"sigma": "e", "covariance": "c"}, "as two items"),
        ("sigma", "written as a pair"),
    ],
)
def test_items_that_are_no_term(item, words):
    (error,) = refusal([item])
    assert error["loc"] == ("uncertainty", 0) and words in error["msg"]


def test_unknown_keys_have_their_place():
    (error,) = refusal([{"sigma": "e", "lable": "x"}])
    assert error["type"] == "extra_forbidden" and error["loc"] == ("uncertainty", 0, "Sigma", "lable")
    (error,) = refusal(tabel="x")
    assert error["type"] == "extra_forbidden" and error["loc"] == ("tabel",)
    (error,) = refusal(columns={**COLUMNS, "redshfit": "z"})
    assert error["loc"] == ("columns", "redshfit")


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"uncertainty": [{"precision": "p"}, {"sigma": "e"}]}, "a precision stands alone"),
        ({"uncertainty": [{"precision": "p"}, {"covariance": "c"}]}, "a precision stands alone"),
        ({"uncertainty": [{"precision": "p"}, {"precision": "q"}]}, "one precision term only"),
        ({"uncertainty": [{"sigma": "e"}, {"intrinsic": 0.1}, {"intrinsic": 0.2}]}, "one intrinsic term only"),
        ({"uncertainty": [{"intrinsic": {"uniform": [0, 1]}}]}, "nothing fixed says"),
        ({"uncertainty": [{"covariance_scale": 2.0}]}, "nothing fixed says"),
        ({"uncertainty": [{"sigma": "e", "label": "a"}, {"covariance": "c", "label": "a"}]}, "label `a`"),
        ({"uncertainty": [{"sigma": "e"}, {"zero_point": "group", "sigma": 0.1}]}, "needs `group` among the columns"),
        ({"distance_scale": "calibrated"}, "map `calibrator_modulus`"),
        ({"distance_scale": "calibrated", "columns": {**COLUMNS, "calibrator_modulus": "h"}}, "needs magnitudes"),
        ({"columns": {"redshift": "z"}}, "exactly one of"),
        ({"columns": {**COLUMNS, "magnitude": "m"}}, "exactly one of"),
        ({"keep": {"redshift": {"range": [0, 1], "in": [1]}}}, "exactly one of"),
        ({"keep": {"redshift": {"others": [0, 1]}}}, "exactly one of"),
        ({"uncertainty": [{"sigma": "e"}, {"intrinsic": {"uniform": [0, 1], "normal": [0, 1]}}]}, "one name and its numbers"),
    ],
)
def test_what_does_not_go_together(changes, words):
    assert any(words in e["msg"] for e in refusal(**{"uncertainty": [{"sigma": "e"}], **changes}))


@pytest.mark.parametrize("value", [0, -1, float("nan"), float("inf"), "250", True])
@pytest.mark.parametrize("kind", ["peculiar_velocity", "lensing"])
def test_numbers_are_positive_numbers(kind, value):
    assert refusal([{"sigma": "e"}, {kind: value}])


def test_columns_are_names_or_positions():
    for bad in (-1, 1.5, True, "", None):
        assert refusal(columns={**COLUMNS, "redshift": bad})


def test_settings_are_frozen():
    with pytest.raises(ValidationError):
        make().table = "other"
