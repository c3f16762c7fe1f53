"""Tables beyond text: FITS, ECSV, VOTable, machine-readable (CDS) and Parquet; bordered images; labelled matrices."""

import gzip
import sys
import warnings

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.sample.matrices import read_matrix
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings
from fitter.sample.tables import read_numbers, read_table

table = pytest.importorskip("astropy.table", reason="needs the extra mufitter[astro]")
fits = pytest.importorskip("astropy.io.fits")

N = 7
Z = np.linspace(0.1, 0.7, N).round(3)
MU = (43 + 5 * np.log10(Z)).round(3)
NAMES = [f"sn{i}" for i in range(N)]
HOST = np.ma.MaskedArray([30.5, *[0.0] * (N - 1)], mask=[False, *[True] * (N - 1)])
COLUMNS = {"redshift": "z", "distance_modulus": "mu", "name": "name", "group": "survey", "calibrator_modulus": "host"}
COVARIANCE = np.diag(np.full(N, 0.02)) + 0.001 * np.exp(-(np.subtract.outer(Z, Z) ** 2))


def catalogue():
    return table.Table({"name": NAMES, "survey": ["a", "b"] * 3 + ["a"], "z": Z, "mu": MU, "e": np.full(N, 0.145), "host": HOST})


def write_fits(path, first=()):
    hdus = [fits.PrimaryHDU(), *first, fits.table_to_hdu(catalogue())]
    fits.HDUList(hdus).writeto(path)


FORMATS = {
    "FITS": write_fits,
    "ECSV": lambda path: catalogue().write(path, format="ascii.ecsv"),
    "VOTable": lambda path: catalogue().write(path, format="votable"),
    "CDS": lambda path: catalogue().write(path, format="ascii.mrt"),
    "Parquet": lambda path: catalogue().to_pandas().to_parquet(path),
}


@pytest.fixture(params=FORMATS)
def written(request, tmp_path):
    if request.param == "Parquet":
        pytest.importorskip("pyarrow", reason="needs the extra mufitter[parquet]")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        FORMATS[request.param](tmp_path / "t.dat")
    return request.param, tmp_path / "t.dat"


def settings(**changes):
    given = {"table": "t.dat", "columns": COLUMNS, "uncertainty": [{"sigma": "e"}, {"zero_point": "group", "sigma": 0.02}]}
    return SampleSettings.model_validate(given | changes)


def test_a_config_for_every_format(written):
    _, path = written
    sample = Sample.from_config(settings(keep={"calibrators": "drop"}), path.parent)
    np.testing.assert_array_equal(sample.redshift, Z[1:])
    np.testing.assert_array_equal(sample.data, MU[1:])
    assert list(sample.name) == NAMES[1:] and list(sample.group) == ["b", "a", "b", "a", "b", "a"]
    assert sample.row.tolist() == list(range(2, N + 1)) and sample.noise.mode_names == ("zero_point:a", "zero_point:b")


def test_missing_columns_and_words_for_numbers(written):
    _, path = written
    found = read_table(path, numbers=["mU", "name"], shown="t.dat")
    with pytest.raises(InputError, match="Did you mean mu"):
        found.numbers("mU")
    with pytest.raises(InputError, match="this is not a number"):
        found.numbers("name")


def test_cut_short(written):
    kind, path = written
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    if kind in ("ECSV", "CDS"):  # a text that ends early may be a whole table of fewer rows, or none
        path.write_bytes(whole[: whole.index(b"z") + 3])
    with pytest.raises(InputError, match=r"t.dat.*(cannot be read|no rows|holds no table)"):
        read_table(path, numbers=["z"], shown="t.dat").numbers("z")


def test_without_the_extra(written, monkeypatch):
    kind, path = written
    extra = "parquet" if kind == "Parquet" else "astro"
    for module in ("astropy.io.fits", "astropy.table", "pyarrow.parquet"):
        monkeypatch.setitem(sys.modules, module, None)
    with pytest.raises(InputError, match=rf"{kind} file, which needs the extra mufitter\[{extra}\]"):
        Sample.from_config(settings(), path.parent)


def test_gzipped(tmp_path):
    write_fits(tmp_path / "t.fits")
    (tmp_path / "t.dat").write_bytes(gzip.compress((tmp_path / "t.fits").read_bytes()))
    assert Sample.from_config(settings(), tmp_path).n == N


def test_the_table_that_has_the_columns_is_chosen_and_told(tmp_path):
    write_fits(tmp_path / "t.dat", first=[fits.table_to_hdu(table.Table({"other": [1.0, 2.0]}))])
    sample = Sample.from_config(settings(), tmp_path)
    assert sample.n == N and "holds 2 tables; the one in extension 2 is used" in sample.warnings[0]


def test_several_values_a_row(tmp_path):
    fits.table_to_hdu(table.Table({"z": Z, "mu": np.ones((N, 2))})).writeto(tmp_path / "t.dat")
    with pytest.raises(InputError, match="several values a row"):
        read_table(tmp_path / "t.dat", numbers=["mu"]).numbers("mu")


def test_modes_in_fits(tmp_path):
    fits.table_to_hdu(table.Table({"a": Z.astype("f4"), "b": np.arange(N)})).writeto(tmp_path / "m.fits")
    names, values, _ = read_numbers(tmp_path / "m.fits")
    assert names == ["a", "b"] and values.dtype == np.float64
    np.testing.assert_array_equal(values, np.column_stack([Z.astype("f4"), np.arange(N)]))


# ---------------------------------------------------------------- matrices


def bordered(folder, turned=False, name="t.dat"):
    image = np.zeros((N + 1, N + 1))
    image[0, 1:], image[1:, 0], image[1:, 1:] = Z, MU, np.linalg.inv(COVARIANCE)
    fits.PrimaryHDU(image.T if turned else image).writeto(folder / name)
    return image


