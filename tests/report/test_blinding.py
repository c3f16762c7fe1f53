"""A blinded run gives nothing away: every file it leaves is searched; unblinding gives back what was hidden."""

import json
import re
import subprocess
import sys

import numpy as np
import pytest

from fitter.api import check, fit, load_run, unblind
from fitter.comparing import compare
from fitter.errors import InputError
from fitter.inference.checkpoint import veiled
from fitter.likelihood.posterior import LogPosterior
from fitter.report.blinding import data_key, hidden_names, offsets
from fitter.sample.sample import Sample

SETTINGS = """
sample:
  table: table.csv
  columns: {redshift: z, distance_modulus: mu}
  uncertainty: [{intrinsic: 0.12}, {modes: modes.csv, label: calibration}]
  distance_scale: absolute
model: flat_lcdm
sampling: {replicas: 2, walkers: 16, target_ess: 400, seed: 4}
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("blinded")
    rng = np.random.default_rng(2)
    z = np.sort(rng.uniform(0.03, 1.1, 90))
    posterior = LogPosterior.build(Sample.from_arrays(z, z + 40, sigma=0.12, distance_scale="absolute"), "flat_lcdm")
    mu = posterior.simulate(np.array([[0.31, 71.0]]), rng)[0]
    (folder / "table.csv").write_text("z,mu\n" + "".join(f"{a:.17g},{b:.17g}\n" for a, b in zip(z, mu, strict=True)))
    (folder / "modes.csv").write_text("tilt\n" + "".join(f"{0.02 * a:.17g}\n" for a in z))
    (folder / "open.yaml").write_text(SETTINGS)
    (folder / "blind.yaml").write_text(SETTINGS + "blind: true\n")
    (folder / "short.yaml").write_text(SETTINGS.replace("target_ess: 400", "target_ess: 100000, max_steps: 40") + "blind: true\n")
    return folder


@pytest.fixture(scope="module")
def shown(folder):
    return fit(folder / "open.yaml", run_folder=folder / "open")


@pytest.fixture(scope="module")
def blind(folder, shown):
    return fit(folder / "blind.yaml", run_folder=folder / "blind")


def values_of(summary):
    """Every central value that must not be readable."""
    keys = ("mean", "median", "low68", "high68", "low95", "high95", "best")
    profile = [facts[delta][side] for facts in summary["profile"].values() for delta in ("delta1", "delta4") for side in ("low", "high")]
    return [facts[key] for facts in summary["parameters"].values() for key in keys] + profile


def _key(result):
    return data_key(result.sample, "table.csv")


def leaks(folder, values, positions):
    """Files that hold one of the values as text, to 5 significant digits, or one of the positions as a binary number."""
    texts = {f"{v:.5g}" for v in values if abs(v) > 1e-6} | {f"{v:.6f}"[:7] for v in values if abs(v) > 1e-2}
    binary = {np.float64(p).tobytes() for p in positions}
    found = []
    for path in folder.rglob("*"):
        if path.is_file():
            content = path.read_bytes()
            text = content.decode("latin-1")
            numbers = "" if path.suffix in (".png", ".pdf") else text
            found += [(path.name, t) for t in texts if re.search(rf"(?<![\d.]){re.escape(t)}", numbers)]
            found += [(path.name, "a position of the chain") for b in binary if b in content]
    return found


def test_the_search_finds_what_an_open_run_shows(shown):
    found = leaks(shown.run_folder, values_of(shown.summary()), shown.chains.chain[0, :5, 0].ravel())
    assert {"summary.json", "summary.md", "summary.csv", "run.log", "chain.h5"} <= {name for name, _ in found}


def test_no_file_of_a_blinded_run_gives_a_value_away(blind, shown):
    assert leaks(blind.run_folder, values_of(shown.summary()), shown.chains.chain.reshape(-1, 2)[::500].ravel()) == []
    names = {p.name for p in blind.run_folder.rglob("*")}
    assert "corner.pdf" in names and not names & {"hubble_diagram.pdf", "figures_data.h5", "methods.md"}


def test_an_unfinished_chain_gives_nothing_away_either_and_resumes(folder, shown, monkeypatch):
    monkeypatch.setattr("fitter.inference.replicas._STORE_SECONDS", 0)  # store every chunk
    short = fit(folder / "short.yaml", run_folder=folder / "short")
    assert list(short.run_folder.rglob("replica_*.npz"))
    start = fit(folder / "open.yaml", run_folder=False)
    positions = start.chains.chain[:, :, :4].ravel()
    assert leaks(short.run_folder, values_of(shown.summary()), positions[:200]) == []
    longer = (folder / "short.yaml").read_text().replace("max_steps: 40", "max_steps: 400").replace("100000", "400")
    (folder / "longer.yaml").write_text(longer)
    resumed = fit(folder / "longer.yaml", run_folder=folder / "short", resume=True)
    assert resumed.converged
    # The same seed: the resumed chain, true positions again under the veil, is the one never interrupted.
    hidden = offsets(_key(resumed), resumed.chains.names)
    moved = resumed.chains.chain - [hidden[n] for n in resumed.chains.names]
    steps = min(moved.shape[1], shown.chains.chain.shape[1])
    np.testing.assert_allclose(moved[:, :steps], shown.chains.chain[:, :steps], atol=1e-10)


def test_widths_chi2_and_diagnostics_stay(blind, shown):
    a, b = blind.summary(), shown.summary()
    assert a["blinded"] == ["H0", "omega_m"]
    for name, facts in a["parameters"].items():
        for key in ("sd", "ess", "rhat"):
            assert facts[key] == pytest.approx(b["parameters"][name][key], rel=1e-6)
        assert facts["high68"] - facts["low68"] == pytest.approx(b["parameters"][name]["high68"] - b["parameters"][name]["low68"], rel=1e-6)
    assert a["best_fit"]["chi2"] == b["best_fit"]["chi2"] and a["information"] == b["information"]
    assert any(text.startswith("Blinded: omega_m, H0") for text in a["warnings"])
    assert abs(a["parameters"]["omega_m"]["median"] - b["parameters"]["omega_m"]["median"]) >= 0.1
    assert "+\\mathrm{hidden}" in blind.corner().axes[0].get_title()
    assert blind.posterior["q0"].median() == pytest.approx(0, abs=1e-12)
    with pytest.raises(InputError, match="hidden"):
        blind.hubble_diagram()


def test_no_epoch_is_shown_whose_edge_today_would_tell_its_median(blind, shown):
    assert "z_acceleration" in shown.summary()["parameters"]
    assert not {"z_acceleration", "z_equality"} & (
        blind.summary()["parameters"].keys() | blind.chains.kinds.keys() | blind.chains.extra.keys()
    )


def test_the_terminal_shows_no_value(folder, blind, shown):
    command = [sys.executable, "-m", "fitter.cli", "fit", str(folder / "blind.yaml"), "--run-folder", str(folder / "again")]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    for text in (done.stdout + done.stderr, str(blind)):
        assert "Blinded" in text
        assert not [v for v in values_of(shown.summary()) if f"{v:.3f}" in text and abs(v) > 0.05]


def test_unblinding_needs_a_word_and_gives_everything_back(folder, shown, blind):
    run = folder / "again"
    command = [sys.executable, "-m", "fitter.cli", "unblind", str(run)]
    refused = subprocess.run(command, capture_output=True, text=True, stdin=subprocess.DEVNULL)
    assert refused.returncode == 2 and "confirmation" in refused.stderr
    assert json.loads((run / "summary.json").read_text())["blinded"]
    subprocess.run([*command, "--yes", "-q"], check=True, capture_output=True)
    summary = json.loads((run / "summary.json").read_text())
    assert "blinded" not in summary
    assert re.fullmatch(r"[0-9a-f]{64}", summary["unblinded"]["config_sha256"]) and summary["unblinded"]["when"][:4].isdigit()
    for name, facts in shown.summary()["parameters"].items():
        for key in ("mean", "sd", "median", "low68", "high68", "best"):
            assert summary["parameters"][name][key] == pytest.approx(facts[key], rel=1e-9), (name, key)
    opened = load_run(run)[0].posterior
    np.testing.assert_allclose(opened.chain, shown.chains.chain, atol=1e-10)
    assert (run / "figures" / "hubble_diagram.pdf").exists()
    with pytest.raises(InputError, match="was unblinded on"):
        unblind(run)
    with pytest.raises(InputError, match="not blinded"):
        unblind(shown.run_folder)


def test_offsets_belong_to_the_data_and_are_never_small(blind):
    a, b = (offsets(key, ("omega_m", "H0", "w")) for key in (_key(blind), "other"))
    assert a != b and a == offsets(_key(blind), ("omega_m", "H0", "w"))
    drawn = np.array([offsets(str(i), ("omega_m",))["omega_m"] for i in range(400)])
    assert np.abs(drawn).min() >= 0.1 and np.abs(drawn).max() <= 0.5
    assert abs((drawn > 0).mean() - 0.5) < 4 * 0.5 / 20


def test_a_list_hides_its_parameters_and_what_follows_from_them(folder, shown):
    (folder / "one.yaml").write_text(SETTINGS + "blind: [omega_m]\n")
    some = fit(folder / "one.yaml", run_folder=False).summary()
    assert some["blinded"] == ["omega_m"]
    assert some["parameters"]["H0"]["median"] == pytest.approx(shown.summary()["parameters"]["H0"]["median"], rel=1e-9)
    assert some["parameters"]["q0"]["median"] == pytest.approx(0, abs=1e-12)
    (folder / "wrong.yaml").write_text(SETTINGS + "blind: [omega_k]\n")
    with pytest.raises(InputError, match="not sampled"):
        fit(folder / "wrong.yaml", run_folder=folder / "wrong")
    assert not list(folder.glob("wrong*/"))
    assert "not sampled" in check(folder / "wrong.yaml").problems[0].problem


def test_noise_parameters_stay_open():
    z = np.linspace(0.05, 1, 40)
    posterior = LogPosterior.build(Sample.from_arrays(z, z + 40, sigma=0.1, intrinsic={"uniform": [0, 0.3]}), "flat_lcdm")
    assert hidden_names(True, posterior) == ("omega_m",)
    assert hidden_names(False, posterior) == ()


def test_the_veil_comes_off_bit_by_bit():
    x = np.random.default_rng(0).standard_normal((5, 3, 2))
    covered = veiled(x, b"key")
    assert covered.shape == x.shape and not np.any(covered == x)
    assert np.array_equal(veiled(covered, b"key"), x)
    assert veiled(x, b"") is x


def test_blinded_fits_are_compared_by_their_differences(folder, blind, shown):
    wcdm = SETTINGS.replace("flat_lcdm", "flat_wcdm")
    (folder / "other.yaml").write_text(wcdm + "blind: true\n")
    (folder / "other_open.yaml").write_text(wcdm)
    (folder / "cut.yaml").write_text(
        SETTINGS.replace("  distance_scale", "  keep: {redshift: [0.1, 2]}\n  distance_scale") + "blind: true\n"
    )
    for name in ("other", "other_open", "cut"):
        fit(folder / f"{name}.yaml", run_folder=folder / name)
    hidden = compare([folder / "blind", folder / "other", folder / "cut"], names=["a", "b", "c"], run_folder=folder / "compared")
    open_ = compare([folder / "open", folder / "other_open"], names=["a", "b"], run_folder=False)
    medians = {run: fit_summary(folder / run)["parameters"]["omega_m"]["median"] for run in ("blind", "other", "open", "other_open")}
    assert medians["other"] - medians["blind"] == pytest.approx(medians["other_open"] - medians["open"], abs=1e-9)
    assert hidden.report["warnings"][0].startswith("Blinded")
    a, b = (next(v for v in c.report["variants"] if v["name"] == "b") for c in (hidden, open_))
    assert a["delta"]["chi2"] == pytest.approx(b["delta"]["chi2"], abs=1e-9)
    assert leaks(folder / "compared", values_of(shown.summary()), []) == []
    assert not list((folder / "compared").rglob("plane_*"))
    with pytest.raises(InputError, match="different ways"):
        compare([folder / "blind", folder / "open"], names=["a", "b"], run_folder=False)


def fit_summary(run):
    return json.loads((run / "summary.json").read_text())
