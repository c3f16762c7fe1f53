"""Each uncertainty term against its own formula."""

from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad

from fitter.errors import InputError
from fitter.sample.uncertainty import KINDS
from fitter.sample.uncertainty.base import Rows
from fitter.sample.uncertainty.peculiar_velocity import FIDUCIAL_OMEGA_M, modulus_slope
from fitter.sample.uncertainty.term import Term, combine, unique_labels

Z = np.array([0.01, 0.023, 0.05, 0.1, 1.0])


@pytest.fixture
def rows(tmp_path):
    columns = {"e": np.array([0.1, 0.2, 0.3, 0.4, 0.5]), "a": np.linspace(-0.1, 0.1, 5), "b": np.full(5, 0.01)}

    def make(keep=(1, 1, 1, 1, 1), **changed):
        return Rows(
            n=5,
            redshift=Z,
            numbers=lambda ref: changed.get(ref, columns.get(ref)),
            texts=lambda ref: np.array(["low", "low", "mid", "mid", "high"]),
            lines=np.arange(2, 7),
            keep=np.array(keep, dtype=bool),
            folder=Path(tmp_path),
            table="t.csv",
        )

    return make


def build(rows, **item):
    kind = next(k for k in KINDS if k in item)
    return KINDS[kind].model_validate(item).build(rows)


def test_sigma(rows):
    term = build(rows(keep=(1, 0, 1, 1, 0)), sigma="e")
    np.testing.assert_allclose(term.noise.variance, [0.01, 0.09, 0.16])
    assert (term.label, term.kind) == ("sigma", "sigma") and term.noise.source_rows.tolist() == [2, 4, 5]
    assert build(rows(), sigma="e", label="stat").label == "stat"


@pytest.mark.parametrize("bad", [-0.1, np.nan, np.inf])
def test_sigma_that_is_none(bad, rows):
    column = np.array([0.1, 0.1, bad, 0.1, bad])
    with pytest.raises(InputError) as caught:
        build(rows(e=column), sigma="e")
    error = caught.value
    assert (error.file, error.row, error.column) == ("t.csv", 4, "e") and "in 1 more row" in str(error)
    build(rows(keep=(1, 1, 0, 1, 0), e=column), sigma="e")  # cut rows do not matter


def test_peculiar_velocity_is_the_derivative():
    """Against a quadrature of every distance and a numerical derivative of ln D_M."""

    def distance(z):
        return quad(lambda x: (FIDUCIAL_OMEGA_M * (1 + x) ** 3 + 1 - FIDUCIAL_OMEGA_M) ** -0.5, 0, z, epsabs=0, epsrel=1e-13)[0]

    for z in (0.001, 0.1, 1.0, 2.3):
        h = 1e-4 * z
        slope = 5 * (np.log10(distance(z + h)) - np.log10(distance(z - h))) / (2 * h)
        assert modulus_slope(np.array([z]))[0] == pytest.approx(slope, rel=1e-7)


def test_peculiar_velocity_has_the_usual_limit(rows):
    term = build(rows(), peculiar_velocity=250)
    # 5/ln 10 σ_v/(c z): 0.181, 0.0787, 0.0362, 0.0181 mag; the exact derivative departs from it by a term of order z.
    usual = np.array([0.181, 0.0787, 0.0362, 0.0181])
    assert np.all(np.abs(np.sqrt(term.noise.variance[:4]) / usual - 1) < 0.003 + 1.0 * Z[:4])
    tiny = modulus_slope(np.array([1e-6]))[0] * 1e-6
    assert tiny == pytest.approx(5 / np.log(10), rel=1e-5)


def test_lensing_and_intrinsic(rows):
    np.testing.assert_allclose(np.sqrt(build(rows(), lensing=0.055).noise.variance), 0.055 * Z)
    np.testing.assert_allclose(build(rows(), intrinsic=0.1).noise.variance, 0.01)
    assert build(rows(), intrinsic={"uniform": [0, 0.5]}) is None
    assert build(rows(), covariance_scale={"log_uniform": [0.5, 2]}) is None


def test_zero_points_are_modes_of_their_groups(rows):
    term = build(rows(), zero_point="group", sigma=0.02)
    assert term.noise.mode_names == ("zero_point:high", "zero_point:low", "zero_point:mid")
    np.testing.assert_allclose(term.noise.modes[:, 1], [0.02, 0.02, 0, 0, 0])
    some = build(rows(keep=(1, 1, 1, 0, 0)), zero_point="group", sigma={"mid": 0.03, "high": 0.01})
    assert some.noise.mode_names == ("zero_point:mid",)
    np.testing.assert_allclose(some.noise.modes, [[0], [0], [0.03]])


def test_zero_point_of_an_unknown_group(rows):
    with pytest.raises(InputError) as caught:
        build(rows(), zero_point="group", sigma={"lwo": 0.02})
    assert caught.value.value == "lwo" and "Did you mean low?" in caught.value.cure and "high, low, mid" in caught.value.cure


