"""The workbench in JupyterLab in Chromium: what an engineer does with it, once from top to bottom.

Screenshots go to ``artifacts/``; look at them after a change of layout.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.io

import schurbench as sb
from schurbench.measures import RATIO_LIMIT, orthogonality_ratio, residual_ratio
from tests.browser.lab import chromium_page, lab_server, open_notebook, run_all, set_theme
from tests.browser.seen import ALL_DRAWN, DRAWN, FAULTS, ROOT, picture, shot

pytestmark = [pytest.mark.browser, pytest.mark.slow]

SECONDS = 1000


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    place = tmp_path_factory.mktemp("lab")
    shutil.copy(ROOT / "notebooks" / "workbench.ipynb", place)
    return place


@pytest.fixture(scope="module")
def address(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    with lab_server(folder / "workbench.ipynb", tmp_path_factory.mktemp("scratch")) as where:
        yield where


@pytest.fixture
def page(request: pytest.FixtureRequest, address: str, chromium: str) -> Iterator[Any]:
    width, height = getattr(request, "param", (1280, 800))
    with chromium_page(chromium, width, height) as (page, outside):
        faults: list[str] = []
        page.on("pageerror", lambda error: faults.append(str(error)))
        open_notebook(page, address)
        run_all(page)
        page.locator(".sb-bench").wait_for(timeout=60 * SECONDS)
        page.get_by_text("Converged after").first.wait_for(timeout=60 * SECONDS)
        page.locator(".sb-finding").first.wait_for(timeout=60 * SECONDS)
        page.wait_for_function(ALL_DRAWN)
        yield page
        assert outside == []
        assert faults == []
        page.evaluate(
            "() => window.jupyterapp.shell.currentWidget.sessionContext.session.kernel.shutdown()"
        )  # a page opened on a kernel full of old widgets restores them first


def test_the_whole_job(page: Any, folder: Path) -> None:
    track, panels = 0, (1, 2, 3, 4)

    # four drawn panels and the track, all of which follow the cursor
    before = [picture(page, panel) for panel in panels]
    where = page.locator(".sb-where").inner_text()
    figure = page.locator(".sb-bench .bqplot").nth(track)
    box = figure.bounding_box()
    figure.click(position={"x": 0.25 * box["width"], "y": 0.5 * box["height"]})
    page.wait_for_function("was => document.querySelector('.sb-where').innerText !== was", arg=where)
    page.wait_for_timeout(800)
    after = [picture(page, panel) for panel in panels]
    assert all(a != b for a, b in zip(before, after, strict=True))

    # the keyboard moves it too
    where = page.locator(".sb-where").inner_text()
    page.locator(".sb-step .noUi-handle").focus()
    page.keyboard.press("ArrowRight")
    page.wait_for_function("was => document.querySelector('.sb-where').innerText !== was", arg=where)
    step = int(where.split()[1])
    assert page.locator(".sb-where").inner_text().startswith(f"Step {step + 1} of")

    # also to both ends, and in larger strides
    last = int(where.split()[3].rstrip(":"))
    for key, words in (("End", f"Step {last} of {last}"), ("PageDown", f"Step {last - 5} of"), ("Home", "Start:")):
        page.keyboard.press(key)
        page.wait_for_function("words => document.querySelector('.sb-where').innerText.startsWith(words)", arg=words)

    # a click into a panel chooses a row, which the others mark
    rows = picture(page, 4)
    matrix = page.locator(".sb-bench .bqplot").nth(1)
    box = matrix.bounding_box()
    matrix.click(position={"x": 0.5 * box["width"], "y": 0.6 * box["height"]})
    page.wait_for_timeout(800)
    assert picture(page, 4) != rows

    page.get_by_role("button", name="curves", exact=True).click()
    page.wait_for_function(ALL_DRAWN)
    shot(page, "curves-1280")

    # another strategy
    page.get_by_label("Strategy").select_option("wilkinson")
    page.get_by_role("button", name="Run", exact=True).click()
    page.wait_for_function("() => document.querySelector('.sb-where').innerText.includes('single shift')")
    page.get_by_text("Converged after").first.wait_for()

    # the comparison
    page.get_by_role("tab", name="Compare").click()
    page.get_by_role("button", name="Compare", exact=True).click()
    page.get_by_text("is preferred:").wait_for(timeout=60 * SECONDS)
    shot(page, "comparison-1280")

    # factors, saved and checked against the matrix
    page.get_by_role("tab", name="Factors").click()
    page.get_by_text("Passed:").wait_for(timeout=60 * SECONDS)
    page.get_by_label("File", exact=True).fill("from_the_page.mat")
    page.get_by_label("File", exact=True).press("Tab")
    page.get_by_role("button", name="Save factors").click()
    page.get_by_text("from_the_page.mat", exact=True).wait_for()
    shot(page, "factors-1280")
    with page.expect_download() as download:
        page.get_by_role("link", name="from_the_page.mat", exact=True).click()
    saved = folder / "from_the_page.mat"
    assert Path(download.value.path()).read_bytes() == saved.read_bytes()
    loaded = scipy.io.loadmat(saved)
    t, z = np.ascontiguousarray(loaded["T"]), np.ascontiguousarray(loaded["Z"])
    a = sb.demo_matrix().array
    assert np.iscomplexobj(t)  # wilkinson on a real matrix works in complex form
    assert residual_ratio(a, z, t) < RATIO_LIMIT
    assert orthogonality_ratio(z) < RATIO_LIMIT
    assert not np.tril(t, -1).any()


def test_a_file_of_ones_own_by_path_and_by_upload(page: Any, folder: Path, tmp_path: Path) -> None:
    np.save(folder / "mine.npy", np.random.default_rng(40).standard_normal((30, 30)))
    page.get_by_role("tab", name="Open").click()
    page.get_by_label("Path", exact=True).fill("nowhere.npy")
    page.get_by_label("Path", exact=True).press("Tab")
    page.get_by_role("button", name="Load", exact=True).click()
    page.locator(".sb-error").filter(has_text="nowhere.npy").wait_for()
    shot(page, "error-1280")
    page.get_by_label("Path", exact=True).fill("mine.npy")
    page.get_by_label("Path", exact=True).press("Tab")
    page.get_by_role("button", name="Load", exact=True).click()
    page.locator(".sb-head").filter(has_text="mine: n = 30").wait_for()

    # one large enough for many shifts and deflation windows, and for pooled pictures
    np.save(folder / "many.npy", np.random.default_rng(42).standard_normal((300, 300)))
    page.get_by_label("Path", exact=True).fill("many.npy")
    page.get_by_label("Path", exact=True).press("Tab")
    page.get_by_role("button", name="Load", exact=True).click()
    page.locator(".sb-head").filter(has_text="many: n = 300").wait_for()
    page.locator(".sb-where").filter(has_text=f"of {len(sb.iterate(folder / 'many.npy').steps)}:").wait_for()
    page.get_by_role("button", name="start", exact=True).click()
    page.locator(".sb-step .noUi-handle").focus()
    page.keyboard.press("ArrowRight")
    page.get_by_text("looked into a deflation window of").wait_for()
    page.wait_for_timeout(800)
    page.wait_for_function(ALL_DRAWN)
    shot(page, "deflation-window-1280")
    assert page.evaluate(FAULTS) == []

    # larger than the 10 MB that the server would take by default, which counts after encoding as text
    large = tmp_path / "large.npy"
    np.save(large, np.triu(np.ones((1200, 1200))))
    with page.expect_file_chooser() as chooser:
        page.get_by_role("button", name="Upload").click()
    chooser.value.set_files(str(large))
    page.locator(".sb-head").filter(has_text="large: n = 1200").wait_for(timeout=60 * SECONDS)


@pytest.mark.parametrize("page", [(1280, 800), (1920, 1080)], indirect=True, ids=["1280x800", "1920x1080"])
def test_nothing_overlaps_or_is_cut_in_either_theme(page: Any) -> None:
    width = page.viewport_size["width"]
    for theme in ("Light", "Dark"):
        set_theme(page, f"JupyterLab {theme}")
        page.wait_for_timeout(500)
        page.locator(".sb-bench").evaluate("bench => bench.scrollIntoView()")
        shot(page, f"workbench-{width}-{theme.lower()}")
        assert page.evaluate(FAULTS) == []
        assert all(n > 0 for n in page.evaluate(DRAWN))
        bench = page.locator(".sb-bench").bounding_box()
        assert bench["height"] < page.viewport_size["height"] - 110  # what JupyterLab leaves for a notebook
