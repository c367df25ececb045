"""The pure functions behind the panels, against LAPACK, certified eigenvalues, and the published palettes."""

from __future__ import annotations

import itertools
import json
import re
import struct
import zlib
from pathlib import Path

import numpy as np
import pytest
import scipy.linalg

import schurbench as sb
from schurbench.panels import colours, views
from schurbench.panels.text import complex_number, duration, rows


@pytest.fixture(scope="module")
def gyro(data: Path) -> sb.Run:
    return sb.iterate(data / "gyro_wiresaw50.npz")


@pytest.fixture(scope="module")
def demo() -> sb.Run:
    return sb.iterate(sb.demo_matrix())


@pytest.fixture(scope="module")
def stuck() -> sb.Run:
    """A cyclic permutation under zero shifts: every eigenvalue has modulus 1 and H never changes in magnitude."""
    return sb.iterate(np.roll(np.eye(6), 1, axis=0), strategy="zero", balance="none", limit=40)


# --- magnitudes ---------------------------------------------------------------------------------------------------


def test_picture_of_the_start_is_lapacks_hessenberg_form() -> None:
    # an unreduced Hessenberg form with given first column is unique up to signs (implicit Q theorem; Golub and Van
    # Loan, 4th edition, theorem 7.4.2), so magnitudes must be those of scipy.linalg.hessenberg (LAPACK dgehrd)
    a = np.random.default_rng(20).standard_normal((12, 12))
    run = sb.iterate(a, balance="none")
    level = views.matrix_view(run, 0).level
    reference = np.abs(scipy.linalg.hessenberg(a))
    present = np.triu(np.ones((12, 12), dtype=bool), -1)
    np.testing.assert_allclose(10.0 ** level[present], reference[present], rtol=1e-9)
    assert np.isneginf(level[~present]).all()


def test_pooling_keeps_the_largest_of_every_block() -> None:
    values = np.random.default_rng(21).standard_normal((700, 301))
    pooled = views.pool(values, (256, 256))
    assert pooled.shape == (256, 256)
    assert pooled.max() == values.max()
    row_edges, column_edges = (np.arange(257) * 700) // 256, (np.arange(257) * 301) // 256
    for i, j in ((0, 0), (17, 200), (255, 255)):
        block = values[row_edges[i] : row_edges[i + 1], column_edges[j] : column_edges[j + 1]]
        assert pooled[i, j] == block.max()


def test_pictures_stay_small_for_large_matrices() -> None:
    run = sb.iterate(np.random.default_rng(22).standard_normal((300, 300)), strategy="francis", limit=12)
    assert views.matrix_view(run, 12).level.shape == (256, 256)
    assert views.map_view(run).level.shape == (256, 13)


def test_map_shows_zeros_as_zeros_and_the_rest_as_recorded(gyro: sb.Run) -> None:
    level = views.map_view(gyro).level
    last = gyro.subdiagonal(len(gyro.steps))
    final = views.pool(np.where(last > 0, 1.0, 0.0).reshape(-1, 1), (256, 1))[:, 0]
    np.testing.assert_array_equal(np.isneginf(level[:, -1]), final == 0.0)


