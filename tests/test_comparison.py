"""Settings side by side, many matrices, and the same job under other conditions."""

from __future__ import annotations

import csv
import json
import threading
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import schurbench as sb
from schurbench.comparison import Comparison, ComparisonProgress, Entry, Figures
from schurbench.measures import RATIO_LIMIT


class Stubborn:
    """A strategy of the user's own that breaks."""

    name = "stubborn"

    def shifts(self, view: Any) -> tuple[complex, ...]:
        raise RuntimeError("no shift today")


def test_entries_and_figures(data: Path) -> None:
    common = {"limit": 900}
    comparison = sb.compare(data / "west0067.mtx", ["francis", "wilkinson", {"strategy": "rayleigh"}], **common)
    assert [entry.label for entry in comparison.entries] == ["francis", "wilkinson", "rayleigh"]
    for entry in comparison.entries:
        assert entry.error is None
        assert entry.run is not None
        assert entry.figures is not None
        assert entry.settings is entry.run.settings
        assert entry.settings.limit == 900
        figures = entry.figures
        # Every figure is what the run itself says.
        assert figures.sweeps == sum(1 for step in entry.run.steps if step.shifts)
        assert figures.exceptional_shifts == sum(step.exceptional for step in entry.run.steps)
        assert figures.longest_wait == max(entry.run.waits)
        assert figures.stop == entry.run.stop.reason
        certificate = entry.run.factors().certificate()
        assert figures.backward_error == certificate.backward_error < RATIO_LIMIT
        assert figures.orthogonality == certificate.orthogonality < RATIO_LIMIT
        assert figures.passed == certificate.passed == entry.run.converged
        found = int(np.isfinite(entry.run.factors().eigenvalues).sum())
        assert figures.sweeps_per_eigenvalue == pytest.approx(figures.sweeps / found)
    # Real shifts cannot tell the members of a complex pair apart; the double shift can (Golub and Van Loan, 7.5.4).
    francis, _, rayleigh = (entry.figures for entry in comparison.entries)
    assert francis is not None
    assert rayleigh is not None
    assert francis.converged
    assert not rayleigh.converged
    assert comparison.preferred is not None
    assert comparison.preferred.label in ("francis", "wilkinson")


def test_all_practical_strategies_by_default(data: Path) -> None:
    comparison = sb.compare(data / "closedloop_carex15.npz")
    assert [entry.label for entry in comparison.entries] == ["francis", "wilkinson", "rayleigh"]
    content = json.loads(json.dumps(comparison.to_dict(), allow_nan=False))
    assert content["preferred"] in [entry["label"] for entry in content["entries"]]
    assert content["entries"][0]["figures"]["converged"] is True
    assert content["entries"][0]["settings"]["strategy"] == "francis"


def test_a_failing_entry_does_not_stop_the_others() -> None:
    a = np.random.default_rng(1).standard_normal((8, 8))
    entries = [
        "sideways",
        {"strategy": "francis", "balance": "sometimes"},
        {"strategy": Stubborn()},
        {"strategy": "francis", "colour": "blue"},
        "francis",
    ]
    comparison = sb.compare(a, entries)
    errors = [entry.error for entry in comparison.entries]
    assert "strategy 'sideways' is unknown" in str(errors[0])
    assert "balance 'sometimes' is unknown" in str(errors[1])
    assert errors[2] == "RuntimeError: no shift today"
    assert "there is no setting colour" in str(errors[3])
    assert errors[4] is None
    assert comparison.preferred is comparison.entries[4]
    assert comparison.to_dict()["entries"][0]["figures"] is None
    assert list(comparison.table()["error"] != "") == [True, True, True, True, False]


def test_labels_say_how_entries_differ() -> None:
    a = np.eye(3)
    entries = ["francis", {"strategy": "francis", "flip": True}, "francis", {"strategy": "given", "shifts": [1.0, 2.0]}]
    comparison = sb.compare(a, entries, balance="none")
    assert [entry.label for entry in comparison.entries] == [
        "francis",
        "francis flip=yes",
        "francis (2)",
        "given shifts=2 values",
    ]


def test_senseless_comparisons_are_refused() -> None:
    with pytest.raises(sb.SettingsError, match="nothing to compare"):
        sb.compare(np.eye(2), [])
    with pytest.raises(sb.SettingsError, match="no entry to compare"):
        sb.compare(np.eye(2), [3])  # type: ignore[list-item]
    with pytest.raises(sb.InputError, match="not square"):
        sb.compare(np.ones((2, 3)))


