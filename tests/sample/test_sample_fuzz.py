"""Damaged tables and matrices: every one loads or gets a message, and never anything else."""

import gzip
import io

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fitter.errors import InputError
from fitter.sample.matrices import read_matrix
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings

N = 8
Z = np.linspace(0.1, 0.9, N).round(3)
HEADER = ["name", "survey", "z", "mu", "e", "host"]
ROWS = [[f"sn{i}", "ab"[i % 2], z, round(43 + 5 * np.log10(z), 3), 0.1, ""] for i, z in enumerate(Z)]
COLUMNS = {"redshift": "z", "distance_modulus": "mu", "name": "name", "group": "survey", "calibrator_modulus": "host"}
MATRIX = np.diag(np.full(N, 0.01)) + 0.001

quick = settings(
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
    max_examples=4 * settings.default.max_examples,  # they are cheap
)


def as_text(delimiter):
    return "\n".join(delimiter.join(str(v) for v in row) for row in [HEADER, *ROWS]).encode()


def as_bytes(save, *args, **arrays):
    stream = io.BytesIO()
    save(stream, *args, **arrays)
    return stream.getvalue()


TABLES = [as_text(","), as_text("\t"), as_text(";"), gzip.compress(as_text(","))]
MATRICES = [
    "\n".join([str(N), *(repr(float(v)) for v in MATRIX.ravel())]).encode(),
    "\n".join(" ".join(repr(float(v)) for v in row) for row in MATRIX).encode(),
    as_bytes(np.save, MATRIX),
    as_bytes(np.savez, n=N, c=MATRIX[np.triu_indices(N)]),
    as_bytes(np.savez_compressed, c=MATRIX.astype("f4"), flag=True),
    gzip.compress(as_bytes(np.save, MATRIX)),
]

PIECES = [
    b"",
    b"\n",
    b",",
    b"\t",
    b" ",
    b";",
    b'"',
    b"'",
    b"#",
    b"-",
    b"\xe2\x88\x92",
    b"nan",
    b"inf",
    b"1e999",
    b"0,1",
    b"\r",
    b"\x00",
    b"\xff",
]
damage = st.lists(
    st.tuples(st.floats(0, 1), st.integers(0, 12), st.one_of(st.sampled_from(PIECES), st.binary(max_size=6))), min_size=1, max_size=5
)


def damaged(raw, changes):
    for where, length, piece in changes:
        at = int(where * len(raw))
        raw = raw[:at] + piece + raw[at + length :]
    return raw


def load(folder, **changes):
    given = {"table": "t", "columns": COLUMNS, "uncertainty": [{"sigma": "e"}, {"zero_point": "group", "sigma": 0.02}]} | changes
    return Sample.from_config(SampleSettings.model_validate(given), folder)


def is_sound(sample):
    assert sample.n >= 1 and np.all(np.isfinite(sample.data)) and np.all(sample.redshift > 0) and np.isfinite(sample.noise.log_det)


@given(raw=st.sampled_from(TABLES), changes=damage)
@quick
def test_damaged_tables(raw, changes, tmp_path):
    (tmp_path / "t").write_bytes(damaged(raw, changes))
    try:
        is_sound(load(tmp_path))
    except InputError as problem:
        assert "t" in str(problem.file) or problem.args


@given(raw=st.sampled_from(MATRICES), changes=damage)
@quick
def test_damaged_matrices(raw, changes, tmp_path):
    (tmp_path / "m").write_bytes(damaged(raw, changes))
    try:
        found = read_matrix(tmp_path / "m", sizes=[N], what="covariance", shown="m")
    except InputError as problem:
        assert str(problem.file).startswith("m")
    else:
        assert found.shape == (N, N) and np.all(np.isfinite(found)) and np.array_equal(found, found.T)


@given(raw=st.binary(max_size=300))
@quick
def test_anything_at_all(raw, tmp_path):
    (tmp_path / "m").write_bytes(raw)
    for attempt in (lambda: read_matrix(tmp_path / "m", sizes=[2], what="covariance", shown="m"), lambda: load(tmp_path, table="m")):
        try:
            attempt()
        except InputError as problem:
            assert str(problem)


scalar = st.one_of(
    st.none(), st.booleans(), st.integers(-3, 60), st.floats(-2, 50, allow_nan=False), st.sampled_from(["a", "b", "sn1", "", "x"])
)
rule = st.recursive(
    st.one_of(scalar.filter(lambda v: v is not None), st.lists(scalar, max_size=3)),
    lambda inner: st.one_of(
        st.fixed_dictionaries({"not": inner}),
        st.fixed_dictionaries({"in": st.lists(scalar, max_size=2)}),
        st.fixed_dictionaries({"group": st.dictionaries(st.sampled_from(["a", "b", "c"]), inner, max_size=2)}),
    ),
    max_leaves=4,
)


@given(
    keep=st.dictionaries(st.sampled_from([*HEADER, "redshift", "group", "distance_modulus", "calibrator_modulus", 3, 9]), rule, max_size=3)
)
@quick
def test_any_cut(keep, tmp_path):
    (tmp_path / "t").write_bytes(TABLES[0])
    try:
        is_sound(load(tmp_path, keep=keep))
    except (InputError, ValueError) as problem:
        # pydantic's errors are ValueErrors, and so that no other one passes they are told apart by name
        assert isinstance(problem, InputError) or type(problem).__name__ == "ValidationError"


@pytest.mark.parametrize("raw", TABLES)
def test_undamaged(raw, tmp_path):
    (tmp_path / "t").write_bytes(raw)
    is_sound(load(tmp_path))
