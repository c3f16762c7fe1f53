"""Damaged and odd inputs end to end: every case is fitted or gets a message that names the place; nothing else ever happens.

`make test` tries some thousands, `make fuzz` some ten thousands.
"""

import io
import warnings

import numpy as np
import pytest
import yaml
from hypothesis import HealthCheck, Phase, example, given, settings
from hypothesis import strategies as st

from fitter.checking import check
from fitter.config.start import start
from fitter.errors import InputError

N = 8
Z = np.linspace(0.1, 0.9, N).round(3)
ROWS = [f"sn{i},{'ab'[i % 2]},{z},{43 + 5 * np.log10(z):.3f},0.1,{0.01 * i:.2f}" for i, z in enumerate(Z)]
TABLE = "\n".join(["name,survey,z,mu,e,shift", *ROWS]).encode()
CONFIG = {
    "title": "fuzz",
    "sample": {
        "table": "t.csv",
        "columns": {"redshift": "z", "distance_modulus": "mu", "name": "name", "group": "survey"},
        "keep": {"redshift": [0.05, 2]},
        "uncertainty": [{"sigma": "e"}, {"covariance": "c.npy", "label": "systematic"}, {"modes": ["shift"]}],
        "distance_scale": "absolute",
    },
    "model": "flat_lcdm",
    "parameters": {"omega_m": {"uniform": [0, 1]}, "H0": 70},
    "sampling": {"walkers": 32, "seed": 1},
}
TEXT = yaml.safe_dump(CONFIG, sort_keys=False).encode()

# Without shrinking: a failure is told at once, not after minutes.
quick = settings(
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
    phases=[Phase.explicit, Phase.reuse, Phase.generate],
)


def cases(n: int) -> settings:
    """n examples, and as many times more as the profile asks for."""
    return settings(quick, max_examples=n * settings.default.max_examples // 100)


WORDS = [
    "z",
    "mu",
    "e",
    "t.csv",
    "c.npy",
    "omega_m",
    "a",
    "",
    "nan",
    "1e400",
    "-1",
    "no",
    "µ",
    "\u2212" + "1",
    "../..",
    "~",
    "{}",
    "!!python/object",
]
PIECES = [
    b"",
    b"\n",
    b" ",
    b":",
    b"- ",
    b"{",
    b"}",
    b"[",
    b"]",
    b"&a ",
    b"*a",
    b"!!x ",
    b"#",
    b"\t",
    b"'",
    b'"',
    b"\x00",
    b"\xff",
    b"0",
    b"1e999",
    b"-",
]
damage = st.lists(
    st.tuples(st.floats(0, 1), st.integers(0, 9), st.one_of(st.sampled_from(PIECES), st.binary(max_size=4))), min_size=1, max_size=4
)
leaf = st.one_of(
    st.none(), st.booleans(), st.integers(-5, 10**6), st.floats(), st.sampled_from(WORDS), st.text(max_size=5)
)  # fmt: skip
anything = st.recursive(
    leaf, lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(st.sampled_from(WORDS), inner, max_size=3)), max_leaves=5
)


def damaged(raw, changes):
    for where, length, piece in changes:
        at = int(where * len(raw))
        raw = raw[:at] + piece + raw[at + length :]
    return raw


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "t.csv").write_bytes(TABLE)
    np.save(tmp_path / "c.npy", np.full((N, N), 1e-4))
    (tmp_path / "config.yaml").write_bytes(TEXT)
    return tmp_path


def judged(path):
    """Check a config: it is sound, or every problem has a message; a fault of ours is any other exception, and fails the test."""
    with warnings.catch_warnings():
        warnings.simplefilter("error", RuntimeWarning)
        found = check(path)
        str(found)
    for problem in found.problems:
        assert isinstance(problem, InputError) and len(problem.problem) > 10
        assert problem.file is not None or problem.key is not None
    if found.ok and found.log_posterior is not None:
        posterior = found.log_posterior
        theta = np.column_stack([prior.sample(np.random.default_rng(0), 4) for prior in posterior.priors])
        assert not np.isnan(posterior(theta)).any()
        assert found.sample.n >= 1
    return found


def test_the_undamaged_one_is_fitted(folder):
    found = judged(folder / "config.yaml")
    assert found.ok and found.sample.n == N


@given(changes=damage)
@cases(300)
def test_damaged_config_texts(changes, folder):
    (folder / "config.yaml").write_bytes(damaged(TEXT, changes))
    judged(folder / "config.yaml")


def _paths(value, path=()):
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield (*path, key)
        yield from _paths(inner, (*path, key))


