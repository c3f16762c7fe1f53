"""Configs: what is accepted, and every message with its file, row, key and cure."""

import pytest

from fitter.api import check, fit
from fitter.config.load import config_from_mapping, load_config
from fitter.errors import InputError, InputErrors

RELATIVE = ("  distance_scale: absolute\n", "")


def problems(project, *changes):
    """Change the good config and return the problems that are found."""
    path = project / "config.yaml"
    text = path.read_text()
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        load_config(path)
    return getattr(caught.value, "errors", (caught.value,))


def only(project, *changes):
    found = problems(project, *changes)
    assert len(found) == 1, [str(p) for p in found]
    assert found[0].file == project / "config.yaml"
    return found[0]


def test_a_good_config(project):
    config = load_config(project / "config.yaml")
    assert config.title == "a small survey"
    assert config.folder == project
    assert config.sampling.walkers == 32
    assert config.radiation is False
    assert config.default_run_folder().as_posix() == "runs/config"


def test_empty_sections_have_their_defaults(project):
    path = project / "config.yaml"
    path.write_text(path.read_text().replace(" {walkers: 32, target_ess: 500}", "").replace("\n  omega_m: {uniform: [0.05, 0.8]}", ""))
    config = load_config(path)
    assert config.sampling.walkers == 128
    assert config.parameters == {}


@pytest.mark.parametrize(
    ("old", "new", "row", "column", "words"),
    [
        ("title:", "titel:", 1, "titel", ["no key `titel`", "Did you mean `title`?", "Known keys: title, sample, model"]),
        ("title: a small survey", "title: 2026", 1, "title", ["expected text", "found 2026", 'in quotes: "2026"']),
        ("  table:", "  tabel:", 3, "sample.tabel", ["Did you mean `table`?"]),
        ("redshift: z", "z: z", 4, "sample.columns.z", ["no key `z`"]),
        ("redshift: z", "redshift: 1.5", 4, "sample.columns.redshift", ["expected a whole number or text", "found 1.5"]),
        ("- {sigma: sigma}", "- {sigma: sigma, lable: x}", 6, "sample.uncertainty.0.lable", ["Did you mean `label`?"]),
        ("scale: absolute", "scale: absolut", 8, "sample.distance_scale", ["relative, absolute, calibrated", "Did you mean `absolute`?"]),
        ("model: flat_lcdm", "model: flat_lcmd", 9, "model", ["one of: flat_lcdm, curved_lcdm", "Did you mean `flat_lcdm`?"]),
        ("model: flat_lcdm", "model: 3", 9, "model", ["expected text"]),
        ("model: flat_lcdm", "model: flat_lcdm\nradiation: maybe", 10, "radiation", ["true or false", "'maybe'"]),
        ("walkers: 32", "walkers: 33", 12, "sampling.walkers", ["even", "found 33"]),
        ("walkers: 32", "walkers: 3,2", 12, "sampling", ["key"]),
        ("walkers: 32", 'walkers: "3,2"', 12, "sampling.walkers", ["whole number", "The decimal mark is a point"]),
        ("walkers: 32", "walkers: 32.5", 12, "sampling.walkers", ["expected a whole number", "32.5"]),
        ("walkers: 32", "replicas: 0", 12, "sampling.replicas", ["at least 1", "found 0"]),
        ("walkers: 32", "replicas: [1]", 12, "sampling.replicas", ["expected a whole number", "found [1]"]),
        ("walkers: 32", "walkers:32", 12, "sampling.walkers:32", ["followed by a space"]),
        ("sampling: {walkers: 32, target_ess: 500}", "sampling: 5", 12, "sampling", ["a section of `key: value` lines"]),
        ("sampling:", "run_folder: 3\nsampling:", 12, "run_folder", ["expected text"]),
    ],
)  # fmt: skip
def test_wrong_keys_and_values(project, old, new, row, column, words):
    found = problems(project, (old, new))
    near = [p for p in found if str(p.key).startswith(column)]
    assert near, [str(p) for p in found]
    assert near[0].row == row
    for word in words:
        assert word in str(near[0])