@pytest.mark.parametrize("turned", [False, True])
def test_bordered_image(turned, tmp_path):
    image = bordered(tmp_path, turned)
    sample = Sample.from_config(SampleSettings.model_validate({"table": "t.dat", "layout": "bordered"}), tmp_path)
    np.testing.assert_array_equal(sample.redshift, Z)
    np.testing.assert_array_equal(sample.data, MU)
    np.testing.assert_allclose(sample.noise.precision, image[1:, 1:], rtol=1e-12)
    assert sample.sources.keys() == {"t.dat"}


def test_bordered_image_with_everything_said_and_cut(tmp_path):
    bordered(tmp_path)
    more = {"columns": {"redshift": "redshift", "distance_modulus": "distance_modulus"}, "keep": {"redshift": [0.15, 1]}}
    given = {"table": "t.dat", "layout": "bordered", "uncertainty": [{"precision": "t.dat"}]} | more
    sample = Sample.from_config(SampleSettings.model_validate(given), tmp_path)
    assert sample.n == N - 1
    np.testing.assert_allclose(sample.noise.inverted().dense, COVARIANCE[1:, 1:], rtol=1e-9)


@pytest.mark.parametrize(
    "make, words",
    [
        (lambda path: fits.PrimaryHDU(np.ones((3, 4))).writeto(path), "is square .* but this is 3 × 4"),
        (lambda path: fits.PrimaryHDU().writeto(path), "holds no image of two dimensions"),
        (lambda path: path.write_text("z mu\n0.1 38\n"), "from a FITS image only"),
    ],
)
def test_no_bordered_image(make, words, tmp_path):
    make(tmp_path / "t.dat")
    with pytest.raises(InputError, match=words):
        Sample.from_config(SampleSettings.model_validate({"table": "t.dat", "layout": "bordered"}), tmp_path)


def test_an_image_where_a_table_is_wanted(tmp_path):
    bordered(tmp_path)
    with pytest.raises(InputError, match="holds no table. .*layout: bordered"):
        Sample.from_config(settings(), tmp_path)


def test_covariance_as_an_image(tmp_path):
    fits.PrimaryHDU(COVARIANCE).writeto(tmp_path / "c.fits")
    np.testing.assert_allclose(read_matrix(tmp_path / "c.fits", sizes=[N], what="covariance"), COVARIANCE, rtol=1e-14)
    with pytest.raises(InputError, match=f"the matrix is {N} × {N}, but the table has 9 rows"):
        read_matrix(tmp_path / "c.fits", sizes=[9], what="covariance")


def labelled(labels, index=None, delimiter=",", corner=True):
    index = labels if index is None else index
    head = [delimiter.join(([""] if corner and delimiter == "," else []) + labels)] if labels else []
    rows = [delimiter.join(([index[i]] if index else []) + [repr(float(v)) for v in row]) for i, row in enumerate(COVARIANCE)]
    return "\n".join(head + rows) + "\n"


@pytest.mark.parametrize("index", [True, False])
@pytest.mark.parametrize("delimiter", [",", " ", "\t"])
@pytest.mark.parametrize("labels", [NAMES, [str(i) for i in range(N)], [str(i + 1) for i in range(N)]])
def test_labelled_matrix(labels, delimiter, index, tmp_path):
    (tmp_path / "c.csv").write_text(labelled(labels, index=None if index else [], delimiter=delimiter))
    seen = []
    found = read_matrix(tmp_path / "c.csv", sizes=[N], what="covariance", on_labels=seen.extend)
    np.testing.assert_allclose(found, COVARIANCE, rtol=1e-14)
    assert seen == labels


def test_labels_beside_the_rows_alone(tmp_path):
    (tmp_path / "c.csv").write_text(labelled([], index=NAMES))
    np.testing.assert_allclose(read_matrix(tmp_path / "c.csv", sizes=[N], what="covariance"), COVARIANCE, rtol=1e-14)


@pytest.mark.parametrize(
    "text, words",
    [
        (labelled(NAMES, index=NAMES[::-1]), "another order: label 1 is 'sn6' and 'sn0'"),
        (labelled(NAMES)[:-300], "row"),
        (labelled(NAMES) + labelled([], index=NAMES), "more than 7 rows"),
        (labelled(NAMES).replace(",0.021", ",x", 1), "not a number"),
    ],
)
def test_labelled_matrix_that_is_wrong(text, words, tmp_path):
    (tmp_path / "c.csv").write_text(text)
    with pytest.raises(InputError, match=words):
        read_matrix(tmp_path / "c.csv", sizes=[N], what="covariance", shown="c.csv")


def with_labels(folder, labels, **columns):
    write_fits(folder / "t.dat")
    (folder / "c.csv").write_text(labelled(labels))
    mapped = {"redshift": "z", "distance_modulus": "mu"} | columns
    return Sample.from_config(settings(columns=mapped, uncertainty=[{"covariance": "c.csv"}]), folder)


def test_labels_are_compared_with_the_names(tmp_path):
    assert with_labels(tmp_path, NAMES, name="name").warnings == ()


def test_labels_in_another_order_are_refused(tmp_path):
    with pytest.raises(InputError, match="do not follow those of t.dat: label 1 is 'sn1', but the table has 'sn0' there"):
        with_labels(tmp_path, [NAMES[1], NAMES[0], *NAMES[2:]], name="name")


def test_labels_that_say_nothing_are_told(tmp_path):
    (text,) = with_labels(tmp_path, NAMES).warnings
    assert "are no names of the table" in text and "Map `name`" in text