def test_pooled_map_shows_finished_rows_as_finished() -> None:
    run = sb.iterate(np.random.default_rng(26).standard_normal((280, 280)))
    level = views.map_view(run).level
    assert level.shape[0] == views.PICTURE_SIDE < run.n - 1
    assert any(event.kind == "pair" for event in run.deflations)
    assert np.isneginf(level[:, -1]).all()
    half = len(run.steps) // 2
    done = views.finished_rows(run, half)
    column = level[:, (half * level.shape[1]) // (len(run.steps) + 1)]
    assert np.isneginf(column[-1]) == done[-1]
    assert np.isfinite(column[0]) == (not done[1])


def test_rounding_level_is_lapacks_ulp_times_the_norm(gyro: sb.Run) -> None:
    # LAPACK's dlamch('P') is eps times base, 2^-52 in double precision
    assert views.rounding_level(gyro) == pytest.approx(np.finfo(float).eps * np.linalg.norm(gyro.state(0).H), rel=1e-12)
    assert views.rounding_level(sb.iterate(np.diag([1.0, 2.0, 3.0]), tol=1e-6)) == 1e-6


def test_a_zero_matrix_has_a_scale_all_the_same() -> None:
    run = sb.iterate(np.zeros((3, 3)))
    lo, hi = views.magnitude_limits(run)
    assert np.isfinite([lo, hi]).all()
    assert lo < hi
    assert np.isneginf(views.matrix_view(run, 0).level).all()


# --- what deflates, and when --------------------------------------------------------------------------------------


@pytest.mark.parametrize("test", ["neighbour", "norm"])
def test_threshold_is_the_published_one(test: str) -> None:
    # neighbour: |h| <= ulp (|h11| + |h22|), Golub and Van Loan, 4th edition, section 7.5.1; norm: |h| <= ulp ||H||_F
    a = np.random.default_rng(23).standard_normal((9, 9))
    run = sb.iterate(a, deflation=test, strategy="francis")
    d = np.abs(run.diagonal(3))
    for row in range(1, 9):
        expected = 2.0**-52 * (d[row - 1] + d[row] if test == "neighbour" else np.linalg.norm(run.state(0).H))
        assert views.deflation_threshold(run, 3, row) == pytest.approx(expected, rel=1e-10)


def test_ahues_tisseur_threshold_is_the_level_at_which_the_test_turns() -> None:
    # Ahues and Tisseur, LAPACK Working Note 122 (1997): |h21| |h12| <= ulp |h22| |h11 - h22|, with both sides scaled as
    # in LAPACK's dlahqr; written here from that description
    def accepts(h: np.ndarray, low: float) -> bool:
        h11, h12, h22 = h[0, 0], h[0, 1], h[1, 1]
        if abs(low) > 2.0**-52 * (abs(h11) + abs(h22)):
            return False
        ab, ba = max(abs(low), abs(h12)), min(abs(low), abs(h12))
        aa, bb = max(abs(h22), abs(h11 - h22)), min(abs(h22), abs(h11 - h22))
        return ba * (ab / (aa + ab)) <= max(2.0**-1022 / 2.0**-52, 2.0**-52 * (bb * (aa / (aa + ab))))

    run = sb.iterate(np.random.default_rng(24).standard_normal((10, 10)), strategy="francis")
    k = 5
    h = run.state(k).H
    lo, hi = run.window(k)
    for row in range(lo + 1, hi):
        level = views.deflation_threshold(run, k, row)
        block = h[row - 1 : row + 1, row - 1 : row + 1]
        assert accepts(block, 0.99 * level)
        assert not accepts(block, 1.01 * level)


def test_finished_rows_grow_to_all(gyro: sb.Run) -> None:
    counts = [int(views.finished_rows(gyro, k).sum()) for k in range(len(gyro.steps) + 1)]
    assert counts[-1] == gyro.n
    assert all(a <= b for a, b in itertools.pairwise(counts))


def test_longest_wait_is_a_state_that_still_waits(demo: sb.Run) -> None:
    k = views.longest_wait(demo)
    assert not demo.steps[k - 1].deflations
    assert demo.waits[k - 1] >= demo.waits.max() - 1


def test_track_marks_every_deflation_and_keeps_the_tower(stuck: sb.Run, demo: sb.Run) -> None:
    track = views.track_view(demo)
    np.testing.assert_array_equal(track.height, demo.waits)
    assert set(track.deflations) == {float(s.index) for s in demo.steps if s.deflations}
    assert list(track.exceptional) == demo.exceptional_steps
    tower = views.track_view(stuck, columns=7)
    assert len(tower.height) == 7
    assert tower.height.max() == len(stuck.steps) == 40
    assert tower.top >= 40
    np.testing.assert_allclose(np.diff(tower.edges).sum(), 40)


def test_outline_is_the_window_of_every_state(gyro: sb.Run) -> None:
    outline = views.deflation_view(gyro).outline
    for k, first, last in outline:
        assert gyro.window(int(k)) == (first, last + 1)


def test_every_deflation_is_drawn_once(demo: sb.Run) -> None:
    view = views.deflation_view(demo)
    drawn = sorted(map(tuple, np.concatenate([view.single, view.pair, view.split])))
    assert drawn == sorted((float(d.step), float(d.row)) for d in demo.deflations)


def test_curves_have_gaps_for_zeros_and_are_short() -> None:
    run = sb.iterate(np.random.default_rng(25).standard_normal((30, 30)), strategy="wilkinson")
    long = sb.iterate(np.roll(np.eye(5), 1, axis=0), strategy="zero", balance="none", limit=600)
    view = views.curves_view(run, (29, 28, 29))
    assert view.rows == (29, 28)
    np.testing.assert_array_equal(np.isnan(view.level[0]), [run.subdiagonal(int(k))[28] == 0.0 for k in view.steps])
    assert views.curves_view(long, (4,)).level.shape == (1, views.CURVE_POINTS)


# --- the spectrum -------------------------------------------------------------------------------------------------


def test_final_spectrum_is_the_certified_one(gyro: sb.Run, data: Path) -> None:
    # certified eigenvalues by ball arithmetic, see tests/data/README.md; they are well conditioned here
    balls = json.loads((data / "certified" / "gyro_wiresaw50.json").read_text(encoding="utf-8"))
    exact = np.array([complex(_centre(re), _centre(im)) for re, im, count in balls for _ in range(int(count))])
    view = views.spectrum_view(gyro, len(gyro.steps))
    assert view.active.shape == (0, 2)
    found = view.converged[:, 0] + 1j * view.converged[:, 1]
    assert len(found) == len(exact) == 50
    scale = np.abs(exact).max()
    for value in exact:
        assert np.abs(found - value).min() < 1e-10 * scale
    (left, right), (low, high) = views.spectrum_limits(gyro)
    assert left < exact.real.min()
    assert right > exact.real.max()
    assert low < exact.imag.min()
    assert high > exact.imag.max()


def _centre(ball: str) -> float:
    """Middle of a ball as Arb prints it, ``[3.14 +/- 1e-20]`` or ``[+/- 1e-73]``."""
    head = ball.strip("[]").split("+/-")[0].strip()
    return float(head) if head else 0.0


def test_spectrum_is_in_the_units_of_the_matrix() -> None:
    a = 2.0**900 * np.array([[1.0, 2.0], [3.0, 4.0]])
    run = sb.iterate(a)
    found = views.spectrum_view(run, len(run.steps)).converged
    np.testing.assert_allclose(
        np.sort(found[:, 0]), np.sort(np.linalg.eigvals(a / 2.0**900).real) * 2.0**900, rtol=1e-13
    )


def test_moving_and_converged_values_are_all_values(demo: sb.Run) -> None:
    for k in (0, 30, len(demo.steps)):
        view = views.spectrum_view(demo, k, row=0)
        assert len(view.active) + len(view.converged) == demo.n
        assert view.chosen.shape == (1, 2)


# --- steps that look into a deflation window -----------------------------------------------------------------------


@pytest.fixture(scope="module")
def many() -> sb.Run:
    return sb.iterate(np.random.default_rng(27).standard_normal((120, 120)), strategy="multishift")


def test_a_deflation_window_is_outlined_where_it_was_and_nowhere_else(many: sb.Run) -> None:
    for step in many.steps:
        view = views.matrix_view(many, step.index)
        if step.rows:
            assert view.looked_into == (step.window[1] - step.rows, step.window[1])
            assert step.window[0] <= view.looked_into[0]
        else:
            assert view.looked_into == (0, 0)
    assert views.matrix_view(many, 0).looked_into == (0, 0)


def test_the_track_marks_steps_without_a_sweep_and_counts_sweeps_only(many: sb.Run) -> None:
    track = views.track_view(many)
    assert set(track.windows) == {float(step.index) for step in many.steps if step.rows}
    assert len(track.height) == len(many.steps)
    for step in many.steps:
        if step.rows and step.index > 1:
            before = many.steps[step.index - 2]
            assert track.height[step.index - 1] == (0.0 if before.deflations else track.height[step.index - 2])
    assert views.track_view(sb.iterate(np.diag([1.0, 2.0, 3.0]))).windows.size == 0


def test_a_deflation_window_is_told_in_numbers(many: sb.Run) -> None:
    found = 0
    for step in many.steps:
        said = views.track_sentence(many, step.index)
        assert ("looked into a deflation window" in said) == bool(step.rows)
        if not step.rows:
            continue
        told = re.search(r"of (\d+) rows?: (\w+)(?: eigenvalues?)? deflated, (\w+) handed on as shifts\.$", said)
        assert told, said
        size, out, handed = (0 if word == "none" else int(word) for word in told.groups())
        # every row of the window either left with an eigenvalue or was handed on (Braman, Byers and Mathias, SIAM J.
        # Matrix Anal. Appl. 23, 2002, 948-973, section 2)
        assert size == out + handed == step.rows
        assert handed == len(step.handed_on) == len(views.spectrum_view(many, step.index).shifts)
        found += out
    assert 0 < found <= many.n


# --- words --------------------------------------------------------------------------------------------------------


def test_sentences_speak_for_every_state(demo: sb.Run, stuck: sb.Run) -> None:
    for run in (demo, stuck):
        for k in range(0, len(run.steps) + 1, 7):
            row = views.waited_row(run, k)
            for text in (
                views.track_sentence(run, k),
                views.deflation_sentence(run, k),
                views.subdiagonal_sentence(run, k, row, run.state(k)),
                views.spectrum_view(run, k, row).sentence,
                views.matrix_view(run, k).sentence,
            ):
                assert text.endswith((".", "%.")), text
                assert "nan" not in text


def test_a_stuck_run_says_how_long_it_has_waited(stuck: sb.Run) -> None:
    assert "has waited 40 sweeps" in views.track_sentence(stuck, 40)
    assert "healthy is up to" in views.subdiagonal_sentence(stuck, 40, 5)


def test_a_physical_state_is_named_where_it_holds_most_of_a_row() -> None:
    m = sb.load(np.diag([3.0, 2.0, 1.0]) + np.diag([1e-3, 1e-3], -1), labels=["level", "flow", "gate"])
    run = sb.iterate(m, balance="none")
    assert views.row_name(run, 0, run.state(0)) == "row 0 (mostly level)"
    assert views.row_name(run, 0) == "row 0"


@pytest.mark.parametrize("n", [1, 2])
def test_the_smallest_matrices_have_every_view(n: int) -> None:
    run = sb.iterate(np.array([[1.0, 2.0], [3.0, 4.0]])[:n, :n])
    last = len(run.steps)
    views.matrix_view(run, last)
    views.map_view(run)
    views.curves_view(run, (0, 1))
    views.deflation_view(run)
    views.track_view(run)
    assert len(views.spectrum_view(run, last, 0).converged) == n
    assert views.subdiagonal_sentence(run, last, n - 1).endswith(".")


def test_shifts_are_named_by_the_first_and_counted() -> None:
    for shifts, text in (
        ([1.5], "1.5"),
        ([1.5, 2.5], "1.5 and 2.5"),
        ([1 - 2j, 1 + 2j], "1 ± 2i"),
        ([1 + 2j, 1 - 2j, 3.0, 4.0], "1 ± 2i and 2 more"),
        ([1.0, 2.0, 3.0], "1, 2 and 1 more"),
    ):
        assert views._shifts_text(np.array(shifts, dtype=complex)) == text


def test_numbers_are_written_as_people_read_them() -> None:
    assert complex_number(-1.5) == "−1.5"
    assert complex_number(2 - 3j) == "2 − 3i"
    assert complex_number(-3j) == "−3i"
    assert complex_number(1e-7 + 1j) == "10⁻⁷ + 1i"
    assert rows((3, 4)) == "row 3"
    assert rows((0, 4)) == "rows 0 to 3"
    assert duration(0.0123) == "12.3 ms"
    assert duration(600.0) == "10 min"


@pytest.mark.parametrize(("lo", "hi", "most"), [(0, 82, 5), (-12.3, 4.6, 6), (0, 0, 5), (1, 1999, 5), (0, 15, 4)])
def test_ticks_are_few_round_and_inside(lo: float, hi: float, most: int) -> None:
    found = views.ticks(lo, hi, most)
    assert 1 <= len(found) <= most
    assert all(lo <= t <= hi for t in found)


# --- colours ------------------------------------------------------------------------------------------------------


def decoded(png: bytes) -> np.ndarray:
    """Pixels of an 8-bit RGBA picture without row filters, by the chunk layout of the PNG specification."""
    assert png[:8] == bytes.fromhex("89504e470d0a1a0a")
    at, data, size = 8, b"", (0, 0)
    while at < len(png):
        length, name = struct.unpack(">I4s", png[at : at + 8])
        body = png[at + 8 : at + 8 + length]
        assert struct.unpack(">I", png[at + 8 + length : at + 12 + length])[0] == zlib.crc32(name + body)
        if name == b"IHDR":
            size = struct.unpack(">II", body[:8])
            assert body[8:] == bytes([8, 6, 0, 0, 0])
        data += body if name == b"IDAT" else b""
        at += 12 + length
    rows_ = np.frombuffer(zlib.decompress(data), dtype=np.uint8).reshape(size[1], 1 + 4 * size[0])
    assert (rows_[:, 0] == 0).all()
    return rows_[:, 1:].reshape(size[1], size[0], 4)


def test_zeros_faint_entries_and_magnitudes_are_told_apart() -> None:
    level = np.array([[-np.inf, -20.0, -12.0], [-6.0, 0.0, 3.0]])
    pixels = decoded(colours.picture_png(level, (-12.0, 0.0)))
    assert pixels[0, 0, 3] == 0  # exact zero: transparent
    assert tuple(pixels[0, 1]) == (*colours.BELOW, 255)  # below the first level: grey
    # ends and middle of viridis as matplotlib publishes it (#440154, #21918c, #fde725; from memory)
    assert tuple(pixels[0, 2, :3]) == (0x44, 0x01, 0x54)
    assert np.abs(pixels[1, 0, :3].astype(int) - (0x21, 0x91, 0x8C)).max() <= 3
    assert tuple(pixels[1, 1, :3]) == tuple(pixels[1, 2, :3]) == (0xFD, 0xE7, 0x25)


def test_small_pictures_are_enlarged_without_blending() -> None:
    level = np.array([[0.0, -1.0], [-2.0, -3.0]])
    small, large = (
        decoded(colours.picture_png(level, (-3.0, 0.0))),
        decoded(colours.picture_png(level, (-3.0, 0.0), 100)),
    )
    assert large.shape == (100, 100, 4)
    np.testing.assert_array_equal(large, np.repeat(np.repeat(small, 50, axis=0), 50, axis=1))


def test_categories_are_okabe_and_itos() -> None:
    # M. Okabe and K. Ito, Color Universal Design, 2008: RGB values of their set, from memory
    published = {
        (230, 159, 0),
        (86, 180, 233),
        (0, 158, 115),
        (240, 228, 66),
        (0, 114, 178),
        (213, 94, 0),
        (204, 121, 167),
    }
    for colour in (colours.CHOSEN, colours.ACTIVE, colours.CONVERGED, colours.SHIFT, colours.THRESHOLD):
        assert tuple(bytes.fromhex(colour[1:])) in published