@given(path=st.sampled_from(list(_paths(CONFIG))), value=anything, remove=st.booleans(), key=st.sampled_from(WORDS))
@cases(300)
def test_one_value_of_a_config_replaced_removed_or_added(path, value, remove, key, folder):
    changed = yaml.safe_load(TEXT)
    inside = changed
    for step in path[:-1]:
        inside = inside[step]
    if remove:
        del inside[path[-1]]
        if isinstance(inside, dict):
            inside[key] = value
    else:
        inside[path[-1]] = value
    (folder / "config.yaml").write_text(yaml.safe_dump(changed, allow_unicode=True), encoding="utf-8")
    judged(folder / "config.yaml")


@given(changes=damage)
@cases(200)
def test_damaged_tables_end_to_end(changes, folder):
    (folder / "t.csv").write_bytes(damaged(TABLE, changes))
    judged(folder / "config.yaml")


numbers = st.floats(width=64)


@given(
    cells=st.lists(st.tuples(st.integers(0, N - 1), st.sampled_from(["z", "mu", "e"]), numbers), min_size=1, max_size=3),
    elements=st.lists(st.tuples(st.integers(0, N - 1), st.integers(0, N - 1), numbers), max_size=3),
    kind=st.sampled_from(["covariance", "precision"]),
    dtype=st.sampled_from(["<f8", ">f8", "<f4", ">i2"]),
)
@example(cells=[(3, "mu", 0.0)], elements=[(0, 0, 5e-324), (3, 0, 5e-324)], kind="covariance", dtype=">f8")
@example(cells=[(2, "mu", 0.0)], elements=[(2, 2, 2.225073858507e-311)], kind="precision", dtype="<f8")
@example(cells=[(2, "mu", 0.0)], elements=[(5, 5, 0.0)], kind="precision", dtype=">i2")
@example(cells=[(2, "mu", 0.0)], elements=[(4, 4, 1.1125369292536007e-308)], kind="precision", dtype="<f8")
@example(cells=[(3, "e", 2.2250738585e-313)], elements=[], kind="covariance", dtype="<f8")
@cases(200)
def test_any_number_anywhere(cells, elements, kind, dtype, folder):
    columns = {"z": Z.copy(), "mu": 43 + 5 * np.log10(Z), "e": np.full(N, 0.1)}
    for row, column, value in cells:
        columns[column][row] = value
    lines = [",".join(repr(float(columns[c][i])) for c in ("z", "mu", "e")) for i in range(N)]
    (folder / "t.csv").write_text("z,mu,e\n" + "\n".join(lines))
    matrix = (100.0 if kind == "precision" else 0.02) * np.eye(N)
    for i, j, value in elements:
        matrix[i, j] = matrix[j, i] = value
    with np.errstate(all="ignore"):
        np.save(folder / "c.npy", matrix.astype(dtype))
    changed = yaml.safe_load(TEXT)
    changed["sample"] |= {"columns": {"redshift": "z", "distance_modulus": "mu"}, "uncertainty": [{kind: "c.npy"}], "keep": {}}
    (folder / "config.yaml").write_text(yaml.safe_dump(changed))
    judged(folder / "config.yaml")


@given(changes=damage)
@cases(100)
def test_start_on_damaged_tables(changes, folder):
    (folder / "t.csv").write_bytes(damaged(TABLE, changes))
    try:
        made = start(folder / "t.csv", folder)
    except InputError as problem:
        assert str(problem)
        return
    (folder / "begun.yaml").write_text(made.text, encoding="utf-8")
    judged(folder / "begun.yaml")


def _binary_tables():
    table = pytest.importorskip("astropy.table", reason="needs the extra mufitter[astro]")
    columns = {"name": [f"sn{i}" for i in range(N)], "survey": ["a", "b"] * 4, "z": Z, "mu": 43 + 5 * np.log10(Z), "e": np.full(N, 0.1)}
    made = table.Table(columns | {"shift": np.arange(N) * 0.01})
    found = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for kind in ("fits", "votable", "ascii.ecsv", "ascii.mrt"):
            stream = io.BytesIO() if kind in ("fits", "votable") else io.StringIO()
            made.write(stream, format=kind)
            found[kind] = stream.getvalue() if isinstance(stream, io.BytesIO) else stream.getvalue().encode()
    return found


@pytest.fixture(scope="module")
def binary_tables():
    return _binary_tables()


@given(kind=st.sampled_from(["fits", "votable", "ascii.ecsv", "ascii.mrt"]), changes=damage, cut=st.floats(0.3, 1.5))
@cases(100)
def test_damaged_tables_of_other_formats(kind, changes, cut, folder, binary_tables):
    raw = damaged(binary_tables[kind], changes)
    (folder / "t.csv").write_bytes(raw[: int(cut * len(raw))])
    judged(folder / "config.yaml")
