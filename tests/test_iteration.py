"""Iteration and journal: stepping by hand, the driver, replay, stop reasons, saved runs."""

from __future__ import annotations

import itertools
import threading
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

import schurbench as sb
from schurbench.journal import DeflationKind, StepKind, StopReason
from schurbench.journal.journal import Journal
from schurbench.journal.store import RunStore
from schurbench.measures import RATIO_LIMIT, orthogonality_ratio, residual_ratio
from schurbench.policy import Francis, Given, WindowView
from tests.gallery import cyclic, day, matched_distance

STRATEGIES = ("zero", "rayleigh", "wilkinson", "francis", "multishift")


def gaussian(n: int, seed: int, complex_: bool = False) -> np.ndarray:
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((n, n))
    return a + 1j * rng.standard_normal((n, n)) if complex_ else a


@pytest.mark.parametrize("strategy", STRATEGIES)
@pytest.mark.parametrize("complex_", [False, True])
def test_a_run_is_stepping_by_hand(strategy: str, complex_: bool) -> None:
    """Every state of a run, rebuilt, has the bytes that stepping by hand gives, and is similar to the matrix."""
    a = gaussian(14, 3, complex_)
    run = sb.iterate(a, strategy=strategy, limit=90)
    by_hand = sb.Iteration(a, strategy=strategy, limit=90)
    assert by_hand.window == (0, 14)
    np.testing.assert_array_equal(run.state(0).H, by_hand.H)
    for k, recorded in enumerate(run.steps, start=1):
        step = by_hand.step()
        state = run.state(k)
        np.testing.assert_array_equal(state.H, by_hand.H)
        np.testing.assert_array_equal(state.Z, by_hand.Z)
        assert state.window == by_hand.window == run.window(k)
        assert (step.index, step.window, step.kind, step.shifts) == (
            k, recorded.window, recorded.kind, recorded.shifts,
        )  # fmt: skip
        assert step.deflations == recorded.deflations
        assert not np.tril(state.H, -2).any()
        np.testing.assert_array_equal(run.subdiagonal(k), np.abs(np.diag(state.H, -1)))
        assert residual_ratio(a, state.Z, state.H) < RATIO_LIMIT
        assert orthogonality_ratio(state.Z) < RATIO_LIMIT
    assert by_hand.done
    with pytest.raises(sb.SchurbenchError, match="done"):
        by_hand.step()


@pytest.mark.parametrize(("strategy", "complex_"), [("francis", False), ("wilkinson", False), ("multishift", True)])
def test_states_out_of_order_and_across_checkpoints(strategy: str, complex_: bool) -> None:
    """Jumping back and forth gives the same bytes as walking, whatever the checkpoint budget."""
    a = gaussian(130 if strategy == "multishift" else 60, 8, complex_)
    rich = sb.iterate(a, strategy=strategy)
    poor = sb.iterate(a, strategy=strategy, keep=0)
    assert len(rich.steps) > 64
    for k in (len(rich.steps), 70, 3, 65, 64, 0, 71):
        np.testing.assert_array_equal(rich.state(k).H, poor.state(k).H)
        np.testing.assert_array_equal(rich.state(k).Z, poor.state(k).Z)
        np.testing.assert_array_equal(rich.subdiagonal(k), poor.subdiagonal(k))
    with pytest.raises(IndexError, match="outside"):
        rich.state(len(rich.steps) + 1)
    with pytest.raises(ValueError, match="read-only"):
        rich.state(2).H[0, 0] = 1.0


def test_states_asked_for_in_several_threads() -> None:
    run = sb.iterate(gaussian(60, 8))
    alone = [run.state(k).H for k in range(len(run.steps) + 1)]
    again = sb.iterate(gaussian(60, 8))
    with ThreadPoolExecutor(4) as threads:
        order = np.random.default_rng(0).permutation(len(alone)).tolist()
        for k, state in zip(order, threads.map(again.state, order), strict=True):
            np.testing.assert_array_equal(state.H, alone[k])


def test_checkpoints_stay_within_their_budget() -> None:
    a = gaussian(40, 2)
    run = sb.iterate(a, strategy="zero", limit=1000, keep=10 * 2 * 40 * 40 * 8)
    held = sum(H.nbytes + Q.nbytes for H, Q in run.journal.checkpoints.values())
    assert len(run.journal.checkpoints) > 2
    assert held <= run.settings.keep


