"""The notebooks run from top to bottom without a warning."""

from pathlib import Path

import pytest

jupytext = pytest.importorskip("jupytext")
nbclient = pytest.importorskip("nbclient")
nbformat = pytest.importorskip("nbformat")
for library in ("h5netcdf", "matplotlib", "trexio", "zarr"):
    pytest.importorskip(library)

FOLDER = Path(__file__).parents[2] / "notebooks-demo"
NOTEBOOKS = sorted(FOLDER.glob("*.md"))
STRICT = """\
import warnings
warnings.simplefilter("error")
warnings.filterwarnings("ignore", module="zmq|ipykernel|tornado|traitlets|jupyter_client")
"""


def test_the_documented_ones_are_there():
    index = (FOLDER.parent / "docs" / "index.md").read_text(encoding="utf-8")
    named = {line.removeprefix("notebooks/") for line in index.splitlines()}
    assert len(NOTEBOOKS) >= 6
    assert {path.stem for path in NOTEBOOKS} <= named


@pytest.mark.filterwarnings("ignore::DeprecationWarning")  # of the machinery that runs them
@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_notebook_runs(path, monkeypatch):
    monkeypatch.delenv("MPLBACKEND", raising=False)  # the kernel then shows figures
    if path.stem == "cluster-sweep":
        pytest.importorskip("distributed")
    notebook = jupytext.read(path)
    notebook.cells.insert(0, nbformat.v4.new_code_cell(STRICT))
    nbclient.NotebookClient(
        notebook, timeout=120, kernel_name="python3", resources={"metadata": {"path": str(FOLDER)}}
    ).execute()
    outputs = [output for cell in notebook.cells for output in cell.get("outputs", [])]
    assert outputs
    shouted = [output.text for output in outputs if output.get("name") == "stderr"]
    assert not shouted
    pictures = [output for output in outputs if "image/png" in output.get("data", {})]
    assert len(pictures) == sum("plt.subplots" in cell.source for cell in notebook.cells)
