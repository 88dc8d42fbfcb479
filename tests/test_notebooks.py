"""Every notebook runs from top to bottom, as a reader would run it."""

from pathlib import Path

import pytest

NOTEBOOKS = sorted((Path(__file__).parents[1] / "notebooks").glob("*.ipynb"))


@pytest.mark.skipif(not NOTEBOOKS, reason="the notebooks are not part of this copy")
@pytest.mark.filterwarnings("default")  # the libraries that run notebooks have warnings of their own
@pytest.mark.parametrize("notebook", NOTEBOOKS, ids=lambda path: path.stem)
def test_notebook_runs(notebook, tmp_path):
    import nbformat
    from nbclient import NotebookClient

    document = nbformat.read(notebook, as_version=4)
    NotebookClient(document, timeout=600, resources={"metadata": {"path": str(tmp_path)}}).execute()
    pictures = sum(
        "image/png" in output.get("data", {})
        for cell in document.cells
        if cell.cell_type == "code"
        for output in cell.outputs
    )
    assert pictures, "a notebook without a picture explains too little"
