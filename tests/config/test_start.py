"""`mufitter start`: the config that it writes passes `check`, and it says what it guessed and what it could not."""

import os
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from fitter.checking import check
from fitter.cli import app
from fitter.config.start import start
from fitter.errors import InputError

ROOT = Path(__file__).resolve().parents[2]
DEMO = ROOT / "data_demo"
OPEN_DATA = Path(os.environ.get("MUFITTER_OPEN_DATA") or ROOT / "../shared/open_data").resolve()
N = 40
RNG = np.random.default_rng(8)
Z = np.sort(RNG.uniform(0.02, 1.1, N)).round(4)
MU = (43.2 + 5 * np.log10(Z * (1 + 0.7 * Z)) + RNG.normal(0, 0.15, N)).round(3)


def run(*arguments):
    return CliRunner().invoke(app, ["start", *map(str, arguments)])


def begun(tmp_path, table, *matrices):
    """The check of the config written for a table."""
    made = start(table, tmp_path, matrices)
    (tmp_path / "begun.yaml").write_text(made.text)
    found = check(tmp_path / "begun.yaml")
    assert found.ok, found.problems
    return made, found


def write(folder, header, *columns, delimiter=","):
    rows = [delimiter.join(map(str, row)) for row in zip(*columns, strict=True)]
    (folder / "t.csv").write_text("\n".join([delimiter.join(header)] * bool(header) + rows) + "\n")
    return folder / "t.csv"


def test_the_invented_survey(tmp_path):
    made, found = begun(tmp_path, DEMO / "survey.csv", DEMO / "calibration.txt.gz", DEMO / "dust.npy.gz")
    columns = found.config.sample.columns
    assert (columns.redshift, columns.redshift_helio, columns.distance_modulus) == ("z", "z_helio", "modulus")
    assert (columns.group, columns.name) == ("survey", "name")
    assert [term.kind for term in found.sample.terms] == ["sigma", "covariance", "covariance"]
    assert "The errors might also be sigma_all." in made.doubts


def test_calibrators_make_a_calibrated_fit(tmp_path):
    _, found = begun(tmp_path, DEMO / "calibrated.csv")
    assert found.sample.distance_scale == "calibrated" and found.sample.n_calibrators == 20


@pytest.mark.parametrize(
    "table, matrix, kinds, rows",
    [
        ("dovekie2025/HD.csv", "dovekie2025/VPEC.npz", ["precision"], 1820),
        ("pantheon2018_binned/lcparam_DS17f.txt", "pantheon2018_binned/sys_DS17f.txt", ["sigma", "covariance"], 40),
        ("union2.1/mu_vs_z.txt", None, ["sigma"], 580),
    ],
)
@pytest.mark.skipif(not OPEN_DATA.is_dir(), reason=f"no published data in {OPEN_DATA} (MUFITTER_OPEN_DATA)")
def test_published_tables(table, matrix, kinds, rows, tmp_path):
    _, found = begun(tmp_path, OPEN_DATA / table, *([OPEN_DATA / matrix] if matrix else []))
    assert [term.kind for term in found.sample.terms] == kinds and found.sample.n == rows
    assert not found.sample.warnings or "header has 19 names" in found.sample.warnings[0]


def test_names_in_a_comment(tmp_path):
    table = write(tmp_path, ["#id", "zcmb", "zhel", "mb", "dmb"], range(N), Z, Z, MU - 19.3, np.full(N, 0.15), delimiter=" ")
    _, found = begun(tmp_path, table)
    columns = found.config.sample.columns
    assert (columns.redshift, columns.redshift_helio, columns.magnitude) == ("zcmb", "zhel", "mb")
    assert found.config.sample.uncertainty[0].sigma == "dmb"


def test_without_a_header_by_content(tmp_path):
    table = write(tmp_path, [], [f"sn{i}" for i in range(N)], Z, MU, np.full(N, 0.15), delimiter="\t")
    made, found = begun(tmp_path, table)
    columns = found.config.sample.columns
    assert (columns.name, columns.redshift, columns.distance_modulus) == (0, 1, 2)
    assert found.config.sample.uncertainty[0].sigma == 3 and any("only because" in doubt for doubt in made.doubts)


def test_matrix_that_holds_the_errors_already(tmp_path):
    np.save(tmp_path / "c.npy", np.diag(np.full(N, 0.15**2)) + 1e-4)
    made, found = begun(tmp_path, write(tmp_path, ["z", "mu", "mu_err"], Z, MU, np.full(N, 0.15)), tmp_path / "c.npy")
    assert [term.kind for term in found.sample.terms] == ["covariance"] and not found.sample.warnings
    assert any("holds the sigma column already" in guess for guess in made.guesses)


