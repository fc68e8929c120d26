"""The demo's notebook runs from top to bottom, as an analyst would run it."""

from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

FOLDER = Path(__file__).parents[1] / "demo_data"


def shown(cell):
    return "".join(
        output.get("text", "") or "".join(str(v) for v in output.get("data", {}).values())
        for output in cell["outputs"]
    )


@pytest.mark.slow
def test_the_what_if_walk_through(monkeypatch):
    monkeypatch.setenv("PYTHONPATH", str(FOLDER.parent))
    notebook = nbformat.read(FOLDER / "what_if.ipynb", as_version=4)
    nbformat.validate(notebook)
    assert all(not cell.get("outputs") for cell in notebook.cells)  # kept without outputs
    client = NotebookClient(notebook, timeout=600, resources={"metadata": {"path": str(FOLDER)}})
    client.execute()
    texts = {cell["id"]: shown(cell) for cell in notebook.cells if cell.cell_type == "code"}
    said = "\n".join(texts.values())
    assert '<what if "call the quiet": all_live +' in said and "breaks even at" in said
    assert 'needs "weekly" to "cancelled" -' in said and said.count("base:all_live") >= 3
    assert "adjusted by Holm's rule" in said and "departures in the treated arm" in said
    assert "<svg" in said and 'class="cf-panel"' in said
