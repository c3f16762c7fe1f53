"""The README's config works as printed, and every file it points to exists."""

import re
from pathlib import Path

import numpy as np

from fitter import check

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def test_example_config_passes_check(tmp_path):
    (config,) = re.findall(r"```yaml\n(.*?)```", README, flags=re.S)
    (tmp_path / "mine.yaml").write_text(config, encoding="utf-8")
    z = np.linspace(0.02, 1.0, 40)
    mu = 43.2 + 5 * np.log10(z * (1 + 0.6 * z))
    rows = [f"{a:.4f},{a:.4f},{m:.4f},0.15" for a, m in zip(z, mu, strict=True)]
    (tmp_path / "my_table.csv").write_text("\n".join(["zcmb,zhel,mu,mu_error", *rows]) + "\n")
    (tmp_path / "systematics.txt").write_text("\n".join(["40", *(["1e-4"] * 1600)]) + "\n")
    found = check(tmp_path / "mine.yaml")
    assert found.problems == ()


def test_links_point_to_files():
    for text in (README, (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")):
        for target in re.findall(r"\]\(([^)#:]+)\)", text):
            assert (ROOT / target).exists(), target


def test_make_targets_exist():
    targets = set(re.findall(r"^(\w+):", (ROOT / "Makefile").read_text(), flags=re.M))
    for text in (README, (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")):
        assert set(re.findall(r"^    make (\w+)", text, flags=re.M)) <= targets