def test_missing_keys(project):
    assert "the key `model` is missing" in str(only(project, ("model: flat_lcdm\n", "")))


def test_a_misspelt_required_key_gives_one_message(project):
    assert "Did you mean `redshift`?" in str(only(project, ("redshift:", "redshft:")))


def test_a_missing_sample(project):
    text = (project / "config.yaml").read_text()
    (project / "config.yaml").write_text(text[text.index("model:") :])
    with pytest.raises(InputError, match="the key `sample` is missing"):
        load_config(project / "config.yaml")


@pytest.mark.parametrize(
    ("name", "value", "changes", "words"),
    [
        ("H0", "70", [RELATIVE], ["only enter as one offset", "distance_scale: absolute"]),
        ("absolute_magnitude", "-19.3", [RELATIVE], ["no parameter of this fit (distance_scale: relative)", "calibrated"]),
        ("omega_lambda", "0.7", [], ["derived from the other parameters of flat_lcdm", "the curved model curved_lcdm"]),
        ("omega_k", "0", [("flat_lcdm", "curved_lcdm")], ["derived", "omega_m and omega_lambda decide it"]),
        ("omega_de", "0.7", [("flat_lcdm", "curved_lcdm")], ["the dark-energy density of curved_lcdm is called omega_lambda"]),
        ("w", "-1", [], ["flat_lcdm has no parameter w", "flat_wcdm, curved_wcdm"]),
        ("intrinsic_scatter", "0.1", [], ["belongs to the uncertainties", "{intrinsic: {uniform: [low, high]}}"]),
        ("covariance_scale", "1", [], ["belongs to the uncertainties", "{covariance_scale: {uniform: [low, high]}}"]),
        ("age_gyr", "13.8", [], ["derived", "Parameters of this fit: omega_m, H0"]),
        ("omga_lambda", "0.7", [], ["Did you mean `omega_lambda`? That is no parameter of flat_lcdm", "the curved model curved_lcdm"]),
        ("omga_lambda", "0.7", [("flat_lcdm", "curved_lcdm")], ["Did you mean `omega_lambda`? Parameters of this fit"]),
        ("w_0", "-1", [], ["Did you mean `w0`? That is no parameter of flat_lcdm", "choose a model that has it: flat_w0wa, curved_w0wa"]),
        ("h0", "70", [RELATIVE], ["Did you mean `H0`?", "only enter as one offset"]),
        ("h0", "70", [], ["there is no such parameter", "Did you mean `H0`?"]),
        ("nonsense", "1", [], ["there is no such parameter", "Parameters of this fit: omega_m, H0"]),
        ("H0", "[60, 80]", [], ["expected a prior or a number", "H0: {uniform: [60, 80]}"]),
        ("H0", "seventy", [], ["expected a prior or a number", "found 'seventy'", "{uniform: [40, 100]}"]),
        ("H0", "true", [], ["expected a prior or a number", "found True"]),
        ("H0", "", [], ["expected a prior or a number"]),
        ("H0", ".nan", [], ["expected a finite number"]),
        ("H0", "-70", [], ["H0 must be positive"]),
        ("H0", "{uniform: [-80, -60]}", [], ["H0 must be positive"]),
        ("H0", "{gaussian: [70, 1]}", [], ["no prior called `gaussian`", "Priors: uniform, normal"]),
        ("H0", "{unifrom: [60, 80]}", [], ["Did you mean `uniform`?"]),
        ("H0", "{uniform: [80, 60]}", [], ["low < high", "found [80, 60]"]),
        ("H0", "{normal: [70]}", [], ["normal takes 2 numbers", "found [70]"]),
        ("H0", "{normal: [70, 0]}", [], ["sd > 0"]),
        ("H0", "{uniform: [60, 80], normal: [70, 1]}", [], ["this is no prior"]),
    ],
)  # fmt: skip
def test_parameters_that_cannot_be(project, name, value, changes, words):
    problem = only(project, ("parameters:\n", f"parameters:\n  {name}: {value}\n"), *changes)
    assert str(problem.key).startswith(f"parameters.{name}")
    assert problem.row == (11 if RELATIVE not in changes else 10)
    for word in words:
        assert word in str(problem)


