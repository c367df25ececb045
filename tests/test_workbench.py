"""The workbench from the kernel's side: state, settings, work in the background, errors. No browser."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import threading
import time
import tomllib
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
import scipy.io
import traitlets

import schurbench as sb
from schurbench.measures import RATIO_LIMIT, orthogonality_ratio, residual_ratio
from schurbench.panels import serve

ROOT = Path(__file__).parent.parent
PATIENCE = 120.0


@pytest.fixture(scope="module")
def shared() -> Iterator[sb.Workbench]:
    """A finished workbench on the demonstration plant, for tests that do not change its run."""
    wb = sb.Workbench(sb.demo_matrix())
    wb.wait(PATIENCE)
    yield wb
    wb.close()


def texts(wb: sb.Workbench) -> list[str]:
    return [wb._page.where.value, *(line.value for line in wb._page.say.values())]


# --- showing ------------------------------------------------------------------------------------------------------


def test_a_small_matrix_is_run_explained_and_certified_at_once(shared: sb.Workbench) -> None:
    assert shared.status == "finished"
    assert shared.run is not None
    assert shared.run.converged
    assert shared.cursor > 0
    assert shared.diagnosis.findings
    assert shared.factors.certificate().passed
    assert all(texts(shared))
    assert shared.error == ""


def test_every_panel_follows_the_cursor(shared: sb.Workbench) -> None:
    shared.cursor = 10
    shared.wait(PATIENCE)
    before = texts(shared)
    picture = shared._page.matrix._swap.mark.image.value
    shared.cursor = 100
    shared.wait(PATIENCE)
    assert all(a != b for a, b in zip(before, texts(shared), strict=True))
    assert shared._page.matrix._swap.mark.image.value != picture
    for figure in (shared._page.track, shared._page.subdiagonal.picture, shared._page.deflations):
        assert list(figure._cursor.x) == [100, 100]
    assert shared._page.slider.value == 100
    shared._page.slider.value = 30
    assert shared.cursor == 30


def test_clicks_choose_a_step_and_a_row_everywhere(shared: sb.Workbench) -> None:
    def click(figure: object, x: float, y: float) -> None:
        message = {"event": "element_click", "data": {"click_x": x, "click_y": y}}
        figure._surface._handle_custom_msgs(None, message)  # type: ignore[attr-defined]

    click(shared._page.track, 50.3, 2.0)
    assert shared.cursor == 50
    click(shared._page.subdiagonal.picture, 61.8, 7.2)
    assert (shared.cursor, shared.row) == (62, 7)
    shared.wait(PATIENCE)
    for figure in (shared._page.matrix, shared._page.subdiagonal.picture, shared._page.deflations):
        assert list(figure._row.y) == [7, 7]
    click(shared._page.matrix, 3.0, 7.4)
    assert shared.row is None  # the same row again: back to following the iteration
    click(shared._page.deflations, -40.0, 1e9)
    assert (shared.cursor, shared.row) == (0, shared.matrix.n - 1)
    values = shared.run.to_matrix_units(shared.run.ritz(0))
    click(shared._page.spectrum, float(values[5].real), float(values[5].imag))
    assert shared.row is not None
    assert values[shared.row] == values[5]
    shared.row = None


def test_buttons_walk_from_deflation_to_deflation(shared: sb.Workbench) -> None:
    steps = sorted({d.step for d in shared.run.deflations})
    shared._page.to_start.click()
    assert shared.cursor == 0
    shared._page.to_next.click()
    shared._page.to_next.click()
    assert shared.cursor == steps[1]
    shared._page.to_last.click()
    assert shared.cursor == steps[0]
    shared._page.to_longest.click()
    assert shared.run.waits[shared.cursor - 1] >= shared.run.waits.max() - 1


def test_figures_are_updated_and_never_rebuilt(shared: sb.Workbench) -> None:
    import ipywidgets

    shared.cursor = 1
    shared.wait(PATIENCE)
    before = len(ipywidgets.widgets.widget._instances)
    for k in range(2, 40):
        shared.cursor = k
    shared._page.curves.value = True
    shared.row = 3
    shared._page.curves.value = False
    shared.row = None
    shared.wait(PATIENCE)
    assert len(ipywidgets.widgets.widget._instances) == before


def test_curves_show_the_chosen_row(shared: sb.Workbench) -> None:
    shared._page.curves.value = True
    shared.row = 20
    assert shared._page.subdiagonal.widget.children == (shared._page.subdiagonal.curves.widget,)
    recorded = [shared.run.subdiagonal(k)[19] for k in range(5)]
    drawn = np.array(shared._page.subdiagonal.curves._chosen.y[:5])
    np.testing.assert_allclose(10.0**drawn, recorded, rtol=1e-12)
    shared._page.curves.value = False
    shared.row = None


def test_a_finished_run_can_be_shown() -> None:
    run = sb.iterate(np.random.default_rng(30).standard_normal((8, 8)), strategy="wilkinson")
    wb = sb.Workbench(run)
    wb.wait(PATIENCE)
    assert wb.run is run
    assert wb.matrix is run.matrix
    wb.close()


def test_names_from_the_data_cannot_become_markup() -> None:
    wb = sb.Workbench(sb.load(np.diag([1.0, 2.0]) + 1e-3, name="<img src=x onerror=alert(1)>"))
    wb.wait(PATIENCE)
    shown = [wb._page.head.value, *texts(wb), wb._page.save.verdict.value]
    assert not any("<img" in text for text in shown)
    assert "&lt;img" in wb._page.head.value
    wb.close()


def test_a_matrix_too_large_to_run_unasked_waits_for_its_settings() -> None:
    wb = sb.Workbench(np.triu(np.ones((401, 401))))
    assert wb.run is None
    assert wb.status == "ready"
    assert "press Run" in wb._page.work.status.value
    assert "n = 401" in wb._page.head.value
    wb.close()


# --- working ------------------------------------------------------------------------------------------------------


def test_settings_reach_the_run_and_the_page() -> None:
    wb = sb.Workbench(np.random.default_rng(31).standard_normal((12, 12)), strategy="wilkinson", tol=1e-10, limit=500)
    wb.wait(PATIENCE)
    assert (wb.run.settings.strategy, wb.run.settings.tol, wb.run.settings.limit) == ("wilkinson", 1e-10, 500)
    assert (wb._page.form.strategy.value, float(wb._page.form.tol.value), wb._page.form.limit.value) == (
        "wilkinson",
        1e-10,
        "500",
    )
    wb._page.form.strategy.value = "given"
    wb._page.form.shifts.value = "1.5, -2+3i, -2-3i"
    wb._page.form.limit.value = "4"
    assert wb.shifts == (1.5, -2 + 3j, -2 - 3j)
    wb.start()
    wb.wait(PATIENCE)
    assert wb.run.settings.strategy == "given"
    assert wb.run.stop.reason == "limit"
    assert wb.status == "stopped"
    assert "findings" in wb._page.work.status.value
    wb._page.form.limit.value = ""
    assert wb.limit is None
    wb.close()


def test_a_long_run_is_watched_and_cancelled_and_what_was_done_is_kept() -> None:
    cyclic = np.roll(np.eye(150), 1, axis=0)
    wb = sb.Workbench(cyclic, strategy="zero", balance="none", limit=10**6, autostart=False)
    assert wb.status == "ready"
    told: list[float] = []
    wb._page.work.status.observe(lambda change: told.append(time.monotonic()), "value")
    wb.start()
    with pytest.raises(sb.SchurbenchError, match="under way"):
        wb.start()
    time.sleep(1.0)
    wb.cancel()
    run = wb.wait(PATIENCE)
    assert run is not None
    assert run.stop.reason == "cancelled"
    assert len(run.steps) > 0
    assert wb.status == "stopped"
    assert len(told) < 20 * 1.5 + 5  # at most 20 updates a second, and the few at the ends
    wb.close()


def test_comparison_of_what_is_ticked(shared: sb.Workbench) -> None:
    shared.compare_now()
    shared.wait(PATIENCE)
    assert [entry.label for entry in shared.comparison.entries] == ["auto", "wilkinson", "francis"]
    for entry in shared.comparison.entries:
        assert entry.figures.passed
        assert str(entry.figures.sweeps) in shared._page.compare.table.value
    assert shared.status == "finished"


def test_a_remedy_is_one_click(data: Path) -> None:
    wb = sb.Workbench(data / "kinetics_gri30.npz", strategy="rayleigh")
    wb.wait(PATIENCE)
    remedies = [f for f in wb.diagnosis.findings if f.remedy is not None and f.remedy.settings]
    assert remedies
    wb._try_remedy(remedies[0])
    wb.wait(PATIENCE)
    carried_out = wb.run.settings.to_dict()
    for name in remedies[0].remedy.changes:
        wanted = remedies[0].remedy.settings[name]
        assert wanted == "auto" or carried_out[name] == wanted
    wb.close()


def test_a_structured_solver_is_a_remedy_too() -> None:
    a = np.random.default_rng(32).standard_normal((20, 20))
    wb = sb.Workbench(a + a.T)
    wb.wait(PATIENCE)
    finding = next(f for f in wb.diagnosis.findings if f.cause == "structure-unused")
    wb._try_remedy(finding)
    wb.wait(PATIENCE)
    assert "Structured solver" in wb._page.work.status.value
    wb.close()


def test_a_cluster_comes_to_the_top_of_the_factors(shared: sb.Workbench) -> None:
    finding = next(f for f in shared.diagnosis.findings if f.cause == "clustered")
    kept = shared.factors
    shared._try_remedy(finding)
    shared.wait(PATIENCE)
    top = shared.factors.eigenvalues[:2]
    folded = top.real + 1j * np.abs(top.imag)
    assert (np.abs(folded - finding.remedy.centre) <= finding.remedy.radius).all()
    assert shared.factors.certificate().passed
    shared.factors = kept


@pytest.mark.parametrize("suffix", [".mat", ".npz"])
def test_export_writes_factors_of_the_loaded_matrix(shared: sb.Workbench, tmp_path: Path, suffix: str) -> None:
    written = shared.export(tmp_path / f"plant{suffix}")
    loaded = scipy.io.loadmat(written[0]) if suffix == ".mat" else np.load(written[0])
    t, z = np.ascontiguousarray(loaded["T"]), np.ascontiguousarray(loaded["Z"])
    assert residual_ratio(shared.matrix.array, z, t) < RATIO_LIMIT
    assert orthogonality_ratio(z) < RATIO_LIMIT
    assert f'download="plant{suffix}"' in shared._page.save.link.value
    with pytest.raises(sb.InputError, match="exists"):
        shared.export(written[0])
    shared.export(written[0], replace=True)


# --- errors -------------------------------------------------------------------------------------------------------


def test_bad_input_is_refused_where_it_is_given() -> None:
    with pytest.raises(TypeError, match="stratgy"):
        sb.Workbench(np.eye(3), stratgy="francis")
    with pytest.raises(traitlets.TraitError, match="francois"):
        sb.Workbench(np.eye(3), strategy="francois")
    with pytest.raises(sb.InputError):
        sb.Workbench(np.ones((2, 3)))


def test_an_empty_workbench_says_what_to_do(tmp_path: Path) -> None:
    wb = sb.Workbench()
    assert wb.status == "empty"
    assert "Open a file" in wb._page.head.value
    for action in (wb.start, wb.compare_now, lambda: wb.export(tmp_path / "x.mat")):
        with pytest.raises(sb.InputError, match=r"no matrix yet|no run yet"):
            action()
    wb._page.open.go.click()
    assert "no file is named" in wb._page.open.error.value
    wb._page.open.path.value = str(tmp_path / "absent.npy")
    wb._page.open.go.click()
    assert "absent.npy" in wb._page.open.error.value
    assert wb.matrix is None
    np.save(tmp_path / "there.npy", np.diag([1.0, 2.0, 3.0]))
    wb._page.open.path.value = str(tmp_path / "there.npy")
    wb._page.open.go.click()
    wb.wait(PATIENCE)
    assert wb._page.open.error.value == ""
    assert wb.run.converged
    wb.close()


def test_uploads_are_loaded_and_bad_ones_keep_what_was_there(tmp_path: Path) -> None:
    np.save(tmp_path / "plant.npy", np.diag([1.0, 2.0, 3.0]))
    content = (tmp_path / "plant.npy").read_bytes()

    def item(name: str, content: bytes) -> dict[str, object]:
        import datetime

        now = datetime.datetime.now(tz=datetime.UTC)
        return {"name": name, "type": "", "size": len(content), "last_modified": now, "content": memoryview(content)}

    wb = sb.Workbench()
    wb._page.open.upload.value = (item("../../plant.npy", content),)
    wb.wait(PATIENCE)
    assert (wb.matrix.name, wb.matrix.source) == ("plant", "uploaded plant.npy")
    assert wb._page.open.upload.value == ()
    kept = wb.matrix
    wb._page.open.upload.value = (item("cut.npy", content[:-5]),)
    assert wb._page.open.error.value
    assert "\n" not in wb._page.open.error.value
    assert wb.matrix is kept
    wb.close()


@pytest.mark.parametrize(
    ("field", "text", "message"),
    [("tol", "small", "tolerance"), ("limit", "2.5", "limit"), ("limit", "0", "limit"), ("shifts", "1; x", "shifts")],
)
def test_text_that_is_no_number_is_explained(shared: sb.Workbench, field: str, text: str, message: str) -> None:
    before = getattr(shared, field)
    getattr(shared._page.form, field).value = text
    assert message in shared._page.form.error.value
    assert getattr(shared, field) == before
    getattr(shared._page.form, field).value = ""
    assert shared._page.form.error.value == ""


def test_settings_that_do_not_fit_the_matrix_fail_in_one_line() -> None:
    wb = sb.Workbench(np.random.default_rng(33).standard_normal((5, 5)), strategy="wilkinson", form="real")
    with pytest.raises(sb.SettingsError):
        wb.wait(PATIENCE)
    assert wb.status == "failed"
    assert wb.error
    assert "\n" not in wb.error
    assert wb.error[:20] in wb._page.form.error.value
    wb.form = "auto"
    wb.start()
    wb.wait(PATIENCE)
    assert (wb.status, wb.error, wb._page.form.error.value) == ("finished", "", "")
    wb.close()


def test_work_waits_in_no_thread_after_it_is_done(shared: sb.Workbench) -> None:
    shared.wait(PATIENCE)
    until = time.monotonic() + 5.0
    while any(t.name.startswith("schurbench") for t in threading.enumerate()) and time.monotonic() < until:
        time.sleep(0.05)
    assert not [t.name for t in threading.enumerate() if t.name.startswith("schurbench")]


# --- notebooks, server, binder ------------------------------------------------------------------------------------


def test_views_and_server_need_no_widgets() -> None:
    code = (
        "import sys, schurbench.panels.views, schurbench.panels.serve, schurbench.panels.colours;"
        "sys.exit(any(name in sys.modules for name in ('ipywidgets', 'bqplot', 'numba')))"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_notebook_of_the_repository_is_the_one_that_open_writes() -> None:
    kept = json.loads((ROOT / "notebooks" / "workbench.ipynb").read_text(encoding="utf-8"))
    assert kept == serve.workbench_notebook()


@pytest.mark.parametrize("path", sorted((ROOT / "notebooks").glob("*.ipynb")), ids=lambda path: path.name)
def test_notebooks_are_kept_without_outputs(path: Path) -> None:
    import nbformat

    notebook = nbformat.read(path, as_version=4)
    nbformat.validate(notebook)
    assert "widgets" not in notebook.metadata
    for cell in notebook.cells:
        if cell.cell_type == "code":
            assert cell.outputs == []
            assert cell.execution_count is None


@pytest.mark.slow
@pytest.mark.parametrize("path", sorted((ROOT / "notebooks").glob("*.ipynb")), ids=lambda path: path.name)
def test_notebooks_run_from_top_to_bottom(path: Path, tmp_path: Path) -> None:
    import nbformat
    from nbclient import NotebookClient

    notebook = nbformat.read(path, as_version=4)
    NotebookClient(notebook, timeout=300, resources={"metadata": {"path": str(tmp_path)}}).execute()
    assert not [out for cell in notebook.cells for out in cell.get("outputs", []) if out.output_type == "error"]


@pytest.mark.parametrize(
    "name", ["plant.mat", 'it\'s "A".npy', "new\nline.npy", "'); import os; ('.npy", "Böschung.csv"]
)
def test_any_file_name_is_a_literal_in_the_notebook(name: str) -> None:
    notebook = serve.workbench_notebook(Path("/data") / name, key='K"\\', labels=Path("/data") / f"{name}.txt")
    source = "".join(notebook["cells"][1]["source"])
    called: list[object] = []

    class Fake:
        @staticmethod
        def load(path: str, key: str | None = None, labels: str | None = None) -> None:
            called.extend([path, key, labels])

        @staticmethod
        def Workbench(matrix: object) -> None:
            called.append(matrix)

    lines = [line for line in source.splitlines() if not line.startswith("import ")]
    exec("\n".join(lines), {"sb": Fake})
    assert called == [f"/data/{name}", 'K"\\', f"/data/{name}.txt", None]


def test_notebooks_are_never_overwritten(tmp_path: Path) -> None:
    mine = tmp_path / "plant.ipynb"
    mine.write_text("mine", encoding="utf-8")
    first = serve.write_notebook(serve.workbench_notebook(), tmp_path, "plant")
    assert mine.read_text(encoding="utf-8") == "mine"
    assert first.name == "plant-2.ipynb"
    assert serve.write_notebook(serve.workbench_notebook(), tmp_path, "plant") == first  # the same one is used again
    other = serve.write_notebook(serve.workbench_notebook(Path("a.npy")), tmp_path, "plant")
    assert other.name == "plant-3.ipynb"


def test_the_server_listens_here_only_and_takes_large_uploads(tmp_path: Path) -> None:
    command = serve.lab_command(tmp_path / "a b.ipynb", browser=False)
    assert "--ServerApp.ip=127.0.0.1" in command
    assert "--LabApp.default_url=/lab/tree/a%20b.ipynb" in command
    assert f"--ServerApp.root_dir={tmp_path}" in command
    assert not any("token" in part for part in command)  # the server makes a secret one itself
    limit = next(part for part in command if "websocket_max_message_size" in part)
    assert int(limit.rsplit(": ", 1)[1].rstrip("}")) >= 2000**2 * 16 * 4 // 3  # complex, n = 2000, as text
    environment = serve.server_environment(tmp_path / "settings")
    assert environment["JUPYTER_CONFIG_PATH"].startswith(str(tmp_path / "settings"))
    assert (tmp_path / "settings" / "labconfig" / "page_config.json").exists()


def test_a_plain_page_listens_here_only_and_may_load_nothing_from_outside(tmp_path: Path) -> None:
    command = serve.page_command(tmp_path / "a b.ipynb", browser=False)
    assert str(tmp_path / "a b.ipynb") in command
    assert "--Voila.ip=127.0.0.1" in command
    assert "--Voila.auto_token=True" in command
    assert not any(".token" in part for part in command)  # the server makes a secret one itself
    serve.server_environment(tmp_path / "settings")
    settings = json.loads((tmp_path / "settings" / "voila.json").read_text(encoding="utf-8"))["Voila"][
        "tornado_settings"
    ]
    assert settings["websocket_max_message_size"] == serve.MESSAGE_LIMIT
    # W3C Content Security Policy level 3, section 6.1.3: default-src stands in for every kind of source not named
    sources = settings["headers"]["Content-Security-Policy"].split(";")[0].split()
    assert sources[0] == "default-src"
    assert set(sources[1:]) <= {"'self'", "'unsafe-inline'", "'unsafe-eval'", "data:", "blob:"}


def test_open_refuses_what_it_cannot_show(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for belongings in ({"key": "A"}, {"labels": tmp_path / "states.txt"}):
        with pytest.raises(sb.InputError, match="no matrix file"):
            serve.open_workbench(**belongings)
    bad = tmp_path / "bad.npy"
    np.save(bad, np.ones((2, 3)))
    with pytest.raises(sb.InputError):
        serve.open_workbench(bad)
    monkeypatch.setattr(serve, "find_spec", lambda name: None)
    with pytest.raises(sb.SchurbenchError, match=r"schurbench\[workbench\]"):
        serve.open_workbench()
    with pytest.raises(sb.SchurbenchError, match="voila"):
        serve.open_workbench(page=True)


def _gone(group: int) -> bool:
    """Whether nobody of a process group is left within ten seconds."""
    for _ in range(100):
        try:
            os.killpg(group, 0)
        except ProcessLookupError:
            return True
        time.sleep(0.1)
    return False


@pytest.mark.slow
@pytest.mark.parametrize(
    ("stop", "page"), [("keyboard", False), ("interrupt", False), ("terminate", False), ("keyboard", True)]
)
def test_open_serves_the_notebook_on_the_file_until_it_is_stopped(tmp_path: Path, stop: str, page: bool) -> None:
    if page:
        pytest.importorskip("voila")
    np.save(tmp_path / "mine.npy", np.diag([1.0, 2.0]))
    (tmp_path / "work").mkdir()
    code = (
        "import sys; from schurbench.panels.serve import open_workbench; "
        f"sys.exit(open_workbench('../mine.npy', page={page}, browser=False))"
    )
    address = "/?token=" if page else "/lab/tree/mine_workbench.ipynb?token="
    with (tmp_path / "log").open("w", encoding="utf-8") as log:
        server = subprocess.Popen(
            [sys.executable, "-c", code], cwd=tmp_path / "work", stdout=log, stderr=log, start_new_session=True
        )
        try:
            until = time.monotonic() + 60.0
            while address not in (said := (tmp_path / "log").read_text(encoding="utf-8")):
                assert server.poll() is None, said
                assert time.monotonic() < until, said
                time.sleep(0.2)
            name = "mine_workbench_page.ipynb" if page else "mine_workbench.ipynb"
            notebook = json.loads((tmp_path / "work" / name).read_text(encoding="utf-8"))
            assert str(tmp_path / "mine.npy") in "".join(notebook["cells"][-1]["source"])
            assert re.search(
                r"http://127\.0\.0\.1:\d+/\S*token=[0-9a-f]{32}", said
            )  # whole, to be copied into a browser
            assert "tornado_settings" not in said  # a setting handed over in a way the server warns about
        finally:
            if stop == "keyboard":
                os.killpg(server.pid, signal.SIGINT)  # Ctrl+C in a terminal reaches the whole group
            else:
                server.send_signal(signal.SIGINT if stop == "interrupt" else signal.SIGTERM)
            server.wait(30)
            assert _gone(server.pid)


def test_the_picture_in_the_readme_is_there_and_small() -> None:
    shown = re.findall(r"!\[[^\]]+\]\(([^)]+)\)", (ROOT / "README.md").read_text(encoding="utf-8"))
    assert shown
    for name in shown:
        content = (ROOT / name).read_bytes()
        assert content.startswith(b"\x89PNG\r\n\x1a\n")  # W3C PNG specification, third edition, section 5.2
        assert len(content) < 250_000


def test_binder_builds_what_the_project_declares() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    lines = (ROOT / "binder" / "requirements.txt").read_text(encoding="utf-8").splitlines()
    wanted = [line for line in lines if line.strip() and not line.startswith("#")]
    assert wanted == ["-e .[workbench]"]  # no pins of its own that could drift from pyproject.toml
    names = " ".join(project["optional-dependencies"]["workbench"])
    for package in ("jupyterlab", "ipywidgets", "bqplot"):
        assert package in names
    version = (ROOT / "binder" / "runtime.txt").read_text(encoding="utf-8").strip().removeprefix("python-")
    oldest = project["requires-python"].removeprefix(">=")
    assert tuple(map(int, version.split("."))) >= tuple(map(int, oldest.split(".")))
    post = ROOT / "binder" / "postBuild"
    assert post.stat().st_mode & 0o111
    assert "schurbench warm" in post.read_text(encoding="utf-8")
    assert subprocess.run(["bash", "-n", str(post)], check=False).returncode == 0
