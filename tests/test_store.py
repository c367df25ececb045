"""Continuing a run, and runs that are recorded in a directory: the same bytes as a run that was never interrupted.

The reference is throughout the uninterrupted run of the same settings; how a store must look from outside is held against
Zarr itself and the Zarr 3 core specification (https://zarr-specs.readthedocs.io/en/latest/v3/core/index.html).
"""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zarr

import schurbench as sb
from schurbench.journal import StepKind, StopReason
from schurbench.journal import is_run as holds_run
from schurbench.journal import journal as journal_module
from schurbench.journal import store as store_module
from schurbench.policy import Francis, WindowView
from tests.gallery import cyclic
from tests.test_iteration import Newtonish, gaussian


def timeless(steps: Any) -> list[Any]:
    return [replace(step, seconds=0.0) for step in steps]


def same(run: sb.Run, whole: sb.Run, states: list[int] | None = None) -> None:
    """Everything recorded is equal, times aside, and so are the bytes of the states."""
    assert timeless(run.steps) == timeless(whole.steps)
    assert [run.window(k) for k in range(len(run.steps) + 1)] == [whole.window(k) for k in range(len(whole.steps) + 1)]
    assert run.deflations == whole.deflations
    assert run.exceptional_steps == whole.exceptional_steps
    last = len(whole.steps)
    for k in states if states is not None else [0, last // 3, last // 2, last - 1, last]:
        one, other = run.state(k), whole.state(k)
        assert one.H.tobytes() == other.H.tobytes()
        assert (one.Z is None) == (other.Z is None)
        if one.Z is not None and other.Z is not None:
            assert one.Z.tobytes() == other.Z.tobytes()
        assert run.ritz(k).tobytes() == whole.ritz(k).tobytes()
        assert run.subdiagonal(k).tobytes() == whole.subdiagonal(k).tobytes()
    assert run.stop == whole.stop


def stopped_after(steps: int, a: Any, **keywords: Any) -> sb.Run:
    """A run that was cancelled after so many steps."""
    it = sb.Iteration(a, **keywords)
    for _ in range(steps):
        it.step()
    return it.run()


CASES: dict[str, tuple[np.ndarray, dict[str, Any]]] = {
    "francis": (gaussian(24, 1), {"strategy": "francis"}),
    "nearer": (gaussian(24, 2), {"strategy": Francis("nearer")}),
    "francis, complex": (gaussian(16, 3, True), {"strategy": "francis"}),
    "wilkinson": (gaussian(16, 4), {"strategy": "wilkinson", "balance": "both", "flip": True}),
    "wilkinson, complex": (gaussian(16, 5, True), {"strategy": "wilkinson"}),
    "rayleigh": (gaussian(14, 6), {"strategy": "rayleigh", "limit": 120}),
    "zero": (gaussian(10, 7), {"strategy": "zero", "limit": 300}),
    "given": (gaussian(12, 8), {"strategy": "given", "shifts": [0.5, 1 + 2j, 1 - 2j], "limit": 90}),
    "given, complex": (gaussian(12, 9), {"strategy": "given", "shifts": [0.5, 1 + 2j], "limit": 90}),
    "without Z": (gaussian(20, 10), {"accumulate": False, "tol": 1e-14, "deflation": "norm"}),
}


@pytest.mark.parametrize("name", CASES)
def test_a_continued_run_is_the_uninterrupted_one(name: str) -> None:
    """Cut before the first step, after it, at a few places and one step before the end."""
    a, keywords = CASES[name]
    whole = sb.iterate(a, **keywords)
    last = len(whole.steps)
    first_deflation = next((s.index for s in whole.steps if s.deflations), 2)
    for cut in sorted({0, 1, first_deflation - 1, first_deflation, last // 2, last - 1}):
        part = stopped_after(cut, a, **keywords)
        assert part.stop.reason is StopReason.CANCELLED
        run = part.resume()
        same(run, whole)
        assert len(part.steps) == cut  # the run that was resumed is as it was
        assert run.settings == whole.settings


@pytest.mark.parametrize("complex_", [False, True])
def test_every_cut_around_deflation_windows(complex_: bool) -> None:
    """Right after a window the next step depends on what it found and handed on."""
    a = gaussian(130, 3, complex_)
    whole = sb.iterate(a, "multishift")
    looked = [s.index for s in whole.steps if s.kind is StepKind.WINDOW]
    many = [s.index for s in whole.steps if s.kind is StepKind.MANY]
    assert looked
    assert many
    for cut in sorted({0, *looked[:4], looked[-1], many[0], many[-1], looked[1] - 1}):
        same(stopped_after(cut, a, strategy="multishift").resume(), whole, [len(whole.steps)])


def test_limits_raised_in_the_middle_of_a_stall() -> None:
    """A cyclic matrix stalls a pure double shift; exceptional shifts come by the count of sweeps waited."""
    a = cyclic(14)
    keywords: dict[str, Any] = {"strategy": "francis", "balance": "none"}
    whole = sb.iterate(a, **keywords)
    assert whole.exceptional_steps
    first = whole.exceptional_steps[0]
    for limit in (first - 2, first - 1, first, first + 1):
        part = sb.iterate(a, limit=limit, **keywords)
        assert part.stop.reason is StopReason.LIMIT
        run = part.resume(limit=whole.settings.limit)
        same(run, whole)
        assert run.settings == whole.settings
    doubled = sb.iterate(a, limit=first, **keywords).resume()
    assert doubled.settings.limit == 2 * first
    same(doubled, sb.iterate(a, limit=2 * first, **keywords))
    step_by_step = sb.iterate(a, limit=1, **keywords)
    while not step_by_step.converged:
        step_by_step = step_by_step.resume(limit=step_by_step.sweeps + 1)
    same(step_by_step, replace(whole, stop=step_by_step.stop))


def test_a_stalled_run_goes_on_when_told_to() -> None:
    a = cyclic(12)
    keywords: dict[str, Any] = {"strategy": "francis", "exceptional": False, "limit": 100}
    part = sb.iterate(a, stop_when_stalled=True, **keywords)
    assert part.stop.reason is StopReason.STALLED
    with pytest.raises(sb.SettingsError, match="no deflation in 60 sweeps"):
        part.resume(stop_when_stalled=True)
    same(part.resume(), sb.iterate(a, **keywords))


def test_the_watch_on_rounding_goes_on_as_well(monkeypatch: pytest.MonkeyPatch) -> None:
    """It measures at fixed sweeps, from 6·max(10, n) on; a run that was cut there must not measure elsewhere."""
    g = gaussian(10, 1)
    a = g - g.T  # eigenvalues of equal modulus, which no unshifted sweep tells apart
    keywords: dict[str, Any] = {"strategy": "zero", "limit": 10**5}
    it = sb.Iteration(a, **keywords)
    measured = []
    while it.sweeps < 130:
        it.step()
        measured.append(it._measure_at)
    for cut in (59, 60, 61, 79, 80, 81):
        again = sb.Iteration.continue_from(stopped_after(cut, a, **keywords))
        again.step()
        assert again._measure_at == measured[cut]
    # a run that the watch ends is ended at the same sweep when it was interrupted, and cannot go on
    monkeypatch.setattr("schurbench.iteration.RATIO_LIMIT", 1.0)
    ended = sb.iterate(a, **keywords)
    assert ended.stop.reason is StopReason.STALLED
    assert "rounding" in ended.stop.message
    assert 60 <= ended.sweeps < 10**4
    for cut in (30, 59, ended.sweeps - 1):
        same(stopped_after(cut, a, **keywords).resume(), ended)
    with pytest.raises(sb.SettingsError, match="rounding"):
        ended.resume()


def test_what_cannot_be_continued() -> None:
    a = gaussian(12, 1)
    whole = sb.iterate(a)
    with pytest.raises(sb.SettingsError, match="has converged"):
        whole.resume()
    part = sb.iterate(a, limit=3)
    for keywords, words in (
        ({"limit": 3}, "limit of 3 sweeps"),
        ({"limit": 0}, "at least 1"),
        ({"limit": True}, "no number"),
        ({"stop_when_stalled": "no"}, "neither True nor False"),
        ({"strategy": Newtonish()}, "leave strategy out"),
    ):
        with pytest.raises(sb.SettingsError, match=words) as caught:
            part.resume(**keywords)
        assert "\n" not in str(caught.value)


def test_own_strategies_are_passed_again(tmp_path: Path) -> None:
    class Own(Francis):
        """Named as its base class is; only the record tells them apart."""

    class Other:
        def shifts(self, view: WindowView) -> list[complex]:
            return [0.0]

    a = gaussian(14, 2)
    whole = sb.iterate(a, Newtonish(), form="complex")
    part = stopped_after(9, a, strategy=Newtonish(), form="complex")
    for again in (part, sb.open_run(part.save(tmp_path / "own.npz"))):
        for strategy, words in ((None, "pass it again"), ("own", "shifts"), (Other(), "own, not Other")):
            with pytest.raises(sb.SettingsError, match=words):
                again.resume(strategy=strategy)  # type: ignore[arg-type]
        same(again.resume(strategy=Newtonish()), whole)
    part = stopped_after(5, a, strategy=Own())
    with pytest.raises(sb.SettingsError, match="Own"):
        part.resume()
    same(part.resume(strategy=Own()), sb.iterate(a))


def test_saved_runs_go_on_in_another_process(tmp_path: Path) -> None:
    a = gaussian(40, 5)
    whole = sb.iterate(a)
    stopped_after(31, a).save(tmp_path / "part.npz")
    code = "import sys, schurbench as sb; sb.open_run(sys.argv[1]).resume().save(sys.argv[2])"
    subprocess.run([sys.executable, "-c", code, tmp_path / "part.npz", tmp_path / "whole.npz"], check=True, timeout=120)
    again = sb.open_run(tmp_path / "whole.npz")
    same(again, whole)
    (continued,) = again.environment["continued"]
    assert continued["after_step"] == 31
    assert continued["versions"] == whole.environment["versions"]
    assert json.loads(json.dumps(again.to_dict())) == again.to_dict()


def test_two_continuations_do_not_disturb_each_other() -> None:
    a = gaussian(30, 6)
    whole = sb.iterate(a)
    it = sb.Iteration(a)
    for _ in range(20):
        it.step()
    part = it.run()
    one = sb.Iteration.continue_from(part)
    other = sb.Iteration.continue_from(part)
    while not it.done:
        it.step()
        one.step()
    while not other.done:
        other.step()
    for iteration in (it, one, other):
        same(iteration.run(), whole, list(range(len(whole.steps) + 1)))


def test_progress_and_cancel_of_a_continuation() -> None:
    cancel = threading.Event()
    seen: list[sb.Progress] = []

    def watch(event: sb.Progress) -> None:
        seen.append(event)
        cancel.set()

    part = sb.iterate(cyclic(12), "zero", limit=10)
    run = part.resume(limit=10**7, progress=watch, cancel=cancel)
    assert run.stop.reason is StopReason.CANCELLED
    assert 10 < run.sweeps < 10**7
    assert seen[-1].phase == "done"


# --- in a directory ---------------------------------------------------------------------------------------------------


@pytest.fixture
def often(monkeypatch: pytest.MonkeyPatch) -> None:
    """Commits, checkpoints and chunks so close that a short run has many."""
    monkeypatch.setattr(store_module, "_STEPS_AT_ONCE", 7)
    monkeypatch.setattr(store_module, "_FIRST_DISTANCE", 5)
    monkeypatch.setattr(journal_module, "_CHUNK", 16)


@pytest.mark.parametrize("name", CASES)
@pytest.mark.usefixtures("often")
def test_a_run_in_a_directory(name: str, tmp_path: Path) -> None:
    a, keywords = CASES[name]
    m = sb.load(a, labels=[f"x{i}" for i in range(len(a))])
    whole = sb.iterate(m, **keywords)
    run = sb.iterate(m, store=tmp_path / "run", **keywords)
    again = sb.open_run(tmp_path / "run")
    every = list(range(len(whole.steps) + 1))
    assert again.store == tmp_path / "run"
    assert len(again.journal.checkpoint_steps) > 1
    assert again.journal.held == len(every)
    for found in (run, again):
        same(found, whole, every[::-3])
        assert found.settings == whole.settings
        assert found.matrix.labels == m.labels
        assert found.matrix.sha256 == m.sha256
    assert again.to_dict() == run.to_dict()
    saved = sb.open_run(again.save(tmp_path / "run.npz"))
    same(saved, whole)


@pytest.mark.usefixtures("often")
def test_every_cut_in_a_directory(tmp_path: Path) -> None:
    """Closed by hand or simply left, by another limit, into the same directory or a new one or memory."""
    a = gaussian(24, 1)
    whole = sb.iterate(a)
    for cut in (0, 1, 7, 8, 30, len(whole.steps) - 1):
        path = tmp_path / f"{cut}"
        it = sb.Iteration(a, store=path)
        for _ in range(cut):
            it.step()
        with pytest.raises(sb.InputError, match="still open"):
            it.run().resume()
        it.close()
        with pytest.raises(sb.SchurbenchError, match="closed"):
            it.step()
        part = sb.open_run(path)
        assert len(part.steps) == cut
        same(part.resume(store=False), whole, list(range(0, len(whole.steps) + 1, 5)))
        assert len(sb.open_run(path).steps) == cut
        elsewhere = part.resume(store=tmp_path / f"{cut} elsewhere")
        assert elsewhere.store == tmp_path / f"{cut} elsewhere"
        same(sb.open_run(tmp_path / f"{cut} elsewhere"), whole)
        same(part.resume(), whole)
        finished = sb.open_run(path)
        same(finished, whole, list(range(len(whole.steps) + 1)))
        assert [c["after_step"] for c in finished.environment["continued"]] == [cut]
        with pytest.raises(sb.InputError, match="gone on"):
            part.resume()
    same(stopped_after(9, a).resume(store=tmp_path / "from memory"), whole)
    same(sb.open_run(tmp_path / "from memory"), whole)


@pytest.mark.usefixtures("often")
def test_bands_that_memory_does_not_hold_are_in_the_directory(tmp_path: Path) -> None:
    a = gaussian(40, 2)
    whole = sb.iterate(a)
    run = sb.iterate(a, keep=0, store=tmp_path / "run")
    assert len(run.journal.checkpoints) == 1
    assert run.journal.held == len(run.steps) + 1
    for k in range(0, len(run.steps) + 1, 7):
        assert run.subdiagonal(k).tobytes() == whole.subdiagonal(k).tobytes()
    assert run.journal._walk is None  # nothing was replayed for them
    part = sb.iterate(a, keep=0, limit=30, store=tmp_path / "part")
    same(part.resume(limit=whole.settings.limit), whole, list(range(0, len(whole.steps) + 1, 7)))


def test_a_run_can_be_read_while_it_goes_on(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(store_module, "_SECONDS", 0.0)
    a = gaussian(24, 1)
    whole = sb.iterate(a)
    it = sb.Iteration(a, store=tmp_path / "run")
    for _ in range(20):
        it.step()
        assert len(it.run().steps) == len(sb.open_run(tmp_path / "run").steps)
    part = sb.open_run(tmp_path / "run")
    assert part.stop.reason is StopReason.CANCELLED
    assert "broken off after 20 recorded sweeps" in part.stop.message
    assert part.state(20).H.tobytes() == whole.state(20).H.tobytes()
    with pytest.raises(sb.InputError, match="still open"):
        part.resume()
    del it
    same(part.resume(), whole)


KILLED = """
import sys, numpy as np, schurbench as sb
from schurbench.journal import store
store._SECONDS = float(sys.argv[2])
rng = np.random.default_rng(11)
a = rng.standard_normal((int(sys.argv[3]),) * 2)
sb.iterate(a, {strategy!r}, store=sys.argv[1], limit=10**6, exceptional=False)
"""


def kill_when(path: Path, ready: Callable[[], bool], strategy: str, seconds: float, n: int) -> None:
    process = subprocess.Popen([sys.executable, "-c", KILLED.format(strategy=strategy), path, str(seconds), str(n)])
    deadline = time.monotonic() + 120
    try:
        while not ready():
            assert process.poll() is None, "it ended before it could be killed"
            assert time.monotonic() < deadline
            time.sleep(0.005)
    finally:
        os.kill(process.pid, signal.SIGKILL)
        process.wait()
    assert process.returncode == -signal.SIGKILL


def committed(path: Path) -> int:
    counts = [0]
    for name in ("commit_0", "commit_1"):
        try:
            counts.append(json.loads((path / name / "zarr.json").read_text())["attributes"]["counts"]["steps"])
        except (OSError, ValueError, KeyError):
            continue
    return max(counts)


@pytest.mark.skipif(sys.platform == "win32", reason="no SIGKILL")
@pytest.mark.parametrize("steps", [1, 150, 900])
def test_killed_runs_reopen_and_go_on(steps: int, tmp_path: Path) -> None:
    """kill -9 at any moment; zero shifts on a Gaussian matrix go on for as long as one likes."""
    path, n = tmp_path / "run", 60
    kill_when(path, lambda: committed(path) >= steps, "zero", 0.0, n)
    part = sb.open_run(path)
    assert holds_run(path)
    assert len(part.steps) >= steps
    assert part.stop.reason is StopReason.CANCELLED
    more = len(part.steps) + 40
    a = np.random.default_rng(11).standard_normal((n, n))
    whole = sb.iterate(a, "zero", limit=more, exceptional=False)
    run = part.resume(limit=more)
    same(run, whole)
    same(sb.open_run(path), whole)
    assert not list(path.rglob("*.partial"))


@pytest.mark.slow
@pytest.mark.skipif(sys.platform == "win32", reason="no SIGKILL")
def test_killed_again_and_again(tmp_path: Path) -> None:
    """Whatever moment it is: the store opens, or was not begun yet and says so."""
    rng = np.random.default_rng(0)
    for attempt in range(12):
        path = tmp_path / f"run{attempt}"
        wait = float(rng.uniform(0.0, 0.6))
        began: list[float] = []

        def ready(path: Path = path, wait: float = wait, began: list[float] = began) -> bool:
            if not began and path.exists():
                began.append(time.monotonic())
            return bool(began) and time.monotonic() - began[0] >= wait

        kill_when(path, ready, "zero", 0.0, 150)
        if not holds_run(path):
            with pytest.raises(sb.InputError, match="holds no run"):
                sb.open_run(path)
            continue
        part = sb.open_run(path)
        more = len(part.steps) + 10
        whole = sb.iterate(np.random.default_rng(11).standard_normal((150, 150)), "zero", limit=more, exceptional=False)
        same(part.resume(limit=more), whole)


@pytest.mark.slow
@pytest.mark.skipif(sys.platform == "win32", reason="no SIGKILL")
def test_a_killed_run_with_deflation_windows(tmp_path: Path) -> None:
    path, n = tmp_path / "run", 800
    kill_when(path, lambda: committed(path) >= 3, "multishift", 0.0, n)
    a = np.random.default_rng(11).standard_normal((n, n))
    part = sb.open_run(path)
    assert not part.converged
    same(part.resume(), sb.iterate(a, "multishift", limit=10**6, exceptional=False))


# --- what is refused --------------------------------------------------------------------------------------------------


def test_directories_that_are_not_free(tmp_path: Path) -> None:
    a = gaussian(8, 1)
    occupied, file = tmp_path / "occupied", tmp_path / "file"
    occupied.mkdir()
    (occupied / "notes.txt").write_text("mine")
    file.write_text("mine")
    run = sb.iterate(a, store=tmp_path / "run")
    for path, words in ((occupied, "not empty"), (file, "is a file"), (tmp_path / "run", "holds a run already")):
        with pytest.raises(sb.InputError, match=words) as caught:
            sb.iterate(a, store=path)
        assert "\n" not in str(caught.value)
        with pytest.raises(sb.InputError, match=words):
            sb.iterate(a, limit=2).resume(store=path)
    assert (occupied / "notes.txt").read_text() == "mine"
    same(sb.open_run(tmp_path / "run"), run)
    with pytest.raises(sb.InputError, match="holds no run"):
        sb.open_run(occupied)
    assert not holds_run(occupied)
    empty = tmp_path / "empty"
    empty.mkdir()
    assert sb.iterate(a, store=empty).converged


def test_without_zarr(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    sb.iterate(gaussian(8, 1), store=tmp_path / "run")
    monkeypatch.setitem(sys.modules, "zarr", None)
    for attempt in (
        lambda: sb.iterate(gaussian(8, 1), store=tmp_path / "other"),
        lambda: sb.open_run(tmp_path / "run"),
    ):
        with pytest.raises(sb.InputError, match=r"schurbench\[store\]"):
            attempt()
    assert not (tmp_path / "other").exists()


def test_a_store_is_what_the_specification_says(tmp_path: Path) -> None:
    """Read by Zarr alone: plain numbers, little-endian, with a checksum; no other codec, no objects."""
    run = sb.iterate(gaussian(20, 1), store=tmp_path / "run")
    group = zarr.open_group(tmp_path / "run", mode="r")
    for _, array in group.arrays():
        text = array.metadata.to_dict()
        assert text["zarr_format"] == 3
        assert [codec["name"] for codec in text["codecs"]] == ["bytes", "crc32c"]
        assert text["data_type"] in ("int64", "float64", "complex128")
    np.testing.assert_array_equal(group["matrix"][:], run.matrix.array)
    commit = max((group["commit_0"].attrs, group["commit_1"].attrs), key=lambda attrs: attrs["number"])
    last = len(commit["checkpoints"]) - 1
    np.testing.assert_array_equal(group["checkpoint_H"][last], run.state(len(run.steps)).H)
    np.testing.assert_array_equal(group["bands"][7, 0], run.diagonal(7))
    assert commit["counts"]["steps"] == len(run.steps)


@pytest.fixture
def store(tmp_path: Path) -> Path:
    """A run of 30 sweeps in a directory, not converged."""
    sb.iterate(gaussian(24, 1), limit=30, store=tmp_path / "run")
    return tmp_path / "run"


def edit(path: Path, change: Callable[[dict[str, Any]], object]) -> None:
    text = json.loads(path.read_text())
    change(text)
    path.write_text(json.dumps(text))


def refused(path: Path, words: str) -> None:
    with pytest.raises(sb.InputError, match=words) as caught:
        sb.open_run(path)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    "codecs",
    [
        [{"name": "numcodecs.pickle"}],
        [{"name": "bytes", "configuration": {"endian": "little"}}, {"name": "gzip", "configuration": {"level": 1}}],
        [{"name": "bytes", "configuration": {"endian": "big"}}, {"name": "crc32c"}],
        [{"name": "bytes", "configuration": {"endian": "little"}}],
        [{"name": "vlen-utf8"}, {"name": "crc32c"}],
    ],
)
def test_other_codecs_are_refused(codecs: list[Any], store: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    edit(store / "bands" / "zarr.json", lambda text: text.update(codecs=codecs))

    def asked_for(*names: object) -> None:
        raise AssertionError(f"zarr was asked for {names}")

    monkeypatch.setattr("zarr.registry.get_codec_class", lambda name, *rest: asked_for(name))
    with pytest.raises((sb.InputError, AssertionError), match="codecs"):
        store_module.RunStore.open(store)._checked_array("bands", read_only=True)


def test_a_codec_is_refused_before_zarr_sees_it(store: Path) -> None:
    edit(store / "matrix" / "zarr.json", lambda text: text.update(codecs=[{"name": "numcodecs.pickle"}]))
    refused(store, "only plain numbers")


@pytest.mark.parametrize(
    ("name", "change"),
    [
        ("steps", {"data_type": "object"}),
        ("steps", {"data_type": {"name": "structured", "configuration": {}}}),
        ("bands", {"chunk_grid": {"name": "regular", "configuration": {"chunk_shape": [10**9, 3, 24]}}}),
        ("seconds", {"fill_value": 0.0}),
        ("values", {"storage_transformers": [{"name": "sharding"}]}),
        ("checkpoint_H", {"shape": [10**6, 10**6, 24]}),
        ("checkpoint_H", {"shape": [0, 24, 24]}),
        ("scaling", {"zarr_format": 2}),
        ("scaling", {"node_type": "group"}),
    ],
)
def test_other_arrays_are_refused(name: str, change: dict[str, Any], store: Path) -> None:
    edit(store / name / "zarr.json", lambda text: text.update(change))
    refused(store, "another|damaged")


def test_torn_and_damaged_stores(store: Path, tmp_path: Path) -> None:
    def copy() -> Path:
        shutil.rmtree(tmp_path / "copy", ignore_errors=True)
        return Path(shutil.copytree(store, tmp_path / "copy"))

    whole = sb.iterate(gaussian(24, 1))
    numbers = {
        name: json.loads((store / name / "zarr.json").read_text())["attributes"]["number"]
        for name in ("commit_0", "commit_1")
    }
    newest, older = max(numbers, key=numbers.__getitem__), min(numbers, key=numbers.__getitem__)

    # the last commit half written: the one before counts, and the run goes on from there to the same bytes
    path = copy()
    text = (path / newest / "zarr.json").read_text()
    (path / newest / "zarr.json").write_text(text[: len(text) // 2])
    part = sb.open_run(path)
    assert "broken off" in part.stop.message
    same(part.resume(limit=whole.settings.limit), whole)

    # a commit that contradicts itself is none
    for change in ({"counts": {}}, {"checkpoints": [5]}, {"number": "7"}, {"checkpoints": [0, 10**6]}):
        path = copy()
        edit(path / newest / "zarr.json", lambda text, change=change: text["attributes"].update(change))
        assert "broken off" in sb.open_run(path).stop.message

    # no commit at all
    (path / newest / "zarr.json").unlink()
    (path / older / "zarr.json").unlink()
    refused(path, "damaged")

    # a chunk with one byte changed, cut short, or gone
    for name in ("steps", "values", "bands", "checkpoint_H", "checkpoint_Qh", "matrix", "permutation", "scaling"):
        for harm in ("changed", "cut", "gone"):
            path = copy()
            chunk = next(p for p in sorted((path / name / "c").rglob("*")) if p.is_file())
            held = bytearray(chunk.read_bytes())
            if harm == "gone":
                chunk.unlink()
            else:
                held[5] ^= 1
                chunk.write_bytes(held if harm == "changed" else held[: len(held) // 2])
            if name == "bands":
                with pytest.raises(sb.InputError, match="damaged"):
                    sb.open_run(path).subdiagonal(3)
            else:
                refused(path, "damaged")

    # rubbish beyond the commit is ignored
    path = copy()
    (path / "steps" / "c" / "9").mkdir()
    (path / "steps" / "c" / "9" / "0").write_bytes(b"rubbish")
    (path / "bands" / "c" / "0" / "0" / "0.1234.partial").write_bytes(b"rubbish")
    same(sb.open_run(path).resume(limit=whole.settings.limit), whole)

    path = copy()
    edit(path / "zarr.json", lambda text: text["attributes"].update(schurbench_run=99))
    refused(path, "format 99")
    path = copy()
    (path / "link").symlink_to("/dev/zero")
    refused(path, "link")
    path = copy()
    edit(path / "zarr.json", lambda text: text["attributes"]["matrix"].update(n=10**7))
    refused(path, "memory|damaged")
    path = copy()
    edit(path / newest / "zarr.json", lambda text: text["attributes"]["head"]["settings"].update(colour="red"))
    refused(path, "damaged")


@pytest.mark.parametrize(
    ("column", "row", "value"),
    [(2, 3, -1), (3, 3, 10**6), (1, 0, 99), (0, 5, 3), (7, 2, 3), (6, 2, 500), (10, 0, 40), (12, 4, 25)],
)
def test_steps_outside_the_matrix_never_reach_a_kernel(column: int, row: int, value: int, store: Path) -> None:
    """Kernels do not look at bounds again, so that a window beyond the matrix would write into foreign memory."""
    array = zarr.open_array(store / "steps", mode="r+")
    array[row, column] = value
    refused(store, "damaged")


def test_a_disk_that_is_full_loses_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(store_module, "_STEPS_AT_ONCE", 5)
    a, limit = gaussian(30, 1), 100_000
    append = store_module.RunStore._append
    room = [2]

    def full(self: store_module.RunStore, name: str, rows: Any) -> None:
        room[0] -= name == "bands"
        if room[0] < 0:
            raise OSError(28, "No space left on device")
        append(self, name, rows)

    monkeypatch.setattr(store_module.RunStore, "_append", full)
    run = sb.iterate(a, "zero", limit=limit, exceptional=False, store=tmp_path / "run")
    assert run.stop.reason is StopReason.CANCELLED
    assert "No space left" in run.stop.message
    assert "\n" not in run.stop.message
    on_disk = sb.open_run(tmp_path / "run")
    assert 0 < len(on_disk.steps) < len(run.steps) < limit
    room[0] = 10**6
    more = len(run.steps) + 20
    whole = sb.iterate(a, "zero", limit=more, exceptional=False)
    same(run.resume(limit=more), whole)
    same(sb.open_run(tmp_path / "run"), whole)
    room[0] = 0
    run = sb.iterate(a, store=tmp_path / "short")
    assert "whole in memory only" in run.stop.message or run.stop.reason is StopReason.CANCELLED
    same(replace(run, stop=run.stop) if run.converged else run.resume(), replace(sb.iterate(a), stop=run.stop))
