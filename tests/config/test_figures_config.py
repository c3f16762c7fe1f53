"""The sections `figures:` and `labels:`: what is wrong is found before sampling, and they decide nothing but looks."""

import numpy as np
import pytest

from fitter.api import check, fit
from fitter.config.load import config_from_mapping
from fitter.config.write import as_run, config_hash
from fitter.errors import InputError
from fitter.sample.sample import Sample

Z = np.linspace(0.05, 1, 30)
SAMPLE = Sample.from_arrays(Z, 5 * np.log10(Z * (1 + 0.7 * Z)), sigma=0.1)


def config(**sections):
    return config_from_mapping({"model": "flat_wcdm", **sections}, sample=SAMPLE)


@pytest.mark.parametrize(
    ("sections", "said"),
    [
        ({"figures": {"parameters": ["omega_n"]}}, "no such parameter.*Did you mean `omega_m`"),
        ({"figures": {"mark": {"moon": 1}}}, "no such parameter.*moon"),
        ({"labels": {"moon": "m"}}, "no such parameter.*moon"),
        ({"labels": {"w": r"\nonsense_{x}"}}, "cannot be set"),
        ({"figures": {"style": "nowhere.mplstyle"}}, "style cannot be used"),
    ],
)
def test_problems_are_found_before_sampling(sections, said, monkeypatch):
    monkeypatch.setattr("fitter.inference.sampling.sample_posterior", lambda *a, **k: pytest.fail("sampled"))
    with pytest.raises(InputError, match=said):
        fit(config(**sections), sample=SAMPLE)


@pytest.mark.parametrize(
    ("sections", "said"),
    [
        ({"labels": {"w": "$w$"}}, "dollar"),
        ({"labels": {"w": "w_{x"}}, "braces"),
        ({"labels": {"w": " "}}, "empty"),
        ({"figures": {"only": ["corners"]}}, "corner"),
        ({"figures": {"width": 99}}, "30 inches"),
        ({"figures": {"widht": "single"}}, "width"),
    ],
)
def test_problems_of_the_sections_themselves(sections, said):
    with pytest.raises(InputError, match=said):
        config(**sections)


def test_check_tells_them_with_their_row(tmp_path):
    rows = "\n".join(f"{z},{5 * np.log10(z)},0.1" for z in Z)
    (tmp_path / "t.csv").write_text(f"z,mu,s\n{rows}\n")
    (tmp_path / "c.yaml").write_text(
        "sample: {table: t.csv, columns: {redshift: z, distance_modulus: mu}, uncertainty: [{sigma: s}]}\n"
        "model: flat_lcdm\nfigures:\n  parameters: [omega_m, w]\nlabels: {w: W}\n"
    )
    (problem,) = check(tmp_path / "c.yaml").problems
    assert problem.row == 4 and problem.value == "w"  # the label of a parameter of other models may stay


def test_looks_decide_nothing(tmp_path):
    plain = config()
    (tmp_path / "s.mplstyle").write_text("axes.linewidth: 2\n")
    styled = config(figures={"only": ["hubble"], "style": str(tmp_path / "s.mplstyle")}, labels={"w": "W"})
    settings = [as_run(c, SAMPLE, tmp_path / "run") for c in (plain, styled)]
    assert config_hash(settings[0]) == config_hash(settings[1])
    assert settings[0]["figures"]["only"] == ["corner", "hubble"] and "labels" not in settings[0]
    assert settings[1]["labels"] == {"w": "W"} and settings[1]["figures"]["style"] == str(tmp_path / "s.mplstyle")


def test_one_word_may_stand_for_a_list():
    assert config(figures={"only": "hubble", "formats": "svg"}).figures.only == ["hubble"]
    assert config(figures=None, labels=None).labels == {}
