"""The sample: from files and arrays, immutable, its hash, its studies, and everything that is refused."""

import dataclasses
import pickle

import numpy as np
import pytest

from fitter.errors import InputError, InputErrors
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings

N = 20
Z = np.linspace(0.05, 1, N)
MU = 43 + 5 * np.log10(Z) + 0.8 * Z
SIGMA = np.linspace(0.1, 0.2, N)


def covariance(seed=0, size=0.1):
    a = np.random.default_rng(seed).normal(size=(N, N))
    return size**2 * (a @ a.T / N + 0.2 * np.eye(N))


@pytest.fixture
def load(tmp_path):
    def _load(columns=None, rows=None, **changes):
        table = rows or {"name": [f"sn{i}" for i in range(N)], "z": Z, "mu": MU, "e": SIGMA}
        lines = [",".join(table), *(",".join(str(v) for v in row) for row in zip(*table.values(), strict=True))]
        (tmp_path / "t.csv").write_text("\n".join(lines) + "\n")
        given = {"table": "t.csv", "columns": columns or {"redshift": "z", "distance_modulus": "mu"}, "uncertainty": [{"sigma": "e"}]}
        return Sample.from_config(SampleSettings.model_validate(given | changes), tmp_path)

    return _load


def table(**changes):
    columns = {"name": [f"sn{i}" for i in range(N)], "z": Z.tolist(), "mu": MU.tolist(), "e": SIGMA.tolist()}
    for name, at in changes.items():
        columns.setdefault(name, [""] * N)
        for row, value in at.items():
            columns[name][row] = value
    return columns


def refusal(load, *args, **changes):
    with pytest.raises(InputError) as caught:
        load(*args, **changes)
    return caught.value


# ------------------------------------------------------------------ made right


def test_from_config_and_from_arrays_agree(load, tmp_path):
    np.save(tmp_path / "c.npy", covariance())
    read = load(uncertainty=[{"sigma": "e"}, {"covariance": "c.npy"}, {"intrinsic": 0.1}])
    made = Sample.from_arrays(Z, MU, sigma=SIGMA, covariance=covariance(), intrinsic=0.1)
    assert read.sha256 == made.sha256
    assert read.labels == ("sigma", "c", "intrinsic") and made.labels == ("sigma", "covariance", "intrinsic")
    assert set(read.sources) == {"t.csv", "c.npy"} and made.sources == {}
    assert read.row.tolist() == list(range(2, N + 2))
    np.testing.assert_array_equal(read.redshift_helio, Z)
    assert not read.is_calibrator.any() and read.n == N and read.group is None


def test_nothing_can_be_changed(load):
    sample = load()
    for key in ("redshift", "redshift_helio", "data", "calibrator_modulus", "row", "is_calibrator"):
        with pytest.raises(ValueError):
            getattr(sample, key)[0] = 1
    with pytest.raises(dataclasses.FrozenInstanceError):
        sample.data = MU


def test_the_callers_arrays_are_copied():
    z, c = Z.copy(), covariance()
    sample = Sample.from_arrays(z, MU, covariance=c)
    z[0], c[0, 0] = 99, 99
    assert sample.redshift[0] == Z[0] and sample.noise.dense[0, 0] < 1


def test_hash_is_of_what_is_fitted():
    base = Sample.from_arrays(Z, MU, sigma=SIGMA)
    assert Sample.from_arrays(Z, MU, sigma=SIGMA, name=[str(i) for i in range(N)]).sha256 == base.sha256
    others = [
        Sample.from_arrays(Z * (1 + 1e-15), MU, sigma=SIGMA),
        Sample.from_arrays(Z, MU, sigma=SIGMA, z_helio=Z + 1e-3),
        Sample.from_arrays(Z, MU + 1e-14, sigma=SIGMA),
        Sample.from_arrays(Z, MU, sigma=SIGMA, intrinsic=0.01),
        Sample.from_arrays(Z, MU, covariance=np.diag(SIGMA**2)),
        Sample.from_arrays(Z, MU, sigma=SIGMA, modes=np.full(N, 0.01)),
        Sample.from_arrays(Z, MU, sigma=SIGMA, distance_scale="absolute"),
    ]
    assert len({base.sha256, *(o.sha256 for o in others)}) == len(others) + 1