def test_nothing_left_to_fit(project):
    problem = only(project, RELATIVE, ("{uniform: [0.05, 0.8]}", "0.3"))
    assert "every parameter is held fixed" in str(problem)


def test_all_problems_come_in_one_pass_in_the_order_of_the_file(project):
    found = problems(project, ("title", "titel"), ("redshift: z", "redshft: z"), ("flat_lcdm", "flat_lcdn"), ("walkers: 32", "walker: 32"))
    assert [p.row for p in found] == [1, 4, 9, 12]
    found = problems(project, ("flat_lcdn", "flat_lcdm"), ("redshft", "redshift"), ("omega_m:", "omega_n:"))
    assert [p.row for p in found] == [1, 11, 12]


def test_settings_from_python_have_the_same_messages(project):
    sample = {"table": "survey.csv", "columns": {"redshift": "z", "distance_modulus": "mu"}, "uncertainty": [{"sigma": "sigma"}]}
    assert config_from_mapping({"sample": sample, "model": "flat_wcdm"}, folder=project).model == "flat_wcdm"
    with pytest.raises(InputErrors) as caught:
        config_from_mapping({"sample": sample, "model": "flat_wcmd", "titel": "x"})
    assert "Did you mean `flat_wcdm`?" in str(caught.value)
    assert "Did you mean `title`?" in str(caught.value)
    assert all(p.file is None and p.row is None for p in caught.value.errors)


def test_changed_settings_are_validated(project):
    config = load_config(project / "config.yaml")
    changed = config.changed({"sampling.seed": 7, "model": "flat_wcdm"})
    assert (changed.sampling.seed, changed.sampling.walkers, changed.model) == (7, 32, "flat_wcdm")
    assert config.sampling.seed != 7
    with pytest.raises(InputError, match="at least 0"):
        config.changed({"sampling.seed": -7})


MANY = """\
titel: x
sample:
  tabel: survey.csv
  columns: {redshift: zz, distance_modulus: mu, nmae: name}
  foo: 1
  uncertainty:
    - {sigma: error}
    - {covariance: nofile.txt}
    - {intrinsic: {unifrm: [0, 1]}}
    - {lensing: high}
  duplicates: alow
model: flat_lcmd
parameters:
  omga_lambda: 0.7
  omega_m: 2 to 3
sampling: {walkers: 31, sed: 5}
"""


def test_an_unknown_key_hides_nothing(project):
    """Unknown keys, bad values, and what can still be seen of the files."""
    (project / "config.yaml").write_text(MANY)
    found = {p.key or f"{p.file}, {p.column}": str(p) for p in check(project / "config.yaml").problems}
    assert set(found) == {
        *("titel", "sample.tabel", "sample.columns.nmae", "sample.foo", "sample.uncertainty.2.intrinsic.unifrm"),
        *("sample.uncertainty.3.lensing", "sample.duplicates", "model", "parameters.omga_lambda", "parameters.omega_m"),
        *("sampling.walkers", "sampling.sed", "survey.csv, zz", "survey.csv, error", "survey.csv, name", "nofile.txt, None"),
    }
    assert "Did you mean z?" in found["survey.csv, zz"]


def test_what_was_left_out_makes_no_problems_of_its_own(project):
    # With the only term that says how far the data scatter gone, its absence is no second problem; nor the walkers' for the misspelt seed.
    found = problems(project, ("    - {sigma: sigma}\n    - {covariance: systematics.npy, label: calibration}", "    - {sgma: sigma}"))
    assert [p.key for p in found] == ["sample.uncertainty.0"]
    assert [p.key for p in check(project / "config.yaml").problems] == ["sample.uncertainty.0"]