@pytest.mark.parametrize("complex_", [False, True])
def test_deflation_windows_are_recorded(complex_: bool) -> None:
    """What a window finds is what the definition says (Braman, Byers & Mathias 2002, part II, §2), by numpy."""
    a = gaussian(160, 4, complex_)
    run = sb.iterate(a, "multishift")
    assert run.converged
    looked = [step for step in run.steps if step.kind is StepKind.WINDOW]
    assert looked
    assert sum(d.size for step in looked for d in step.deflations if d.test == "spike") > 20
    for step in looked[:12]:
        before = run.state(step.index - 1).H
        lo, hi = step.window
        top = max(lo, hi - step.rows)
        w = np.linalg.eigvals(before[top:hi, top:hi])
        assert not step.shifts
        assert len(step.spikes) == hi - top
        # together the spikes are the subdiagonal entry turned by a unitary matrix
        beside = abs(before[top, top - 1]) if top > lo else 0.0
        assert np.linalg.norm(step.spikes) == pytest.approx(beside, rel=1e-12)
        values = [x for d in step.deflations if d.test == "spike" for x in d.eigenvalues] + list(step.handed_on)
        assert matched_distance(np.array(values), w).max() < 1e-8
        for d in step.deflations:
            if d.test == "spike":
                assert d.magnitude <= d.threshold
    many = [step for step in run.steps if step.kind is StepKind.MANY]
    assert many
    for step in many:
        earlier = [s for s in looked if s.index < step.index][-1]
        assert set(step.shifts) <= set(earlier.handed_on) or step.exceptional


@pytest.mark.parametrize("strategy", STRATEGIES)
@pytest.mark.parametrize("complex_", [False, True])
def test_rotations_one_by_one(strategy: str, complex_: bool) -> None:
    a = gaussian(9, 5, complex_)
    run = sb.iterate(a, strategy=strategy, limit=20)
    for k in (1, 2, 7):
        step = run.steps[k - 1]
        rotations = run.rotations(k)
        bulges = len(step.shifts) if complex_ or len(step.shifts) == 1 else len(step.shifts) // 2
        assert step.rotations == bulges * (step.window[1] - step.window[0] - 1)
        assert sum(r.side in ("left", "both") for r in rotations) == step.rotations
        for r in rotations:
            np.testing.assert_allclose(r.matrix @ r.matrix.conj().T, np.eye(len(r.matrix)), atol=1e-14)
        # the last matrix is the next state, to rounding (deflations of this step may zero or standardise further)
        if not step.deflations:
            np.testing.assert_allclose(rotations[-1].H, run.state(k).H, atol=1e-12)
        if step.kind is StepKind.SINGLE:
            lo, hi = step.window
            middle = rotations[hi - lo - 2].H
            np.testing.assert_allclose(np.tril(middle[lo:hi, lo:hi], -1), 0.0, atol=1e-13)
    again = run.rotations(2)
    np.testing.assert_array_equal(again[3].H, run.rotations(2)[3].H)
    with pytest.raises(IndexError):
        again[len(again)]


@pytest.mark.parametrize("strategy", ["wilkinson", "francis"])
def test_work_of_a_step_grows_with_the_square_of_n(strategy: str) -> None:
    """Entries that each rotation really changes, summed over the first step: four times as many at twice the n."""
    changed = {}
    for n in (10, 20, 40):
        run = sb.iterate(gaussian(n, 1), strategy=strategy, limit=1)
        before = run.state(0).H
        total = 0
        for rotation in run.rotations(1):
            total += np.count_nonzero(before != rotation.H)
            before = rotation.H
        changed[n] = total
    assert 3.2 < changed[20] / changed[10] < 4.8
    assert 3.2 < changed[40] / changed[20] < 4.8


