"""The demo notebook is clean as committed, and runs from top to bottom with its figures."""

from __future__ import annotations

import base64
import io
import shutil
from pathlib import Path

import nbformat
import numpy as np
import pytest
from matplotlib.image import imread
from nbclient import NotebookClient

ROOT = Path(__file__).parent.parent
NOTEBOOK = ROOT / "notebooks" / "demo.ipynb"
FIGURES = 4


def read() -> nbformat.NotebookNode:
    return nbformat.read(NOTEBOOK, as_version=4)


@pytest.fixture(scope="module")
def outputs(tmp_path_factory) -> list[nbformat.NotebookNode]:
    """All outputs of a run in a copy of the two folders, so that nothing is left behind."""
    copy = tmp_path_factory.mktemp("demo")
    shutil.copytree(ROOT / "demo_data", copy / "demo_data")
    (copy / "notebooks").mkdir()
    notebook = read()
    resources = {"metadata": {"path": str(copy / "notebooks")}}
    # an error in a cell is raised here, with the cell
    NotebookClient(notebook, timeout=300, kernel_name="python3", resources=resources).execute()
    assert not list((copy / "notebooks").iterdir())
    return [output for cell in notebook.cells for output in cell.get("outputs", [])]


def test_as_committed():
    notebook = read()
    nbformat.validate(notebook)
    assert notebook.metadata.kernelspec.name == "python3"
    code = [cell for cell in notebook.cells if cell.cell_type == "code"]
    assert not any(cell.outputs or cell.execution_count for cell in code)
    # as many words as code: the notebook guides
    assert len(notebook.cells) - len(code) >= len(code) / 2


def test_figures(outputs):
    """Every figure came out, and is more than an empty frame."""
    pictures = [o.data["image/png"] for o in outputs if "image/png" in o.get("data", {})]
    assert len(pictures) == FIGURES
    for picture in pictures:
        pixels = imread(io.BytesIO(base64.b64decode(picture)), format="png")[..., :3]
        assert min(pixels.shape[:2]) > 150
        inked = np.abs(pixels - pixels[0, 0]).max(axis=-1) > 0.1
        rows, columns = inked.any(axis=1), inked.any(axis=0)
        assert rows.mean() > 0.5
        assert columns.mean() > 0.5
        assert len(np.unique(pixels[inked].round(1), axis=0)) > 3


def test_headline_and_tables(outputs):
    pages = [o.data["text/html"] for o in outputs if "text/html" in o.get("data", {})]
    assert sum("Seed posterior at" in page for page in pages) == 1
    regions = next(page for page in pages if "sign_share" in page)
    for word in ("posterior-midline", "held", "contested", "silent"):
        assert word in regions
    assert any("across the border" in page for page in pages)


def test_no_warning_reaches_the_reader(outputs):
    assert [o.text for o in outputs if o.output_type == "stream" and o.name == "stderr"] == []
