"""What is installed is what the package needs, and the lower bounds that are promised are those that are tried."""

import re
import shutil
import subprocess
import sys
import tarfile
import tomllib
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]


def test_the_oldest_versions_are_the_lower_bounds():
    pins = dict(re.findall(r"^([\w-]+)==([\d.]+)$", (ROOT / ".ci/oldest.txt").read_text(), flags=re.M))
    bounds = dict(re.fullmatch(r"([\w-]+)>=([\d.]+)", line).groups() for line in PROJECT["dependencies"])
    assert set(pins) == set(bounds)
    for name, bound in bounds.items():
        assert (pins[name] + ".").startswith(bound + "."), f"{name}: {bound} is promised, {pins[name]} is tried"


def test_the_changelog_knows_this_version():
    from fitter import __version__

    assert PROJECT["version"] == __version__
    assert f"\n## {__version__}\n" in (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")


def test_wheel_and_source_distribution(tmp_path):
    """Both are built from a copy, and the wheel's own copy of the package answers with nothing beside it."""
    pytest.importorskip("setuptools", minversion="77", reason="needs the extra `test`")
    source = tmp_path / "source"
    kept = ("fitter", "tests", "configs", "docs", "notebooks", "data_demo")
    for name in kept:
        shutil.copytree(ROOT / name, source / name, ignore=shutil.ignore_patterns("__pycache__", "baseline"))
    for name in ("pyproject.toml", "MANIFEST.in", "README.md", "LICENSE", "CHANGELOG.md", "DEVELOPERS.md", "Makefile"):
        shutil.copy(ROOT / name, source / name)
    build = "from setuptools import build_meta as b; print(b.build_wheel('../out')); print(b.build_sdist('../out'))"
    (tmp_path / "out").mkdir()
    done = subprocess.run([sys.executable, "-c", build], cwd=source, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr[-2000:]
    (wheel,), (archive,) = (list((tmp_path / "out").glob(kind)) for kind in ("*.whl", "*.tar.gz"))
    inside = zipfile.ZipFile(wheel).namelist()
    modules = {p.relative_to(ROOT).as_posix() for p in (ROOT / "fitter").rglob("*.py")}
    assert modules | {"fitter/py.typed", "fitter/report/page_template.html"} <= set(inside)
    assert not [name for name in inside if name.startswith("tests")]
    names = {name.partition("/")[2] for name in tarfile.open(archive).getnames()}
    assert {"CHANGELOG.md", "docs/capsule.md", "configs/flat_lcdm.yaml", "data_demo/survey.csv", "tests/test_packaging.py"} <= names
    zipfile.ZipFile(wheel).extractall(tmp_path / "installed")
    ask = "import fitter, fitter.report.page as p; from importlib.resources import files; print(fitter.__file__, len(p.page_text.__doc__))"
    done = subprocess.run(
        [sys.executable, "-c", f"import sys; sys.path.insert(0, {str(tmp_path / 'installed')!r}); {ask}"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
    )
    assert str(tmp_path / "installed") in done.stdout, done.stderr