@pytest.mark.parametrize("n", [1, 2, 3])
@pytest.mark.parametrize("complex_", [False, True])
def test_smallest_matrices(n: int, complex_: bool) -> None:
    for strategy in STRATEGIES:
        run = sb.iterate(gaussian(n, 11, complex_), strategy=strategy, limit=2000)
        if strategy in ("francis", "wilkinson") or n == 1:
            assert run.converged
            assert sum(d.size for d in run.deflations if d.kind is not DeflationKind.SPLIT) == n


def test_every_row_is_deflated_once() -> None:
    for seed in range(5):
        run = sb.iterate(gaussian(30, seed))
        rows = sorted(
            r for d in run.deflations if d.kind is not DeflationKind.SPLIT for r in range(d.row, d.row + d.size)
        )
        assert rows == list(range(30))
        values = [v for d in run.deflations for v in d.eigenvalues]
        assert len(values) == 30
        np.testing.assert_allclose(sorted(values, key=lambda v: (v.real, v.imag)),
                                   sorted(run.ritz(len(run.steps)), key=lambda v: (v.real, v.imag)))  # fmt: skip
        for d in run.deflations:
            assert d.magnitude <= max(d.threshold, 0.0) or d.magnitude == 0.0


def test_forms() -> None:
    real, complex_ = gaussian(6, 1), gaussian(6, 1, True)
    assert sb.iterate(real).settings.form == "real"
    assert sb.iterate(real).settings.strategy == "francis"
    assert sb.iterate(complex_).settings.strategy == "wilkinson"
    large = np.diag(np.arange(300.0))
    assert sb.iterate(large).settings.strategy == "multishift"
    assert sb.iterate(large.astype(complex)).settings.strategy == "multishift"
    for strategy, form in (("zero", "real"), ("rayleigh", "real"), ("francis", "real"), ("wilkinson", "complex")):
        assert sb.iterate(real, strategy=strategy, limit=5).settings.form == form
        assert sb.iterate(complex_, strategy=strategy, limit=5).settings.form == "complex"
    assert sb.iterate(real, "given", shifts=[1.0, 1 + 2j, 1 - 2j], limit=3).settings.form == "real"
    assert sb.iterate(real, "given", shifts=[1.0, 1 + 2j], limit=3).settings.form == "complex"
    symmetric = real + real.T
    assert sb.iterate(symmetric, "wilkinson", form="real").converged
    assert sb.iterate(complex_, "francis").steps[0].kind is StepKind.TWIN_SINGLE
    assert sb.iterate(real, "francis").steps[0].kind is StepKind.DOUBLE


def test_given_shifts_are_used_in_order() -> None:
    a = gaussian(12, 4)
    run = sb.iterate(a, "given", shifts=[0.5, 1 + 2j, 1 - 2j], limit=4)
    assert [s.shifts for s in run.steps] == [(0.5,), (1 + 2j, 1 - 2j), (0.5,), (1 + 2j, 1 - 2j)]
    exact = np.linalg.eigvals(a)
    real = exact[np.abs(exact.imag) < 1e-9].real
    # shifting by an eigenvalue splits it off at once (Golub & Van Loan, 4th ed., §7.5.2)
    run = sb.iterate(a, "given", shifts=[real[0]], limit=2)
    assert run.deflations[0].row == 11
    assert abs(run.deflations[0].eigenvalues[0] - real[0]) < 1e-12


class Newtonish:
    """A user's own strategy: the last diagonal entry, once more with a small imaginary part."""

    name = "own"

    def shifts(self, view: WindowView) -> list[complex]:
        last = view.window[1] - 1
        assert not view.H.flags.writeable
        return [complex(view.H[last, last]) + 0.01j]


def test_own_strategy() -> None:
    run = sb.iterate(gaussian(10, 2), Newtonish(), form="complex")
    assert run.settings.strategy == "own"
    assert run.converged
    with pytest.raises(sb.SettingsError, match="conjugate"):
        sb.iterate(gaussian(10, 2), Newtonish())
    it = sb.Iteration(gaussian(10, 2), Newtonish())
    before = it.H
    with pytest.raises(sb.SettingsError):
        it.step()
    np.testing.assert_array_equal(it.H, before)

    class Wrong:
        def __init__(self, value: object) -> None:
            self.value = value

        def shifts(self, view: WindowView) -> object:
            return self.value

    for value, words in [
        ([], "one or two"),
        ([1.0, 2.0, 3.0], "even number"),
        ([1j], "conjugate too"),
        ([1j, 2j], "conjugate pair"),
        ([1j, -1j, 1.0, 2j], "conjugate pair"),
        ([float("nan")], "NaN"),
        ([1e30], "norms"),
        (["a"], "numbers"),
        (None, "numbers"),
    ]:
        with pytest.raises(sb.SettingsError, match=words):
            sb.iterate(gaussian(5, 0), Wrong(value))


