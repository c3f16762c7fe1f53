"""Matrices in every packing; every message names the file and the element."""

import gzip
import io

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitter.errors import InputError
from fitter.sample.matrices import compact, make_symmetric, read_matrix

N = 6


@pytest.fixture(scope="module")
def matrix():
    a = np.random.default_rng(4).normal(size=(N, N))
    # Numbers that float32 holds exactly, so that every form gives the same ones back.
    return (a @ a.T / N + np.eye(N)).astype(np.float32).astype(float)


def npy(array):
    stream = io.BytesIO()
    np.save(stream, array)
    return stream.getvalue()


def npz(**arrays):
    stream = io.BytesIO()
    np.savez_compressed(stream, **arrays)
    return stream.getvalue()


def text(values, per_line, first=(), separator=" ", end="\n"):
    words = [f"{v:.17g}" for v in np.ravel(values)]
    lines = [*map(str, first), *(separator.join(words[i : i + per_line]) for i in range(0, len(words), per_line))]
    return end.join(lines).encode()


UPPER, LOWER = np.triu_indices(N), np.tril_indices(N)
FORMS = {
    "square text": lambda m: text(m, N),
    "square csv, comments": lambda m: b"# from nowhere\n" + text(m, N, separator=", "),
    "flat, N first": lambda m: text(m, 1, [N]),
    "flat, N first, CRLF and BOM": lambda m: b"\xef\xbb\xbf" + text(m, 1, [f"  {N}"], end="\r\n"),
    "rows, N first": lambda m: text(m, N, [N]),
    "flat without N": lambda m: text(m, 1),
    "one line": lambda m: text(m, N * N),
    "broken lines": lambda m: text(m, 4),
    "upper triangle in text, N first": lambda m: text(m[UPPER], 1, [N]),
    "lower triangle in text, row by row": lambda m: "\n".join(" ".join(f"{v:.17g}" for v in m[i, : i + 1]) for i in range(N)).encode(),
    "npy": npy,
    "npy float32": lambda m: npy(m.astype("f4")),
    "npy big-endian": lambda m: npy(m.astype(">f8")),
    "npy fortran": lambda m: npy(np.asfortranarray(m)),
    "npy flat": lambda m: npy(m.ravel()),
    "npz square": lambda m: npz(c=m),
    "npz square beside N and a flag": lambda m: npz(c=m, n=N, flag=False),
    "npz upper": lambda m: npz(n=np.array([N]), packed=m[UPPER]),
    "npz upper float32 big-endian": lambda m: npz(count=np.int32(N), x=m[UPPER].astype(">f4"), flag=np.array(True)),
    "npz lower": lambda m: npz(n=N, packed=m[LOWER]),
    "npz upper without N": lambda m: npz(packed=m[UPPER]),
    "npz beside other arrays": lambda m: npz(z=np.arange(N) / 10, names=np.array(["a"] * N * N), c=m),
}


@pytest.mark.parametrize("packed", [False, True], ids=["plain", "gzip"])
@pytest.mark.parametrize("form", FORMS.values(), ids=FORMS)
def test_every_form(form, packed, matrix, tmp_path):
    raw = form(matrix)
    path = tmp_path / "anything"
    path.write_bytes(gzip.compress(raw) if packed else raw)
    found = read_matrix(path, sizes=[N], what="covariance")
    np.testing.assert_array_equal(found, matrix)
    assert found.dtype == np.float64 and found.dtype.isnative and found.flags.c_contiguous and found.flags.writeable


@given(n=st.integers(1, 12), seed=st.integers(0, 2**32 - 1), lower=st.booleans(), scale=st.floats(1e-4, 1e4))
@settings(max_examples=60, deadline=None)
def test_a_triangle_unpacks_whichever_way_it_was_packed(n, seed, lower, scale, tmp_path_factory):
    a = np.random.default_rng(seed).normal(size=(n, n))
    matrix = (a @ a.T + 0.1 * np.eye(n)) * scale
    path = tmp_path_factory.mktemp("packed") / "m.npz"
    np.savez(path, n=n, m=matrix[np.tril_indices(n) if lower else np.triu_indices(n)])
    found = read_matrix(path, sizes=[n], what="precision")
    # Both orders can be valid covariances; then the upper one is the stated format.
    other = np.zeros((n, n))
    other[np.triu_indices(n)] = matrix[np.tril_indices(n) if lower else np.triu_indices(n)]
    other = np.triu(other) + np.triu(other, 1).T
    is_valid = np.all(np.diag(other) > 0) and np.all(np.abs(other) <= 1.001 * np.sqrt(np.outer(np.diag(other), np.diag(other))))
    np.testing.assert_array_equal(found, other if is_valid else matrix)