def test_table_has_a_row_an_entry(data: Path) -> None:
    table = sb.compare(data / "companion_cluster20.npz", ["francis", "wilkinson"]).table()
    assert list(table.index) == ["francis", "wilkinson"]
    assert list(table.columns) == [*Figures.__dataclass_fields__, "error"]
    assert (table["backward_error"] < RATIO_LIMIT).all()


def _entry(label: str, seconds: float, sweeps: int, **changes: Any) -> Entry:
    settings = sb.iterate(np.eye(1)).settings
    values: dict[str, Any] = {
        "sweeps": sweeps,
        "sweeps_per_eigenvalue": 2.0,
        "exceptional_shifts": 0,
        "longest_wait": 3,
        "seconds": seconds,
        "stop": "converged",
        "converged": True,
        "backward_error": 1.0,
        "orthogonality": 1.0,
        "passed": True,
    }
    return Entry(label, {}, settings, None, Figures(**values | changes))


def test_preferred_is_the_fastest_sound_entry() -> None:
    matrix = sb.load(np.eye(1))
    quick_but_wrong = _entry("wrong", 0.1, 5, passed=False)
    unfinished = _entry("unfinished", 0.1, 5, converged=False, passed=False)
    failed = Entry("failed", {}, error="no")
    slow, fast = _entry("slow", 9.0, 10), _entry("fast", 1.0, 50)
    rivals = (quick_but_wrong, failed, slow, unfinished, fast)
    assert Comparison(matrix, rivals).preferred is fast
    fewer = _entry("fewer", 1.05, 40)
    assert Comparison(matrix, (*rivals, fewer)).preferred is fewer
    same = _entry("same", 1.0, 40)
    assert Comparison(matrix, (fewer, same)).preferred is fewer
    assert Comparison(matrix, (quick_but_wrong, failed, unfinished)).preferred is None
    assert "None of the entries" in Comparison(matrix, (failed,)).sentence


def test_without_z_there_is_no_certificate_and_that_is_said(data: Path) -> None:
    comparison = sb.compare(data / "closedloop_carex15.npz", ["francis"], accumulate=False)
    figures = comparison.entries[0].figures
    assert figures is not None
    assert figures.passed is None
    assert "accumulate" in figures.note
    assert comparison.preferred is comparison.entries[0]


def test_scaled_entries_answer_for_the_loaded_matrix(data: Path) -> None:
    comparison = sb.compare(data / "impcol_a.mtx", [{"strategy": "francis", "balance": "both"}])
    entry = comparison.entries[0]
    assert entry.run is not None
    assert entry.figures is not None
    factors = entry.run.factors()
    assert factors.scaled is not None
    assert entry.figures.backward_error == factors.certificate().backward_error


def test_progress_names_the_entry(data: Path) -> None:
    heard: list[ComparisonProgress] = []
    sb.compare(data / "west0067.mtx", ["francis", "wilkinson"], progress=heard.append)
    assert [event.entry for event in heard if event.phase == "done"] == ["francis", "wilkinson"]
    assert {(event.index, event.count) for event in heard} == {(0, 2), (1, 2)}
    assert heard[-1].share == 1.0


def test_cancel_keeps_what_was_done(data: Path) -> None:
    cancel = threading.Event()

    def stop_after_first(event: ComparisonProgress) -> None:
        if event.phase == "done":
            cancel.set()

    comparison = sb.compare(
        data / "west0067.mtx", ["francis", "wilkinson", "rayleigh"], progress=stop_after_first, cancel=cancel
    )
    assert comparison.entries[0].figures is not None
    assert [entry.error for entry in comparison.entries[1:]] == ["not run: the comparison was cancelled"] * 2


def test_an_interrupt_ends_the_whole_comparison(data: Path) -> None:
    class Interrupted:
        name = "interrupted"

        def shifts(self, view: Any) -> tuple[complex, ...]:
            raise KeyboardInterrupt

    comparison = sb.compare(data / "west0067.mtx", [{"strategy": Interrupted()}, "francis"])
    assert comparison.entries[0].figures is not None
    assert comparison.entries[0].figures.stop == "cancelled"
    assert comparison.entries[1].error == "not run: the comparison was cancelled"


