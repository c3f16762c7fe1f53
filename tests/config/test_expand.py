"""Variants of a config: what each keeps of the base, changes, and gets wrong."""

import pytest
import yaml

from fitter.config.expand import expand
from fitter.config.load import load_config
from fitter.errors import InputError, InputErrors

BASE = {
    "title": "base",
    "sample": {
        "table": "table.csv",
        "columns": {"redshift": "z", "distance_modulus": "mu"},
        "keep": {"redshift": [0.01, 2]},
        "uncertainty": [{"sigma": "err"}, {"sigma": "err", "label": "more"}, {"lensing": 0.05}],
    },
    "model": "flat_lcdm",
    "parameters": {"omega_m": {"uniform": [0, 1]}, "w": {"uniform": [-2, 0]}},
    "sampling": {"seed": 7},
    "variants": [
        {"name": "a"},
        {"name": "b c", "model": "flat_wcdm", "parameters": {"omega_m": 0.3}},
        {"name": "d", "keep": {"mu": [0, 50]}, "without": ["more", "lensing"], "sampling": {"walkers": 64}},
    ],
}


@pytest.fixture
def variants(tmp_path):
    def make(**changes):
        path = tmp_path / "config.yaml"
        path.write_text(yaml.safe_dump({**BASE, **changes}, sort_keys=False))
        return expand(load_config(path))

    return make


def test_each_variant_is_the_base_with_changes(variants):
    a, b, d = variants()
    assert a.config.parameters == {"omega_m": {"uniform": [0, 1]}}  # w belongs to another variant's model
    assert b.config.parameters == {"omega_m": 0.3, "w": {"uniform": [-2, 0]}}
    assert (a.config.model, b.config.model, d.config.model) == ("flat_lcdm", "flat_wcdm", "flat_lcdm")
    assert list(d.config.sample.keep.rules) == ["redshift", "mu"]
    assert [t.kind for t in d.config.sample.uncertainty] == ["sigma"]
    assert len(d.complete_sample.uncertainty) == 3
    assert d.config.sampling.walkers == 64
    assert b.config.title == "base: b c"
    assert [v.folder for v in (a, b, d)] == ["1_a", "2_b_c", "3_d"]


def test_seeds_differ_and_repeat(variants):
    first, again = ([v.config.sampling.seed for v in variants()] for _ in range(2))
    assert first == again
    assert len(set(first)) == 3
    assert 7 not in first
    other = [v.config.sampling.seed for v in variants(sampling={"seed": 8})]
    assert not set(first) & set(other)
    own = variants(variants=[{"name": "a", "sampling": {"seed": 3}}, {"name": "b", "model": "flat_wcdm"}])
    assert own[0].config.sampling.seed == 3


def test_what_reads_the_same_sample_is_known(variants):
    a, b, d = variants()
    assert a.data_key == b.data_key != d.data_key


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"variants": [{"name": "a"}]}, ["two variants or more"]),
        ({"variants": [{"name": "a"}, {"name": "a"}]}, ["same name", "variants.1.name"]),
        ({"variants": [{"name": "a"}, {"name": "b", "model": "flat_wcmd"}]}, ["flat_wcdm", "variants.1.model"]),
        ({"variants": [{"name": "a"}, {"name": "b", "paramters": {}}]}, ["paramters", "parameters"]),
        ({"variants": [{"name": "a"}, {"name": "b", "parameters": {"q": 1}}]}, ["no such parameter"]),
        ({"variants": [{"name": "a"}, {"name": "b", "without": ["dust"]}]}, ["no uncertainty term has this label", "sigma, more, lensing"]),
        ({"variants": [{"name": "a"}, {"name": "b", "without": ["sigma", "more", "lensing"]}]}, ["no uncertainty term is left"]),
        ({"parameters": {"wa": {"uniform": [-1, 1]}}}, ["no variant has this parameter", "parameters.wa"]),
        ({"compare": {"reference": "z"}}, ["no such variant", "compare.reference"]),
        ({"compare": {"scale": "fisher"}}, ["kass_raftery, jeffreys"]),
    ],
)
def test_what_is_wrong_is_told_with_its_place(variants, changes, words):
    with pytest.raises((InputError, InputErrors)) as error:
        variants(**changes)
    for word in words:
        assert word in str(error.value)
    assert "config.yaml, row" in str(error.value)
