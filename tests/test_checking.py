"""`check`: what is wrong stands alone; what only a variant reads is read; surveys to come are checked as such."""

import numpy as np
import pytest
from typer.testing import CliRunner

from fitter import cli
from fitter.checking import check

CONFIG = """\
title: toy
sample:
  table: table.csv
  columns: {redshift: z, distance_modulus: mu}
  uncertainty: [{sigma: err}]
model: flat_lcdm
"""


@pytest.fixture
def config(tmp_path):
    z = np.linspace(0.02, 1.0, 30)
    mu = 43.2 + 5 * np.log10(z * (1 + 0.7 * z))
    (tmp_path / "table.csv").write_text("z,mu,err\n" + "".join(f"{a:.4f},{b:.4f},0.1\n" for a, b in zip(z, mu, strict=True)))
    (tmp_path / "config.yaml").write_text(CONFIG)
    return tmp_path / "config.yaml"


def run(path):
    return CliRunner().invoke(cli.app, ["check", str(path)])


def test_a_failing_check_prints_the_problems_and_nothing_else(config):
    config.write_text(CONFIG + "parameters: {omega_n: 0.3}\n")
    done = run(config)
    assert done.exit_code == 2 and done.stdout == ""
    assert len(done.stderr.splitlines()) == 1 and done.stderr.startswith("mufitter: ") and "Did you mean `omega_m`?" in done.stderr
    assert str(check(config)) == str(check(config).problems[0])


VARIANTS = """\
variants:
  - {name: a}
  - {name: b, uncertainty: [{covariance: none.txt}]}
  - {name: c, model: flat_wcdm, uncertainty: [{sigma: er}]}
  - {name: d, keep: {redshift: [5, 6]}}
  - {name: e, sampling: {walkers: 4}, model: flat_w0wa}
"""


def test_what_only_a_variant_reads(config):
    config.write_text(CONFIG + VARIANTS)
    found = [str(p) for p in check(config).problems]
    assert len(found) == 4
    assert "none.txt: there is no such file" in found[0] and "column er: there is no such column" in found[1]
    assert f"{config}, row 11, key sample.keep: the cuts leave none" in found[2]
    assert "sampling.walkers: 3 sampled parameters need more" in found[3]


def test_a_wrong_key_or_reference_does_not_hide_the_variants(config):
    config.write_text(CONFIG.replace("title", "titel") + VARIANTS + "compare: {reference: z}\n")
    found = "\n".join(str(p) for p in check(config).problems)
    assert len(check(config).problems) == 6
    for words in ("Did you mean `title`?", "there is no such variant", "none.txt", "column er", "the cuts leave none", "walkers"):
        assert words in found


def test_a_label_that_no_term_has_is_told_once(config):
    config.write_text(CONFIG + "variants:\n  - {name: a}\n  - {name: b, without: [dust]}\n")
    (problem,) = check(config).problems
    assert f"{config}, row 9, key variants.1.without: no uncertainty term has this label (found 'dust')" in str(problem)


def test_a_survey_to_come(config):
    config.write_text(CONFIG.replace(", distance_modulus: mu", ""))
    found = check(config)
    assert found.ok and found.planned and not found.sample.warnings
    done = run(config)
    assert done.exit_code == 0 and "Nothing is wrong for a rehearsal" in done.stderr
    assert done.stdout.splitlines()[1].startswith("A survey to come") and "no moduli" in done.stdout
    assert "smooth curve" not in done.stdout and "The fit will take" not in done.stdout
    fitted = CliRunner().invoke(cli.app, ["fit", str(config)])
    assert fitted.exit_code == 2 and "`mufitter rehearse`" in fitted.stderr


def test_a_survey_to_come_has_problems_too(config):
    config.write_text(CONFIG.replace(", distance_modulus: mu", "").replace("sigma: err", "sigma: error"))
    (problem,) = check(config).problems
    assert problem.file == "table.csv" and "Did you mean err?" in str(problem)
    # A misspelt role is no survey to come.
    config.write_text(CONFIG.replace("distance_modulus", "distance_modulos"))
    (problem,) = check(config).problems
    assert "Did you mean `distance_modulus`?" in str(problem)


@pytest.mark.parametrize("command", ["fit", "compare"])
def test_a_fit_that_is_refused_tells_of_the_files_too(config, command):
    config.write_text(CONFIG.replace("title", "titel").replace("sigma: err", "sigma: error"))
    done = CliRunner().invoke(cli.app, [command, str(config)])
    assert done.exit_code == 2 and "2 problems" in done.stderr
    assert "Did you mean `title`?" in done.stderr and "column error: there is no such column" in done.stderr
