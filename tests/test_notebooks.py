"""The notebooks run from top to bottom in a fresh copy, and carry no outputs in the repository."""

import os
import shutil
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
NOTEBOOKS = sorted((ROOT / "notebooks").glob("*.ipynb"))


def test_there_are_notebooks_without_outputs():
    nbformat = pytest.importorskip("nbformat", reason="needs the extra `test`")
    assert len(NOTEBOOKS) == 3
    for path in NOTEBOOKS:
        for cell in nbformat.read(path, as_version=4).cells:
            if cell.cell_type == "code":
                assert not cell.outputs and cell.execution_count is None, f"{path.name}: strip the outputs"


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda p: p.stem)
def test_notebook_runs(path, tmp_path, monkeypatch):
    nbformat = pytest.importorskip("nbformat", reason="needs the extra `test`")
    nbclient = pytest.importorskip("nbclient", reason="needs the extra `test`")
    pytest.importorskip("ipykernel", reason="needs the extra `test`")
    for folder in ("configs", "data_demo"):
        shutil.copytree(ROOT / folder, tmp_path / folder, ignore=shutil.ignore_patterns("__pycache__"))
    (tmp_path / "notebooks").mkdir()
    monkeypatch.setenv("PATH", f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}")
    monkeypatch.setenv("IPYTHONDIR", str(tmp_path / "ipython"))
    notebook = nbformat.read(path, as_version=4)
    # The kernel is started by this interpreter's own command, not by what is registered under a name.
    kernel = [sys.executable, "-m", "ipykernel_launcher", "-f", "{connection_file}"]
    manager = _manager(kernel)
    client = nbclient.NotebookClient(notebook, km=manager, timeout=300, resources={"metadata": {"path": str(tmp_path / "notebooks")}})
    client.execute()
    results = [o for cell in notebook.cells if cell.cell_type == "code" for o in cell.outputs if o.output_type == "execute_result"]
    shown = " ".join(str(o.data) for o in results)
    assert "Sound." in shown or "Computed soundly, but" in shown, "no fit was shown"
    assert any("image/png" in o.data for o in results), "no figure was shown"


def _manager(command):
    from jupyter_client import AsyncKernelManager
    from jupyter_client.kernelspec import KernelSpec

    class Manager(AsyncKernelManager):
        @property
        def kernel_spec(self):
            return KernelSpec(argv=command, display_name="this Python", language="python")

    return Manager()