def test_modes_from_a_table_from_columns_and_npy(rows, tmp_path):
    (tmp_path / "shifts.csv").write_text("cal,dust\n" + "".join(f"{i / 100},0\n" for i in range(5)))
    here = rows(keep=(0, 1, 1, 1, 1))
    term = build(here, modes="shifts.csv")
    assert term.label == "shifts" and term.noise.mode_names == ("cal", "dust") and "shifts.csv" in here.sources
    np.testing.assert_allclose(term.noise.modes[:, 0], [0.01, 0.02, 0.03, 0.04])
    np.testing.assert_allclose(build(rows(), modes="shifts.csv", use=["dust"]).noise.modes, np.zeros((5, 1)))
    np.testing.assert_allclose(build(rows(), modes=["a", "b"]).noise.modes[:, 1], 0.01)
    np.save(tmp_path / "shifts.npy", np.ones((4, 3)) / 10)
    assert build(here, modes="shifts.npy").noise.modes.shape == (4, 3)  # made for the rows that are kept


def test_modes_that_do_not_fit(rows, tmp_path):
    (tmp_path / "s.csv").write_text("a\n1\n2\n")
    with pytest.raises(InputError, match=r"s\.csv.*modes have 2 rows.*t\.csv has 5"):
        build(rows(), modes="s.csv")
    (tmp_path / "s.csv").write_text("a,b\n" + "1,0\n" * 3 + "1,\n1,0\n")
    with pytest.raises(InputError) as caught:
        build(rows(), modes="s.csv")
    assert (caught.value.file, caught.value.row, caught.value.column) == ("s.csv", 5, "b")
    (tmp_path / "s.csv").write_text("id,b\n" + "".join(f"{100 + i},0\n" for i in range(5)))
    with pytest.raises(InputError, match=r"row 6, column id: a one-sigma shift above 5 mag.*use: \["):
        build(rows(), modes="s.csv")
    with pytest.raises(InputError, match="no such file"):
        build(rows(), modes="nowhere.csv")


def test_covariance_rows_follow_the_cuts(rows, tmp_path):
    matrix = np.diag(np.arange(1.0, 6.0)) + 0.1
    np.save(tmp_path / "sys.npy", matrix)
    keep = np.array([1, 0, 1, 1, 0], dtype=bool)
    here = rows(keep=keep)
    term = build(here, covariance="sys.npy")
    np.testing.assert_array_equal(term.noise.dense, matrix[np.ix_(keep, keep)])
    assert term.noise.source == "sys.npy" and term.noise.source_rows.tolist() == [1, 3, 4] and len(here.sources["sys.npy"]) == 64
    np.save(tmp_path / "small.npy", matrix[:3, :3])
    term = build(here, covariance="small.npy")
    np.testing.assert_array_equal(term.noise.dense, matrix[:3, :3])
    assert "3 × 3" in here.notes[0] and "of 5 in the table" in here.notes[0]


def test_precision_is_cut_through_its_inverse(rows, tmp_path):
    covariance = np.diag(np.arange(1.0, 6.0)) + 0.5
    np.save(tmp_path / "inverse.npy", np.linalg.inv(covariance))
    keep = np.array([1, 0, 1, 1, 0], dtype=bool)
    np.testing.assert_allclose(build(rows(keep=keep), precision="inverse.npy").noise.dense, covariance[np.ix_(keep, keep)], rtol=1e-12)
    whole = build(rows(), precision="inverse.npy").noise
    assert whole.dense is None and whole.precision is not None and not whole.variance.any()


def test_combination(rows, tmp_path):
    np.save(tmp_path / "c.npy", np.eye(5) + 0.1)
    terms = [
        build(rows(), sigma="e"),
        build(rows(), covariance="c.npy"),
        build(rows(), covariance="c.npy"),
        build(rows(), modes=["a"]),
        build(rows(), zero_point="group", sigma=0.1),
    ]
    total = combine(terms)
    np.testing.assert_allclose(total.covariance(), sum(t.noise.covariance() for t in terms), rtol=1e-12)
    assert total.mode_names == ("a", "zero_point:high", "zero_point:low", "zero_point:mid")
    assert [t.label for t in unique_labels(terms)] == ["sigma", "c", "c 2", "modes", "zero_point"]
    assert combine(terms[1:2]).dense.base is not None and np.shares_memory(combine(terms[1:2]).dense, terms[1].noise.dense)


def test_precision_stays_one_unless_the_diagonal_grows(rows, tmp_path):
    np.save(tmp_path / "p.npy", np.diag(np.full(5, 4.0)))
    precision, modes = build(rows(), precision="p.npy"), build(rows(), modes=["a"])
    assert combine([precision, modes]).precision is not None
    grown = combine([precision, modes, build(rows(), intrinsic=0.1)])
    assert grown.precision is None
    np.testing.assert_allclose(np.diag(grown.dense) + grown.variance, 0.26)


def test_nothing_to_combine():
    with pytest.raises(InputError, match="no uncertainty term"):
        combine([])


def test_share_of_the_variance(rows):
    term = build(rows(), modes=["a", "b"])
    assert isinstance(term, Term)
    np.testing.assert_allclose(term.variance, np.linspace(-0.1, 0.1, 5) ** 2 + 1e-4)
