"""The example notebook runs from top to bottom, and shows rich answers."""

from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

NOTEBOOK = Path(__file__).parents[2] / "examples" / "ranking.ipynb"


def test_the_example_notebook_runs(seeded_path, tmp_path, monkeypatch):
    monkeypatch.setenv("PINLIGHT_DB", str(seeded_path))
    monkeypatch.setenv("IPYTHONDIR", str(tmp_path / "ipython"))
    monkeypatch.setenv("JUPYTER_RUNTIME_DIR", str(tmp_path / "runtime"))
    notebook = nbformat.read(NOTEBOOK, as_version=4)
    assert all(not cell.outputs for cell in notebook.cells if cell.cell_type == "code"), "clear the outputs"
    NotebookClient(notebook, timeout=60, kernel_name="python3").execute()
    shown = [output for cell in notebook.cells for output in cell.get("outputs", [])]
    rich = [output["data"]["text/html"] for output in shown if "text/html" in output.get("data", {})]
    assert any("<div class='pinlight'>" in html and "HD 10132" in html for html in rich)
    assert any("calibration_error" in html for html in rich)
    assert any("application/vnd.bokehjs_exec.v0+json" in output.get("data", {}) for output in shown)
    printed = "".join(output["text"] for output in shown if output.output_type == "stream")
    assert "Slow Ember:" in printed
    assert "  HD 10132, HD 9443" in printed


@pytest.mark.parametrize("name", ["<script>alert(1)</script>", "A & B"])
def test_names_are_escaped(catalogue, name):
    import pinlight as pl

    html = pl.rank(
        catalogue, pl.Target(26.0, -15.9, name=name), baseline_m=100, wavelength_um=1.6
    )._repr_html_()
    assert name not in html
    assert "&lt;script&gt;" in html or "A &amp; B" in html