@pytest.mark.parametrize("pool", ["threads", pytest.param("processes", marks=pytest.mark.slow)])
def test_executors_give_the_same_bytes(data: Path, pool: str) -> None:
    entries: list[Any] = ["francis", "wilkinson", {"strategy": "francis", "balance": "both"}, "sideways"]
    alone = sb.compare(data / "kinetics_gri30.npz", entries)
    heard: list[ComparisonProgress] = []
    executor = ThreadPoolExecutor(2) if pool == "threads" else ProcessPoolExecutor(2, mp_context=get_context("spawn"))
    with executor:
        together = sb.compare(data / "kinetics_gri30.npz", entries, executor=executor, progress=heard.append)
    for one, other in zip(alone.entries, together.entries, strict=True):
        assert one.error == other.error
        if one.run is None or other.run is None:
            continue
        assert one.run.factors().T.tobytes() == other.run.factors().T.tobytes()
    assert {event.entry for event in heard} == {entry.label for entry in alone.entries if entry.run is not None}


# Surveys


def test_one_entry_needs_no_list() -> None:
    a = np.diag([1.0, 2.0, 3.0]) + 0.1
    assert [entry.label for entry in sb.compare(a, "francis").entries] == ["francis"]
    single = sb.compare(a, {"strategy": "wilkinson", "flip": True})
    assert single.entries[0].settings is not None
    assert single.entries[0].settings.flip


def test_survey_of_a_folder(tmp_path: Path, data: Path) -> None:
    for name in ("west0067.mtx", "closedloop_carex15.npz"):
        (tmp_path / name).write_bytes((data / name).read_bytes())
    (tmp_path / "broken.mtx").write_text("not a matrix", encoding="utf-8")
    (tmp_path / "notes.md").write_text("not read", encoding="utf-8")
    heard: list[tuple[str, int, int]] = []
    result = sb.survey(tmp_path, out=tmp_path / "rows.json", progress=lambda *event: heard.append(event))
    assert [row.name for row in result.rows] == ["broken.mtx", "closedloop_carex15", "west0067"]
    assert [name for name, _, _ in heard] == ["broken.mtx", "closedloop_carex15.npz", "west0067.mtx"]
    assert heard[-1][1:] == (2, 3)
    broken, closedloop, west = result.rows
    assert broken.error is not None
    assert "\n" not in broken.error
    assert result.failures == (broken,)
    assert closedloop.n == 39
    assert west.figures is not None
    assert west.figures.passed
    assert west.condition == pytest.approx(np.max(sb.iterate(data / "west0067.mtx").factors().certificate().condition))
    assert west.cause
    assert "3 matrices: 2 converged" in result.sentence
    written = json.loads((tmp_path / "rows.json").read_text(encoding="utf-8"))
    assert written == result.to_dict()
    assert list(result.table()["name"]) == [row.name for row in result.rows]


def test_survey_of_a_pattern_a_file_and_objects(tmp_path: Path, data: Path) -> None:
    pattern = sb.survey(str(data / "companion_*.npz"), strategy="wilkinson")
    assert [row.name for row in pattern.rows] == ["companion_cluster20", "companion_wilkinson20"]
    np.savez(tmp_path / "family.npz", one=np.eye(3), two=np.diag([1.0, 2.0]), text=np.array("no"), wide=np.ones((2, 3)))
    family = sb.survey(tmp_path / "family.npz")
    assert [(row.name, row.n) for row in family.rows] == [("family.npz: one", 3), ("family.npz: two", 2)]
    objects = sb.survey([np.eye(2), np.ones((2, 3)), data / "west0067.mtx"], limit=1)
    assert [row.error is None for row in objects.rows] == [True, False, True]
    assert objects.rows[2].figures is not None
    assert objects.rows[2].figures.stop == "limit"


def test_survey_writes_csv_and_leaves_existing_files_alone(tmp_path: Path) -> None:
    out = tmp_path / "rows.csv"
    sb.survey([np.eye(2), np.ones(3)], out=out)
    with out.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert rows[0]["converged"] == "True"
    assert rows[1]["error"] != ""
    with pytest.raises(sb.InputError, match=r"rows\.csv exists already"):
        sb.survey([np.eye(2)], out=out)
    sb.survey([np.eye(3)], out=out, replace=True)
    assert out.read_text(encoding="utf-8").count("\n") == 2
    with pytest.raises(sb.InputError, match=r"\.csv or \.json"):
        sb.survey([np.eye(2)], out=tmp_path / "rows.xlsx")


