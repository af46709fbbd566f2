"""The notebooks run from a clean kernel, top to bottom, without a warning, and are committed without output."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

NOTEBOOKS = sorted((Path(__file__).parents[1] / "notebooks").glob("*.ipynb"))
SLOWEST_CELL_S = 120  # the first one compiles kernels; a cell that takes longer has hung

pytestmark = [
    # pyzmq's event loop, not ours.
    pytest.mark.filterwarnings("default::DeprecationWarning:zmq"),
    pytest.mark.filterwarnings("default::DeprecationWarning:jupyter_client"),
]


def test_there_are_notebooks() -> None:
    assert NOTEBOOKS


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_committed_without_output(path: Path) -> None:
    nbformat.validate(nbformat.read(path, as_version=4))
    command = [sys.executable, "-m", "nbstripout", "--verify", str(path)]
    verdict = subprocess.run(command, capture_output=True, text=True, check=False)
    assert verdict.returncode == 0, f"{path.name}: run nbstripout on it before committing\n{verdict.stdout}"


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_runs_from_a_clean_kernel(path: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # The kernel inherits it, and would then draw without showing.
    monkeypatch.delenv("MPLBACKEND", raising=False)
    notebook = nbformat.read(path, as_version=4)
    client = NotebookClient(
        notebook, timeout=SLOWEST_CELL_S, kernel_name="python3", resources={"metadata": {"path": str(tmp_path)}}
    )
    client.execute()
    pictures = 0
    for cell in notebook.cells:
        for output in cell.get("outputs", []):
            # A warning or a traceback in front of a reader is a defect.
            assert output.get("name") != "stderr", output["text"]
            assert output["output_type"] != "error"
            pictures += "image/png" in output.get("data", {})
    assert pictures >= 3
