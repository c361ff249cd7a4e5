"""The notebooks of docs/notebooks run from first cell to last, without a word on stderr, and are kept without outputs."""

from pathlib import Path

import nbformat
import numpy as np
import pytest
from nbclient import NotebookClient

from ingest.store.append import write_blocks
from ingest.times import at_of
from labmon.experiments.actions import set_limit
from labmon.experiments.models import LimitVersion
from labmon.people.keys import make_person_key
from labmon.people.models import Role
from labmon.pipeline.catch_up import catch_up
from tests.factories import NOON_US, make_experiment, make_person, make_station, make_tap
from tests.ingest.door.test_over_uvicorn import free_port, server
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


@pytest.mark.django_db(transaction=True)
def test_the_notebook_client_reads_a_night_from_a_real_server(tmp_path, monkeypatch):
    """Two hours at 1 Hz: 600 s missing, 1200 s at 17 dB; the notebook asserts against its own sums, this test against these."""
    port, key = free_port(), a_night()
    monkeypatch.setenv("LABMON_ADDRESS", f"http://127.0.0.1:{port}")
    monkeypatch.setenv("LABMON_PERSON_KEY", key)
    monkeypatch.setenv("PYTHONPATH", str(NOTEBOOKS.parents[1] / "clients" / "notebook"))
    with server(port, "labmon.asgi"):
        book = executed("notebook_client", tmp_path, monkeypatch)
    said = "".join(output.text for output in outputs(book) if output.get("name") == "stdout")
    assert "1200 readings below 20 dB, first at 13:00:00, last at 13:19:59 UTC" in said
    assert "longest hole: 601 s, up to 12:40:00 UTC" in said and "8 days" in said
    assert (pictures(book), tables(book)) == (1, 5)


def a_night() -> str:
    """Bench a's two hours, judged; the key of someone who may read them."""
    at_s = np.concatenate([np.arange(0, 1800), np.arange(2400, 7200)])
    er_db = np.where((at_s >= 3600) & (at_s < 4800), 17.0, 25.0)
    tap = make_tap(make_station("bench-a", room="room 1"), "in")
    experiment = make_experiment(tap, owner=make_person(Role.OWNER, username="owner"), name="trap loading")
    version = set_limit(experiment, tap, "er_db", alarm=20.0, by=experiment.owner, reason="the trap needs it")
    LimitVersion.objects.filter(pk=version.pk).update(valid_from=at_of(NOON_US - 3_600_000_000))
    write_blocks(tap, NOON_US + 1_000_000 * at_s, {"port1": np.full(len(at_s), 1e-3), "port2": 1e-3 / 10 ** (er_db / 10)},
                 boot="boot-1", sequence=np.arange(len(at_s)), arrival_us=NOON_US + 1_000_000 * at_s)
    catch_up(NOON_US + 7201 * 1_000_000)
    return make_person_key(make_person(Role.RESEARCHER, username="reader"), by=None)[1]


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
    assert {path.stem for path in NOTEBOOKS.glob("*.ipynb")} == {"simulated_fibre", "measured_run", "notebook_client"}