@pytest.mark.parametrize(
    ("keywords", "words"),
    [
        ({"strategy": "fastest"}, "unknown"),
        ({"strategy": 3}, "shifts"),
        ({"strategy": "given"}, "shifts="),
        ({"strategy": "given", "shifts": []}, "at least one"),
        ({"strategy": "given", "shifts": ["x"]}, "numbers"),
        ({"strategy": "given", "shifts": [np.inf]}, "finite"),
        ({"shifts": [1.0]}, "only used"),
        ({"strategy": "given", "shifts": [1j], "form": "real"}, "conjugat"),
        ({"strategy": "wilkinson", "form": "real"}, "symmetric"),
        ({"form": "triangular"}, "form"),
        ({"balance": "yes"}, "balance"),
        ({"deflation": "eager"}, "deflation"),
        ({"tol": -1.0}, "tol"),
        ({"tol": float("nan")}, "tol"),
        ({"flip": "no"}, "flip"),
        ({"accumulate": 1}, "accumulate"),
        ({"stop_when_stalled": None}, "stop_when_stalled"),
        ({"limit": 0}, "limit"),
        ({"limit": 2.5}, "limit"),
        ({"exceptional": "often"}, "exceptional"),
        ({"keep": "lots"}, "keep"),
    ],
)
def test_settings_that_cannot_be_carried_out(keywords: dict[str, object], words: str) -> None:
    with pytest.raises(sb.SettingsError, match=words) as caught:
        sb.iterate(gaussian(5, 0), **keywords)
    assert "\n" not in str(caught.value)


def test_real_form_of_a_complex_matrix_is_refused() -> None:
    with pytest.raises(sb.SettingsError, match="complex"):
        sb.iterate(gaussian(5, 0, True), form="real")


def test_keep_is_read_in_words() -> None:
    a = gaussian(4, 0)
    assert sb.iterate(a, keep="256 MiB").settings.keep == 256 * 2**20
    assert sb.iterate(a, keep="1.5GB").settings.keep == 1_500_000_000
    assert sb.iterate(a, keep=4096).settings.keep == 4096


def test_stop_reasons() -> None:
    stuck = cyclic(12)
    run = sb.iterate(stuck, "francis", exceptional=False, limit=40)
    assert run.stop.reason is StopReason.LIMIT
    assert run.stop.window == (0, 12)
    assert "40 sweeps" in run.stop.message
    run = sb.iterate(stuck, "francis", exceptional=False, stop_when_stalled=True)
    assert run.stop.reason is StopReason.STALLED
    assert run.sweeps == 60
    assert sb.iterate(stuck, "francis").converged
    assert sb.iterate(stuck, "francis").exceptional_steps
    assert sb.iterate(gaussian(20, 0), stop_when_stalled=True).converged

    cancel = threading.Event()
    seen = []

    def watch(event: sb.Progress) -> None:
        seen.append(event)
        cancel.set()

    run = sb.iterate(stuck, "zero", limit=10**7, cancel=cancel, progress=watch)
    assert run.stop.reason is StopReason.CANCELLED
    assert 0 < run.sweeps < 10**7
    assert seen[-1].phase == "done"
    assert seen[-1].sweeps == run.sweeps


def test_long_stalls_end_before_rounding_spoils_the_factors() -> None:
    """Day's family without exceptional shifts, and a skew matrix without shifts: thousands of sweeps that lead nowhere."""
    g = gaussian(80, 1)
    for a, strategy in ((day(40, 1e-6), "francis"), (g - g.T, "zero"), (day(10, 1e-6), "zero")):
        run = sb.iterate(a, strategy, exceptional=False, limit=300 * len(a))
        assert not run.converged
        state = run.state(len(run.steps))
        assert residual_ratio(np.asarray(a), state.Z, state.H) < RATIO_LIMIT
        assert orthogonality_ratio(state.Z) < RATIO_LIMIT