def test_a_misspelt_key_is_read_as_what_it_stands_for(project):
    """So that the rows of the table are looked at as well, under the right settings."""
    table = (project / "survey.csv").read_text().replace("0.02000,", ",", 1)
    (project / "survey.csv").write_text(table)
    problems(project, ("distance_scale:", "distance_scal:"), ("omega_m:", "H0: 70\n  omega_m:"))
    found = check(project / "config.yaml").problems
    assert [p.key or p.file for p in found] == ["sample.distance_scal", "survey.csv"]
    assert "there is no value" in str(found[1])


@pytest.mark.parametrize(
    ("old", "new", "key", "words"),
    [
        ("- {sigma: sigma}", "- {sigma: 3.5}", "sample.uncertainty.0.sigma", "one-sigma errors, mag. Write e.g. {sigma: MUERR}"),
        ("- {sigma: sigma}", "- {lensing: high}", "sample.uncertainty.0.lensing", "mag per unit redshift. Write e.g. {lensing: 0.055}"),
        ("- {sigma: sigma}", "- {intrinsic: x}", "sample.uncertainty.0.intrinsic", "{intrinsic: {uniform: [0, 0.5]}}"),
        ("- {sigma: sigma}", "- {zero_point: group, sigma: -1}", "sample.uncertainty.0.sigma", "{zero_point: group, sigma: 0.02}"),
        ("- {sigma: sigma}", "- {covariance: [1]}", "sample.uncertainty.0.covariance", "Write e.g. {covariance: systematics.txt"),
        ("  uncertainty:", "  keep: {mu: {inn: [1]}}\n  uncertainty:", "sample.keep.mu.inn", "Did you mean `in`? Known keys: range, in"),
        ("  uncertainty:", "  keep: {mu: {range: [1]}}\n  uncertainty:", "sample.keep.mu.range", "[low, high], both ends kept"),
        ("  uncertainty:", "  keep: 3\n  uncertainty:", "sample.keep", "Write e.g. keep: {redshift: [0.01, 2.3]}"),
        ("model:", "variants: [{name: a, without: x}]\nmodel:", "variants.0.without", "Labels of uncertainty terms to leave out"),
        ("model:", "figures: {only: [pie]}\nmodel:", "figures.only.0", "`only`:"),
    ],
)  # fmt: skip
def test_inner_mistakes_come_with_a_cure(project, old, new, key, words):
    found = {p.key: p for p in problems(project, (old, new))}
    assert words in str(found[key].cure)


def test_keys_are_called_keys(project):
    assert "row 9, key model: expected one of" in str(only(project, ("flat_lcdm", "flat_lcmd")))


@pytest.mark.parametrize(
    ("keep", "key", "words"),
    [
        ("{redshift: [0.5, 0.1]}", "sample.keep.redshift", "lower end of the range is above the upper one"),
        ("{redshift: {group: {neer: [0, 1]}}}", "sample.keep.redshift", "no row of survey.csv has this group (found 'neer')."),
        ("{redshift: [5, 6]}", "sample.keep", "none of the 40 supernovae of survey.csv (removed by redshift 40)"),
        ("{name: a}", "sample.keep.name", "`columns` does not map it"),
    ],
)  # fmt: skip
def test_cuts_that_fail_name_the_config(project, keep, key, words):
    """Its row and its key, whether it is checked or fitted."""
    path = project / "config.yaml"
    path.write_text(path.read_text().replace("  uncertainty:", f"  keep:\n    {keep[1:-1]}\n  uncertainty:"))
    (problem,) = check(path).problems
    assert problem.file == path and problem.row in (5, 6) and problem.key.startswith(key)
    assert words in str(problem) and str(problem).startswith(f"{path}, row {problem.row}, key {problem.key}: ")
    with pytest.raises(InputError) as caught:
        fit(path, run_folder=False)
    assert str(caught.value) == str(problem)