def test_gaps_sentinels_and_names_twice(tmp_path):
    z, mu = Z.astype(object), MU.astype(object)
    z[3], mu[5] = -9.0, ""
    names = [f"sn{i}" for i in range(N)]
    names[7] = names[6]
    _, found = begun(tmp_path, write(tmp_path, ["name", "z", "mu", "e_mu"], names, z, mu, np.full(N, 0.1)))
    assert found.sample.n == N - 2


def test_calibrators_beside_moduli_are_dropped(tmp_path):
    host = [30.1, 31.2] + [""] * (N - 2)
    _, found = begun(tmp_path, write(tmp_path, ["z", "mu", "sigma", "mu_host"], Z, MU, np.full(N, 0.1), host))
    assert found.sample.n == N - 2 and found.sample.removed == {"calibrators": 2}


def test_no_errors_at_all(tmp_path):
    made, found = begun(tmp_path, write(tmp_path, ["z", "mu"], Z, MU))
    assert "REPLACE" in made.text and any("Replace them" in doubt for doubt in made.doubts)


def test_column_names_that_yaml_would_misread(tmp_path):
    _, found = begun(tmp_path, write(tmp_path, ["z", "mu: best", "sigma #1", "no"], Z, MU, np.full(N, 0.1), ["a", "b"] * (N // 2)))
    assert found.config.sample.columns.distance_modulus == "mu: best"


@pytest.mark.parametrize("header, columns", [(["a", "b"], (MU, MU)), (["name", "survey"], (["x"] * N, ["y"] * N))])
def test_nothing_that_looks_like_supernovae(header, columns, tmp_path):
    with pytest.raises(InputError, match="no column looks like a redshift"):
        start(write(tmp_path, header, *columns), tmp_path)


def test_matrix_of_another_size(tmp_path):
    np.save(tmp_path / "c.npy", np.eye(N + 1))
    with pytest.raises(InputError, match=f"{N + 1} × {N + 1}, but .* has {N} rows"):
        start(write(tmp_path, ["z", "mu", "e"], Z, MU, np.full(N, 0.1)), tmp_path, [tmp_path / "c.npy"])


def test_command_writes_here_and_not_into_the_folder_of_the_data(tmp_path, monkeypatch):
    data, here, there = tmp_path / "shared data", tmp_path / "mine", tmp_path / "there"
    for folder in (data, here, there):
        folder.mkdir()
    table = write(data, ["z", "mu", "err"], Z, MU, np.full(N, 0.1))
    np.save(data / "c.npy", 1e-4 * np.eye(N))
    monkeypatch.chdir(here)
    done = run(table, "--covariance", data / "c.npy")
    assert done.exit_code == 0 and "Next: mufitter check t.yaml" in done.stderr
    assert [p.name for p in here.iterdir()] == ["t.yaml"] and sorted(p.name for p in data.iterdir()) == ["c.npy", "t.csv"]
    text = (here / "t.yaml").read_text()
    assert "table: ../shared data/t.csv" in text and "covariance: ../shared data/c.npy" in text and check(here / "t.yaml").ok
    # Elsewhere: a folder, or a file.
    assert run(table, "-o", there).exit_code == 0 and check(there / "t.yaml").ok
    assert run(table, "-o", there / "named.yaml").exit_code == 0 and check(there / "named.yaml").ok


def test_command_overwrites_nothing(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    table = write(tmp_path, ["z", "mu", "err"], Z, MU, np.full(N, 0.1))
    first = run(table)
    assert first.exit_code == 0 and "Guessed:" in first.stdout and check(tmp_path / "t.yaml").ok
    before = (tmp_path / "t.yaml").read_text()
    again = run(table)
    assert again.exit_code == 2 and "nothing is overwritten" in again.stderr and (tmp_path / "t.yaml").read_text() == before
    assert run(table, "-o", tmp_path / "other.yaml").exit_code == 0
    assert sorted(p.name for p in tmp_path.iterdir()) == ["other.yaml", "t.csv", "t.yaml"]
    assert run(table, "-o", tmp_path / "none" / "x.yaml").exit_code == 2


def test_columns_left_aside_are_named_and_errors_of_redshifts_explained(tmp_path):
    rows = "".join(f"sn{i},{0.02 + 0.01 * i:.2f},0.001,{35 + 0.1 * i:.1f},0.1,{i}\n" for i in range(20))
    (tmp_path / "t.csv").write_text("name,z,z_err,mu,mu_err,seen\n" + rows)
    doubts = start(tmp_path / "t.csv", tmp_path).doubts
    assert "Columns not used: z_err, seen" in doubts
    assert any(text.startswith("z_err looks like errors of redshifts") and "2.17" in text for text in doubts)