def test_diagonal_precision_as_a_packed_triangle(tmp_path):
    matrix = np.diag(np.arange(1.0, N + 1))
    np.savez(tmp_path / "m.npz", n=[N], m=matrix[UPPER])
    np.testing.assert_array_equal(read_matrix(tmp_path / "m.npz", sizes=[N], what="precision"), matrix)


def failure(raw, tmp_path, sizes=(N,), **options):
    path = tmp_path / "cov"
    path.write_bytes(raw)
    with pytest.raises(InputError) as caught:
        read_matrix(path, sizes=list(sizes), what="covariance", table="table.csv", shown="cov.dat", **options)
    assert caught.value.file is not None
    return caught.value


@pytest.mark.parametrize("form", ["square text", "flat, N first", "rows, N first", "npy", "npz square", "npz upper", "npz lower"])
def test_another_n_says_both(form, matrix, tmp_path):
    error = failure(FORMS[form](matrix), tmp_path, sizes=[N + 1])
    assert "6 × 6" in str(error) and "table.csv has 7 rows" in str(error) and "after a cut" in error.cure
    error = failure(FORMS[form](matrix), tmp_path, sizes=[N - 1])
    assert "6 × 6" in str(error) and "has 5 rows" in str(error) and "keep:" in error.cure


def test_a_matrix_of_the_cut_table_is_accepted(matrix, tmp_path):
    (tmp_path / "c").write_bytes(FORMS["flat, N first"](matrix))
    assert len(read_matrix(tmp_path / "c", sizes=[9, N], what="covariance")) == N


def test_cut_short(matrix, tmp_path):
    error = failure(FORMS["flat, N first"](matrix).rsplit(b"\n", 1)[0], tmp_path)
    assert error.row == 1 and "N = 6" in str(error) and "36 numbers, but 35 follow" in str(error)
    assert "holds 35 numbers" in str(failure(FORMS["flat without N"](matrix).rsplit(b"\n", 1)[0], tmp_path))
    assert "cannot be read" in str(failure(npy(matrix)[:-9], tmp_path))
    packed = gzip.compress(FORMS["square text"](matrix))
    assert "cut short" in str(failure(packed[:-20], tmp_path))
    assert "damaged" in str(failure(npz(c=matrix)[:200], tmp_path))
    assert "holds 0 numbers" in str(failure(b"", tmp_path))


def test_missing_file(tmp_path):
    with pytest.raises(InputError, match="sys.txt: there is no such file"):
        read_matrix(tmp_path / "sys.txt", sizes=[3], what="covariance", shown="sys.txt")


def test_no_number_in_text(matrix, tmp_path):
    lines = FORMS["flat, N first"](matrix).split(b"\n")
    lines[5] = b"abc"
    error = failure(b"\n".join(lines), tmp_path)
    assert (error.file, error.row, error.value) == ("cov.dat", 6, "abc")


def test_unicode_minus_and_fortran_exponents(tmp_path):
    (tmp_path / "c").write_text("1.0D0 \u22120.5\n\u22120.5 1.0d+00\n")
    np.testing.assert_array_equal(read_matrix(tmp_path / "c", sizes=[2], what="covariance"), [[1, -0.5], [-0.5, 1]])


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("form", ["flat, N first", "npy"])
def test_not_finite(value, form, matrix, tmp_path):
    bad = matrix.copy()
    bad[2, 4] = value
    error = failure(FORMS[form](bad), tmp_path)
    assert (error.row, error.column) == (3, 5) and "not a finite number" in str(error)