def test_keyboard_interrupt_keeps_what_was_done() -> None:
    class Interrupting(Francis):
        def shifts(self, view: WindowView) -> tuple[complex, ...]:
            if view.sweep == 7:
                raise KeyboardInterrupt
            return super().shifts(view)

    a = gaussian(20, 3)
    run = sb.iterate(a, Interrupting())
    assert run.stop.reason is StopReason.CANCELLED
    assert run.sweeps == 7
    whole = sb.iterate(a)
    np.testing.assert_array_equal(run.state(7).H, whole.state(7).H)


def step_to_the_end(it: sb.Iteration) -> None:
    while not it.done:
        it.step()


class Interrupting(list):
    """A list to which nothing is appended the first time: an interrupt came in between."""

    armed = True

    def append(self, item: object) -> None:
        if self.armed:
            self.armed = False
            raise KeyboardInterrupt
        super().append(item)


@pytest.mark.parametrize(
    ("where", "stored"),
    [*itertools.product(["steps", "windows", "_chunks", "bands", "checkpoint"], [False, True]), ("store", True)],
)
def test_an_interrupt_while_recording_leaves_a_whole_record(
    where: str, stored: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whatever had been written of the step when it came, the record is that of whole steps, and the run can go on."""
    a = gaussian(30, 3)
    whole = sb.iterate(a, "rayleigh", limit=500)
    it = sb.Iteration(a, "rayleigh", limit=500, store=tmp_path / "run" if stored else None)
    journal = it._journal
    steps_before = 0 if where == "checkpoint" else 200
    while len(journal.steps) < steps_before:
        it.step()
    if where in ("steps", "windows", "_chunks"):
        setattr(journal, where, Interrupting(getattr(journal, where)))
    else:
        owner = RunStore if where == "store" else Journal
        method = {"bands": "_keep_bands", "checkpoint": "_room", "store": "add"}[where]
        original, armed = getattr(owner, method), [True]

        def interrupted(self: Journal | RunStore, *arguments: object) -> object:
            if armed.pop() if armed else False:
                raise KeyboardInterrupt
            return original(self, *arguments)

        monkeypatch.setattr(owner, method, interrupted)
    with pytest.raises(KeyboardInterrupt):
        step_to_the_end(it)
    last = len(journal.steps)
    assert len(journal.windows) == last + 1
    assert last >= steps_before
    np.testing.assert_array_equal(it.H, whole.state(last).H)
    step_to_the_end(it)
    run = it.run()
    assert [(s.window, s.shifts) for s in run.steps] == [(s.window, s.shifts) for s in whole.steps]
    np.testing.assert_array_equal(run.state(len(run.steps)).H, whole.state(len(whole.steps)).H)
    runs = [run, sb.open_run(tmp_path / "run")] if stored else [run]
    for k in range(len(run.steps) + 1):
        for kept in runs:
            np.testing.assert_array_equal(kept.subdiagonal(k), whole.subdiagonal(k))


def test_published_stalls_without_exceptional_shifts() -> None:
    """Cyclic permutations and Day's family stall a pure double shift, and converge with exceptional shifts.

    Sources: closed forms; Batterson & Smillie 1989 and Day, SAND96-0913 (1996) for the stalls.
    """
    for a in (cyclic(8), cyclic(25), day(5, 1e-3), day(10, 1e-6)):
        pure = sb.iterate(a, "francis", exceptional=False, balance="none", limit=600)
        helped = sb.iterate(a, "francis", balance="none")
        assert helped.converged
        assert not pure.converged


def test_every_unshifted_step_only_permutes_a_cyclic_matrix() -> None:
    run = sb.iterate(cyclic(6), "zero", balance="none", limit=5)
    for k in range(6):
        np.testing.assert_allclose(
            np.sort(np.abs(run.state(k).H), axis=None), np.sort(cyclic(6), axis=None), atol=1e-14
        )


def test_balance_and_flip_keep_the_similarity() -> None:
    rng = np.random.default_rng(6)
    d = 2.0 ** rng.integers(-20, 20, 15)
    a = gaussian(15, 6) * d[:, None] / d
    a[3, :3] = a[3, 4:] = 0.0  # one isolated eigenvalue for the permutation to find
    for balance in ("none", "permute", "scale", "both"):
        for flip in (False, True):
            run = sb.iterate(a, balance=balance, flip=flip)
            assert run.converged
            final = run.state(len(run.steps))
            assert residual_ratio(run.preparation.working(run.matrix), final.Z, final.H) < RATIO_LIMIT
            if balance in ("scale", "both"):
                assert final.D.max() / final.D.min() > 1e3
                assert np.all(np.frexp(final.D)[0] == 0.5)
            else:
                assert np.all(final.D == 1.0)


@pytest.mark.parametrize("exponent", [-1000, -700, 700, 1000])
def test_extreme_magnitudes_are_worked_on_in_scaled_units(exponent: int) -> None:
    a = np.ldexp(gaussian(12, 9), exponent)
    run = sb.iterate(a)
    plain = sb.iterate(gaussian(12, 9))
    assert run.converged
    assert run.preparation.exponent != 0
    assert run.sweeps == plain.sweeps
    values = run.to_matrix_units(np.array([v for d in run.deflations for v in d.eigenvalues]))
    expected = np.array([v for d in plain.deflations for v in d.eigenvalues])
    np.testing.assert_allclose(np.ldexp(values.real, -exponent), expected.real, rtol=1e-12, atol=1e-14)


def test_saved_runs_reopen_with_the_same_bytes(tmp_path: Path) -> None:
    for strategy, complex_ in (("francis", False), ("wilkinson", True), ("zero", False), ("multishift", False)):
        a = gaussian(40, 1, complex_)
        m = sb.load(a, labels=[f"x{i}" for i in range(40)])
        run = sb.iterate(m, strategy=strategy, limit=150, balance="both")
        path = run.save(tmp_path / f"{strategy}.run")
        again = sb.open_run(path)
        assert list(again.steps) == list(run.steps)
        assert again.settings == run.settings
        assert again.stop == run.stop
        for field in ("name", "source", "labels", "notes", "key", "file_sha256"):
            assert getattr(again.matrix, field) == getattr(m, field)
        assert again.matrix.sha256 == m.sha256
        assert again.to_dict() == run.to_dict()
        for k in (0, 1, 63, 100, len(run.steps)):
            if k <= len(run.steps):
                np.testing.assert_array_equal(again.state(k).H, run.state(k).H)
                np.testing.assert_array_equal(again.state(k).Z, run.state(k).Z)
        with pytest.raises(sb.InputError, match="exists"):
            run.save(path)
        run.save(path, replace=True)


def test_files_that_are_no_runs(tmp_path: Path) -> None:
    with pytest.raises(sb.InputError, match="does not exist"):
        sb.open_run(tmp_path / "missing.run")
    plain = tmp_path / "plain.npz"
    np.savez(plain, A=np.eye(3))
    with pytest.raises(sb.InputError, match="not a saved run"):
        sb.open_run(plain)
    run = sb.iterate(gaussian(10, 1))
    path = run.save(tmp_path / "good.run")
    whole = path.read_bytes()
    cut = tmp_path / "cut.run"
    cut.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(sb.InputError):
        sb.open_run(cut)
    at = whole.index(run.matrix.array.tobytes())
    damaged = tmp_path / "damaged.run"
    damaged.write_bytes(whole[:at] + b"\x00" + whole[at + 1 :])
    with pytest.raises(sb.InputError, match="damaged"):
        sb.open_run(damaged)


def test_without_accumulation() -> None:
    run = sb.iterate(gaussian(20, 1), accumulate=False)
    assert run.converged
    assert run.state(3).Z is None
    np.testing.assert_array_equal(run.state(5).H, sb.iterate(gaussian(20, 1)).state(5).H)
    with pytest.raises(sb.SettingsError, match="accumulate"):
        run.factors()


def test_given_closes_under_conjugation_with_multiplicity() -> None:
    assert Given([1j, 1j, -1j, -1j]).form == "real"
    assert Given([1j, 1j, -1j]).form == "complex"
    assert Given([2.0]).form == "real"