def test_survey_leaves_out_what_it_did_not_come_for(tmp_path: Path) -> None:
    np.save(tmp_path / "plant.npy", np.diag([1.0, 2.0]))
    run = sb.iterate(tmp_path / "plant.npy")
    run.save(tmp_path / "plant_run.npz")
    for suffix in (".mat", ".mtx"):
        run.factors().save(tmp_path / f"plant_schur{suffix}")
    (tmp_path / "rows.csv").write_text("of last week")
    result = sb.survey(tmp_path, out=tmp_path / "rows.csv", replace=True)
    assert [row.name for row in result.rows] == ["plant"]
    assert result.left_out == (
        "plant_run.npz",
        "plant_schur.mat",
        "plant_schur_T.mtx",
        "plant_schur_Z.mtx",
        "rows.csv",
    )
    assert "Left out as results of earlier work: plant_run.npz" in result.sentence
    assert [row.name for row in sb.survey(tmp_path / "plant_schur.mat").rows] == [
        "plant_schur.mat: T",
        "plant_schur.mat: Z",
    ]
    with pytest.raises(sb.InputError, match="no matrix to survey but results of earlier work"):
        sb.survey(str(tmp_path / "*_T.mtx"))


def test_senseless_surveys_are_refused(tmp_path: Path) -> None:
    with pytest.raises(sb.InputError, match="no matrix to survey"):
        sb.survey(tmp_path)
    with pytest.raises(sb.InputError, match="nothing to survey"):
        sb.survey(7)


def test_cancelled_survey_keeps_its_rows() -> None:
    cancel = threading.Event()
    result = sb.survey([np.eye(2), np.eye(3)], progress=lambda *_: cancel.set(), cancel=cancel)
    assert len(result.rows) == 1


# Twins


@pytest.mark.slow
def test_thread_count_changes_no_byte(data: Path) -> None:
    result = sb.twin(data / "kinetics_gri30.npz", conditions={"OPENBLAS_NUM_THREADS": "2"})
    assert result.same
    assert result.parted_values is None
    assert result.parted_decisions is None
    assert result.distance.max() == 0
    assert "same bytes" in result.sentence
    json.dumps(result.to_dict(), allow_nan=False)


@pytest.mark.slow
def test_another_processor_moves_eigenvalues_within_rounding(data: Path) -> None:
    import llvmlite.binding

    if not llvmlite.binding.get_host_cpu_features().get("fma", False):
        pytest.skip("this processor has no fused multiply-add that the plain one lacks")
    result = sb.twin(data / "west0067.mtx", conditions={"NUMBA_CPU_NAME": "generic"}, strategy="francis")
    assert result.second.environment["cpu"] == "generic"
    assert result.first.environment["cpu"] != "generic"
    assert result.first.converged
    assert result.second.converged
    # The plain processor has no fused multiply-add, so the kernels round differently from the first sweep on.
    assert not result.same
    assert result.parted_values == 1
    assert (result.distance <= 67 * result.movement).all()
    assert "neither result is wrong" in result.sentence
    content = json.loads(json.dumps(result.to_dict(), allow_nan=False))
    assert content["parted_values"] == 1
    assert len(content["condition"]) == 67


@pytest.mark.slow
def test_refusals_of_a_job_reach_the_caller() -> None:
    with pytest.raises(sb.InputError, match="strategy 'sideways' is unknown"):
        sb.twin(np.eye(2), strategy="sideways")
    with pytest.raises(sb.SchurbenchError, match="could not be finished"):
        sb.twin(np.eye(2), conditions={"PYTHONHOME": "/nowhere"})


def test_senseless_twins_are_refused() -> None:
    with pytest.raises(sb.SettingsError, match="names and numbers"):
        sb.twin(np.eye(2), strategy=Stubborn())
    with pytest.raises(sb.SettingsError, match="accumulate"):
        sb.twin(np.eye(2), accumulate=False)


def test_cancelled_twin_ends_its_jobs() -> None:
    cancel = threading.Event()
    cancel.set()
    with pytest.raises(sb.SchurbenchError, match="cancelled"):
        sb.twin(np.eye(2), cancel=cancel)
