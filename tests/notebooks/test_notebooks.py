"""The notebooks of docs/notebooks run from first cell to last, without a word on stderr, and are kept without outputs."""

from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

from tests.realdata.sets import FOLDER, measured

NOTEBOOKS = Path(__file__).resolve().parents[2] / "docs" / "notebooks"
LONGEST_S = 120


def executed(name: str, folder: Path, monkeypatch: pytest.MonkeyPatch) -> nbformat.NotebookNode:
    """The notebook with its outputs; a cell that fails raises with its traceback. Jupyter's own files go to ``folder``."""
    for variable in ("JUPYTER_RUNTIME_DIR", "JUPYTER_DATA_DIR", "JUPYTER_CONFIG_DIR", "IPYTHONDIR"):
        monkeypatch.setenv(variable, str(folder / variable.lower()))
    monkeypatch.setenv("LABMON_REALDATA", str(FOLDER))
    book = nbformat.read(NOTEBOOKS / f"{name}.ipynb", as_version=4)
    client = NotebookClient(book, timeout=LONGEST_S, kernel_name="python3", resources={"metadata": {"path": str(NOTEBOOKS)}})
    client.execute()
    assert [output.text for output in outputs(book) if output.get("name") == "stderr"] == []
    return book


def outputs(book: nbformat.NotebookNode) -> list[nbformat.NotebookNode]:
    return [output for cell in book.cells if cell.cell_type == "code" for output in cell.outputs]


def pictures(book: nbformat.NotebookNode) -> int:
    kinds = [kind for output in outputs(book) for kind in output.get("data", {})]
    return sum(kind.startswith("application/vnd.plotly") for kind in kinds)


def tables(book: nbformat.NotebookNode) -> int:
    return sum("<table" in output.get("data", {}).get("text/html", "") for output in outputs(book))


def test_the_simulated_fibre_runs(tmp_path, monkeypatch):
    book = executed("simulated_fibre", tmp_path, monkeypatch)
    assert (pictures(book), tables(book)) == (2, 2)


@pytest.mark.realdata
def test_the_measured_run_goes_from_import_to_figures(tmp_path, monkeypatch):
    measured("fibre_sop_runs/run_c.csv.gz")
    book = executed("measured_run", tmp_path, monkeypatch)
    assert (pictures(book), tables(book)) == (2, 4)


def test_a_failing_cell_fails_the_test(tmp_path, monkeypatch):
    """The check itself: a notebook whose figure is wrong does not pass."""
    book = nbformat.v4.new_notebook(cells=[nbformat.v4.new_code_cell("assert 1 == 2, 'a wrong figure'")])
    nbformat.write(book, tmp_path / "wrong.ipynb")
    monkeypatch.setattr("tests.notebooks.test_notebooks.NOTEBOOKS", tmp_path)
    with pytest.raises(Exception, match="a wrong figure"):
        executed("wrong", tmp_path, monkeypatch)


@pytest.mark.parametrize("path", sorted(NOTEBOOKS.glob("*.ipynb")), ids=lambda path: path.stem)
def test_notebooks_are_kept_without_outputs(path):
    book = nbformat.read(path, as_version=4)
    nbformat.validate(book)
    code = [cell for cell in book.cells if cell.cell_type == "code"]
    assert code and all(not cell.outputs and cell.execution_count is None for cell in code)


def test_every_notebook_is_run_by_a_test():
    assert {path.stem for path in NOTEBOOKS.glob("*.ipynb")} == {"simulated_fibre", "measured_run"}