def test_not_symmetric_says_by_how_much_and_where(matrix, tmp_path):
    bad = matrix.copy()
    bad[4, 1] += 0.01
    error = failure(npy(bad), tmp_path)
    assert (error.row, error.column) == (5, 2) and f"{0.01 / np.sqrt(matrix[4, 4] * matrix[1, 1]):.3g} times" in str(error)
    assert f"{bad[4, 1]:.6g}" in str(error) and f"{matrix[1, 4]:.6g}" in str(error)
    triangle_only = np.triu(matrix)
    assert "not symmetric" in str(failure(npy(triangle_only), tmp_path))


def test_rounding_is_averaged_away(matrix):
    rough = matrix.copy()
    rough[0, 3] *= 1 + 2e-7
    make_symmetric(rough, "it")
    np.testing.assert_array_equal(rough, rough.T)
    assert rough[0, 3] == pytest.approx(matrix[0, 3] * (1 + 1e-7), rel=1e-12)


def test_symmetry_across_blocks(monkeypatch):
    monkeypatch.setattr("fitter.sample.matrices._BLOCK", 4)
    a = np.eye(11)
    a[9, 2] = 0.3
    with pytest.raises(InputError) as caught:
        make_symmetric(a, "it")
    assert (caught.value.row, caught.value.column) == (10, 3)


def test_not_square_and_too_many_dimensions(tmp_path):
    assert "6 × 5, not square" in str(failure(npy(np.ones((6, 5))), tmp_path))
    assert "3 dimensions" in str(failure(npy(np.ones((2, 3, 6))), tmp_path))


def test_pickles_are_never_loaded(tmp_path):
    marker = tmp_path / "ran"

    class Trap:
        def __reduce__(self):
            return marker.write_text, ("x",)

    stream = io.BytesIO()
    np.save(stream, np.array([Trap()], dtype=object), allow_pickle=True)
    assert "never loaded" in str(failure(stream.getvalue(), tmp_path))
    assert "never loaded" in str(failure(npz(c=np.array([Trap()], dtype=object)), tmp_path))
    assert not marker.exists()
    assert "not real numbers" in str(failure(npy(np.ones((N, N), dtype=complex)), tmp_path))


def test_several_arrays(matrix, tmp_path):
    both = npz(stat=matrix, sys=2 * matrix)
    error = failure(both, tmp_path)
    assert "stat, sys" in str(error) and "`array: NAME`" in error.cure
    (tmp_path / "m.npz").write_bytes(both)
    np.testing.assert_array_equal(read_matrix(tmp_path / "m.npz", sizes=[N], what="covariance", array="sys"), 2 * matrix)
    error = failure(both, tmp_path, array="syst")
    assert error.value == "syst" and "stat (6, 6)" in error.cure


def test_a_header_that_promises_too_much_allocates_nothing(tmp_path):
    raw = bytearray(npy(np.ones((6, 6))))
    huge = raw.replace(b"(6, 6), }    ", b"(999999, 9), }")[: len(raw)]
    assert "not square" in str(failure(bytes(huge), tmp_path))


def test_a_matrix_beyond_what_can_be_factored_is_not_read(tmp_path, monkeypatch):
    monkeypatch.setattr("fitter.sample.matrices.LARGEST", N - 1)
    assert f"beyond the {N - 1} that can be factored" in str(failure(b"not even looked at", tmp_path))


def test_a_small_file_asks_for_little_memory(tmp_path, monkeypatch):
    asked = []
    empty = np.empty
    monkeypatch.setattr("fitter.sample.matrices.np.empty", lambda shape, *a, **k: asked.append(np.prod(shape)) or empty(shape, *a, **k))
    (tmp_path / "c.txt").write_text("1 2 3\n")
    with pytest.raises(InputError, match="40000"):
        read_matrix(tmp_path / "c.txt", sizes=[40_000], what="covariance")
    assert max(asked) < 1000


@given(n=st.integers(1, 25), seed=st.integers(0, 1000))
@settings(max_examples=50, deadline=None)
def test_rows_are_cut_in_place(n, seed):
    rng = np.random.default_rng(seed)
    a, keep = rng.normal(size=(n, n)), rng.random(n) < 0.8
    expected = a[np.ix_(keep, keep)]
    np.testing.assert_array_equal(compact(a.copy(), keep), expected)