def test_pickle(load):
    sample = load()
    again = pickle.loads(pickle.dumps(sample))
    assert again.sha256 == sample.sha256 and again.noise.log_det == sample.noise.log_det


def test_terms_can_be_switched_off():
    sample = Sample.from_arrays(Z, MU, sigma=SIGMA, covariance=covariance(), modes=np.full(N, 0.02))
    assert sample.without("covariance").labels == ("sigma", "modes")
    np.testing.assert_allclose(sample.without(["covariance", "modes"]).noise.covariance(), np.diag(SIGMA**2))
    with pytest.raises(InputError, match=r"no uncertainty term has this label \(found 'cov'\).*sigma, covariance, modes"):
        sample.without("cov")
    with pytest.raises(InputError, match="no uncertainty term"):
        sample.without(sample.labels)


def test_select_marginalises_what_is_left_out():
    sample = Sample.from_arrays(Z, MU, precision=np.linalg.inv(covariance()), group=["a", "b"] * (N // 2))
    mask = Z > 0.5
    some = sample.select(mask)
    np.testing.assert_allclose(some.noise.covariance(), covariance()[np.ix_(mask, mask)], rtol=1e-8)
    assert some.n == mask.sum() and some.group.tolist() == sample.group[mask].tolist()
    np.testing.assert_array_equal(some.row, sample.row[mask])
    np.testing.assert_array_equal(sample.select([5, 2]).redshift, Z[[5, 2]])
    with pytest.raises(InputError, match="leaves no supernova"):
        sample.select(Z > 10)


def test_calibrated_sample(load):
    rows = table(host={0: 33.5, 1: 34.0, 2: -9, 3: "NaN", 4: 0})
    columns = {"redshift": "z", "magnitude": "mu", "calibrator_modulus": "host"}
    sample = load(columns, rows, distance_scale="calibrated")
    assert sample.n_calibrators == 2 and np.isnan(sample.calibrator_modulus[2:]).all()
    relative = load(columns, rows)
    assert relative.n_calibrators == 0
    assert any("2 calibrator rows" in w and "calibrators: drop" in w for w in relative.warnings)


def test_priors_are_carried():
    sample = Sample.from_arrays(Z, MU, sigma=SIGMA, intrinsic={"uniform": [0, 0.5]}, covariance_scale={"log_uniform": [0.5, 2]})
    assert sample.labels == ("sigma",)
    assert sample.intrinsic_prior == {"uniform": [0, 0.5]} and sample.covariance_scale_prior == {"log_uniform": [0.5, 2]}


def test_missing_values_can_be_dropped(load):
    rows = table(z={3: ""}, mu={5: -999}, e={7: "NaN"})
    sample = load(rows=rows, missing="drop", missing_values=[-999])
    assert sample.removed == {"missing": 3} and sample.n == N - 3
    assert sample.row.tolist() == [r for r in range(2, N + 2) if r not in (5, 7, 9)]


# ------------------------------------------------------------------ refused: rows


@pytest.mark.parametrize(
    ("column", "value", "words"),
    [
        ("z", "", "there is no value, but redshift must be"),
        ("z", "inf", "the value is infinite"),
        ("z", 0, "redshift must be above 0"),
        ("z", -0.1, "redshift must be above 0"),
        ("mu", "nan", "there is no value"),
        ("mu", "-inf", "the value is infinite"),
        ("e", -0.1, "an error must be a finite number"),
        ("mu", "x", "this is not a number"),
        ("z", "0,5", None),
    ],
)
def test_bad_value_names_its_place(column, value, words, load):
    rows = table(**{column: {4: value, 9: value}})
    if words is None:  # a decimal comma between commas is one field too many
        error = refusal(load, rows=rows)
        assert error.row == 6 and "this line has 5 fields, the header has 4" in str(error)
        return
    error = refusal(load, rows=rows)
    assert (error.file, error.row, error.column) == ("t.csv", 6, column)
    assert words in str(error) and "in 1 more row" in str(error) and error.cure


def test_bad_rows_that_are_cut_do_not_matter(load):
    assert load(rows=table(z={0: -1}, mu={0: ""}), keep={"redshift": [0.01, None]}).n == N - 1


def test_helio_redshift_is_checked_too(load):
    columns = {"redshift": "z", "redshift_helio": "zh", "distance_modulus": "mu"}
    error = refusal(load, columns, table(zh=dict(enumerate([*Z[:-1], 0.0]))))
    assert (error.row, error.column) == (N + 1, "zh") and "redshift_helio must be above 0" in str(error)


def test_every_problem_in_one_pass(load, tmp_path):
    rows = table(z={1: -1}, mu={2: "x"})
    error = refusal(load, rows=rows, uncertainty=[{"sigma": "err"}, {"covariance": "gone.txt"}, {"modes": "gone.csv"}])
    assert isinstance(error, InputErrors)
    text = str(error)
    for words in ("redshift must be above 0", "not a number", "column err", "gone.txt", "gone.csv"):
        assert words in text
    (tmp_path / "t.csv").unlink()
    settings = SampleSettings.model_validate(
        {
            "table": "tt.csv",
            "columns": {"redshift": "z", "distance_modulus": "mu"},
            "uncertainty": [{"sigma": "e"}, {"covariance": "gone.txt"}],
        }
    )
    with pytest.raises(InputErrors, match=r"(?s)tt\.csv.*gone\.txt"):
        Sample.from_config(settings, tmp_path)


def test_calibrated_without_a_calibrator(load):
    columns = {"redshift": "z", "magnitude": "mu", "calibrator_modulus": "host"}
    error = refusal(load, columns, table(host={0: -9}), distance_scale="calibrated")
    assert error.column == "host" and "at least one row" in str(error)


def test_calibrators_alone_say_nothing(load):
    columns = {"redshift": "z", "magnitude": "mu", "calibrator_modulus": "host"}
    rows = table(host={0: 34.0, 1: 35.0})
    cut = {"redshift": [3, None]}  # calibrators are spared by cuts in redshift
    error = refusal(load, columns, rows, distance_scale="calibrated", keep=cut)
    assert error.column == "host" and "all 2 rows are calibrators" in str(error) and "Widen the cuts" in error.cure


@pytest.mark.parametrize("bad", [{"z": {4: "0,05"}}, {}])
def test_an_unreadable_redshift_is_the_only_problem(load, bad):
    """Rows without it are not said to be missing, nor calibrators to have been cut."""
    columns = {"redshift": "z" if bad else "zcmb", "magnitude": "mu", "calibrator_modulus": "host"}
    error = refusal(load, columns, table(host={0: 34.0}, **bad), distance_scale="calibrated", missing="drop")
    assert error.column == columns["redshift"] and not isinstance(error, InputErrors)


# ------------------------------------------------------------------ refused: duplicates

NAMED = {"name": "name", "redshift": "z", "distance_modulus": "mu"}
GROUPED = NAMED | {"group": "survey"}


def test_one_name_with_differing_values(load):
    rows = table(name={7: "sn3"}, z={7: Z[3]})
    error = refusal(load, NAMED, rows)
    assert (error.row, error.column, error.value) == (9, "name", "sn3")
    assert "first in row 5" in str(error) and f"{MU[3]:g} and {MU[7]:g} mag" in str(error)
    for cure in ("map `group`", "one_per", "duplicates: allow"):
        assert cure in error.cure
    load(rows=rows)  # names are looked at only where a name is mapped
    assert any("more than one row (sn3)" in w for w in load(NAMED, rows, duplicates="allow").warnings)
    assert load(NAMED, rows, keep={"one_per": "name"}).n == N - 1


def test_one_name_in_two_surveys(load):
    rows = table(name={7: "sn3"}, z={7: Z[3] + 0.002}, survey=dict.fromkeys(range(N), "a") | {7: "b"})
    assert any("more than one row (sn3)" in w for w in load(GROUPED, rows).warnings)
    rows["survey"][7] = "a"
    assert "this name occurs twice" in str(refusal(load, GROUPED, rows))
    rows["survey"][7], rows["z"][7] = "b", Z[3] + 0.02
    error = refusal(load, GROUPED, rows)
    assert f"redshift {Z[3]:g} and {Z[3] + 0.02:g}" in str(error) and "map `group`" not in error.cure


def test_one_name_written_in_two_ways(load):
    rows = table(name={3: "SN 2031ab", 7: "2031AB", 8: "1_23", 9: "12_3"})
    (said,) = [w for w in load(NAMED, rows).warnings if "written in two ways" in w]
    assert "Is this one name written in two ways? SN 2031ab and 2031AB." in said


def test_the_same_row_twice_is_told(load):
    rows = table(name={7: "sn3"}, z={7: Z[3]}, mu={7: MU[3]})
    assert any("more than one row" in w for w in load(NAMED, rows).warnings)


@pytest.mark.parametrize("cut", ["mu", "e"])
def test_a_row_that_lacks_a_field(cut, load, tmp_path):
    """One field too few is said as such, and not as the missing value that it makes of the last."""
    rows = [",".join(map(str, row)) for row in zip(*table().values(), strict=True)]
    rows[7] = ",".join(str(v[7]) for k, v in table().items() if k != cut)
    (tmp_path / "ragged.csv").write_text("\n".join(["name,z,mu,e", *rows]) + "\n")
    error = refusal(load, table="ragged.csv")
    assert error.row == 9 and "this line has 3 fields, the header has 4" in str(error)


# ------------------------------------------------------------------ refused: matrices


@pytest.mark.parametrize("size", [N - 1, N + 1])
def test_matrix_of_another_size(size, load, tmp_path):
    np.savetxt(tmp_path / "c.txt", np.eye(size))
    error = refusal(load, uncertainty=[{"sigma": "e"}, {"covariance": "c.txt"}])
    assert error.file == "c.txt" and f"{size} × {size}" in str(error) and f"t.csv has {N} rows" in str(error)


def test_matrix_of_another_size_beside_cuts(load, tmp_path):
    """Whether the matrix of before or after the cuts is expected: either will do, and both sizes are told."""
    np.savetxt(tmp_path / "c.txt", np.eye(N - 3))
    kept = int((Z <= Z[-3]).sum())
    error = refusal(load, uncertainty=[{"sigma": "e"}, {"covariance": "c.txt"}], keep={"redshift": [None, float(Z[-3])]})
    assert f"has {N} rows before the cuts and {kept} after: N must be {N} (" in str(error) and f" or {kept} (" in str(error)


def test_matrix_that_is_not_positive_definite(load, tmp_path):
    bad = covariance()
    bad[5, 5] = -0.5
    np.save(tmp_path / "c.npy", bad)
    error = refusal(load, uncertainty=[{"sigma": "e"}, {"covariance": "c.npy"}], keep={"redshift": [0.08, None]})
    # The first row is cut; the message still counts the rows of the file.
    assert error.file == "c.npy" and error.row == 6 and "smallest eigenvalue is -0.4" in str(error)


def test_row_without_any_error(load):
    error = refusal(load, rows=table(e={6: 0}))
    assert (error.file, error.row) == ("t.csv", 8) and "without any error" in str(error)


def test_errors_that_no_distance_has(load, tmp_path):
    error = refusal(load, rows=table(e={6: 1e-9}))
    assert (error.file, error.row) == ("t.csv", 8) and "an error of 1e-09 mag" in str(error)
    np.save(tmp_path / "c.npy", np.diag([5e-324, *SIGMA[1:] ** 2]))
    error = refusal(load, uncertainty=[{"covariance": "c.npy"}])
    assert error.file == "c.npy" and error.row == 1 and "none is known so well" in str(error)


def test_errors_too_large_to_compute_with(load, tmp_path):
    np.save(tmp_path / "p.npy", np.diag([*SIGMA[:-1] ** -2, 1e-310]))
    error = refusal(load, uncertainty=[{"precision": "p.npy"}])
    assert error.file == "p.npy" and error.row == len(SIGMA) and "tells nothing" in str(error) and "keep" in error.cure


def test_inverse_given_as_a_covariance(load, tmp_path):
    np.save(tmp_path / "p.npy", np.diag(1 / SIGMA**2))
    for terms in ([{"covariance": "p.npy"}], [{"sigma": "e"}, {"covariance": "p.npy"}]):
        error = refusal(load, uncertainty=terms)
        assert error.file == "p.npy" and "this looks like an inverse covariance" in str(error) and "precision" in error.cure
    assert "times the square of the sigma column it is 1" in str(error)
    load(uncertainty=[{"precision": "p.npy"}])


def test_inverse_of_large_errors_beside_its_sigma(load, tmp_path):
    """Errors of 0.8 mag: the size alone would not tell, the product with σ² does."""
    rows = table(e=dict.fromkeys(range(N), 0.55))
    np.save(tmp_path / "p.npy", np.eye(N) / 0.55**2)
    assert "inverse covariance" in str(refusal(load, rows=rows, uncertainty=[{"sigma": "e"}, {"covariance": "p.npy"}]))


def test_covariance_given_as_an_inverse(load, tmp_path):
    np.save(tmp_path / "c.npy", np.diag(SIGMA**2))
    error = refusal(load, uncertainty=[{"precision": "c.npy"}])
    assert error.file == "c.npy" and "this looks like a covariance, not its inverse" in str(error) and "{covariance: FILE}" in error.cure
    with pytest.raises(InputError, match="looks like a covariance"):
        Sample.from_arrays(Z, MU, precision=np.diag(SIGMA**2))


# ------------------------------------------------------------------ refused: arrays


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"z": Z[:-1]}, "z must have one number per supernova: it has 19, and mu 20"),
        ({"z": np.ones((N, 2))}, r"z must have one axis, a number per supernova \(found \(20, 2\)\)"),
        ({"mu": ["x"] * N}, "mu must be an array of numbers"),
        ({"mu": []}, "there are no supernovae"),
        ({"z": np.where(Z > 0.5, np.nan, Z)}, "row 11, column z: there is no value.*in 9 more rows"),
        ({"z": Z - 0.05}, "row 1, column z: redshift must be above 0"),
        ({"sigma": SIGMA[:3]}, "sigma must have one number per supernova: it has 3, and mu 20"),
        ({"sigma": -0.1}, "row 1, column sigma: an error must be"),
        ({"covariance": np.eye(3)}, "the covariance is 3 × 3, but there are 20 supernovae"),
        ({"covariance": np.triu(np.ones((N, N)))}, "the covariance is not symmetric"),
        ({"covariance": np.full((N, N), np.nan)}, "row 1, column 1: the covariance holds a value"),
        ({"precision": np.eye(N)}, "a precision stands alone"),
        ({"sigma": None}, "no uncertainty term.*Give covariance, precision or sigma"),
        ({"modes": np.ones((3, 2))}, "modes must be finite numbers, one row per supernova"),
        ({"distance_scale": "relativ"}, "distance_scale must be one of relative"),
        ({"data_kind": "mag"}, "data_kind must be one of"),
        ({"group": ["a"]}, "group must have one value per supernova"),
    ],
)
def test_bad_arrays(changes, words):
    given = {"z": Z, "mu": MU, "sigma": SIGMA} | changes
    with pytest.raises(InputError, match=words):
        Sample.from_arrays(**given)


def test_a_sample_is_shown_in_one_line():
    sample = Sample.from_arrays(Z, MU, sigma=SIGMA, intrinsic=0.1)
    shown = f"Sample(20 supernovae, {Z.min():.3g} ≤ z ≤ {Z.max():.3g}, distance modulus, relative scale, uncertainties: sigma, intrinsic)"
    assert repr(sample) == shown


def test_constant_sigma():
    np.testing.assert_allclose(Sample.from_arrays(Z, MU, sigma=0.15).noise.variance, 0.0225)
