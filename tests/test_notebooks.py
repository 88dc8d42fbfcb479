"""Every notebook runs from top to bottom, as a reader would run it, and is kept with what its cells print and draw."""

import json
import re
import shlex
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import bandratio as br
from bandratio.demo import LIMITS, NOISE, make_basin, normalised_scene, see

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


@pytest.mark.skipif(not NOTEBOOKS, reason="the notebooks are not part of this copy")
@pytest.mark.parametrize("notebook", NOTEBOOKS, ids=lambda path: path.stem)
def test_a_notebook_is_kept_small_with_pictures_and_without_complaints(notebook):
    assert notebook.stat().st_size < 700_000
    cells = [cell for cell in json.loads(notebook.read_text())["cells"] if cell["cell_type"] == "code"]
    assert [cell["execution_count"] for cell in cells] == list(range(1, len(cells) + 1))
    outputs = [output for cell in cells for output in cell["outputs"]]
    assert any("image/png" in output.get("data", {}) for output in outputs)
    assert not [
        output for output in outputs if output["output_type"] == "error" or output.get("name") == "stderr"
    ]


@pytest.mark.skipif(not NOTEBOOKS, reason="the notebooks are not part of this copy")
def test_the_command_lines_of_the_first_map_do_what_its_cells_do(tmp_path):
    """On a smaller scene than the notebook's: the same maps to the last digit, and the same candidates."""
    [path] = [path for path in NOTEBOOKS if path.stem == "first_map"]
    cells = json.loads(path.read_text())["cells"]
    text = "".join(
        line for cell in cells if cell["cell_type"] == "markdown" for line in [*cell["source"], "\n"]
    )
    lines = re.findall(r"^    (bandratio .*)$", text, re.MULTILINE)
    assert [line.split()[1] for line in lines] == ["demo", "check", "map", "pyroclastic", "report"]
    assert lines[0].endswith("--side 320")
    lines[0] = lines[0].replace("320", "160")
    for line in lines:
        words = [sys.executable, "-m", *shlex.split(line)]
        answer = subprocess.run(words, capture_output=True, text=True, cwd=tmp_path, check=False)
        assert answer.returncode == 0, f"{line}\n{answer.stderr}{answer.stdout}"

    maps = br.parameters(normalised_scene(see(make_basin(160))), NOISE, parts=True)
    written = br.open_maps(tmp_path / "maps.tif")
    assert set(written.data_vars) == set(maps.data_vars)
    for name in maps.data_vars:
        np.testing.assert_array_equal(written[name].values, maps[name].values, err_msg=str(name))
    flags = br.pyroclastic_flags(maps, **LIMITS)
    np.testing.assert_array_equal(br.open_maps(tmp_path / "flags.tif")["flag"].values, flags["flag"].values)
    assert (flags["flag"] >= 3).sum() > 10
