"""The workbench as a plain page through Voilà in Chromium, with everything outside this machine out of reach."""

from __future__ import annotations

import os
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from schurbench.panels.serve import workbench_notebook, write_notebook
from tests.browser.lab import chromium_page, page_server
from tests.browser.seen import ALL_DRAWN, FAULTS, picture, shot
from tests.conftest import REQUIRE_BROWSER

pytestmark = [
    pytest.mark.browser,
    pytest.mark.slow,
    pytest.mark.skipif(
        find_spec("voila") is None and os.environ.get(REQUIRE_BROWSER) != "1",
        reason=f"voila is not installed (set {REQUIRE_BROWSER}=1 to make this a failure)",
    ),
]

SECONDS = 1000


@pytest.fixture
def plant(tmp_path: Path) -> Path:
    """A matrix file of one's own, with names for its states."""
    file = tmp_path / "plant.npy"
    np.save(file, np.random.default_rng(41).standard_normal((24, 24)))
    (tmp_path / "states.txt").write_text("\n".join(f"level {i}" for i in range(24)), encoding="utf-8")
    return file


def test_the_plain_page_works_and_needs_nothing_from_outside(plant: Path, tmp_path: Path, chromium: str) -> None:
    notebook = workbench_notebook(plant, labels=plant.with_name("states.txt"), page=True)
    written = write_notebook(notebook, tmp_path, "plant_page")
    with page_server(written, tmp_path / "scratch") as address, chromium_page(chromium, 1280, 800) as (page, outside):
        faults: list[str] = []
        page.on("pageerror", lambda error: faults.append(str(error)))
        page.goto(address)
        page.get_by_text("Converged after").first.wait_for(timeout=60 * SECONDS)
        page.wait_for_function(ALL_DRAWN)
        assert page.locator(".sb-head").inner_text().startswith("plant: n = 24")
        page.wait_for_timeout(500)
        shot(page, "plain-page-1280")
        assert page.evaluate(FAULTS) == []

        before = [picture(page, panel) for panel in range(5)]
        step = int(_where(page).split()[1])
        page.locator(".sb-step .noUi-handle").focus()
        page.keyboard.press("ArrowLeft")
        page.wait_for_function(f"() => document.querySelector('.sb-where').innerText.startsWith('Step {step - 1} of')")
        page.wait_for_timeout(800)
        assert all(was != picture(page, panel) for panel, was in enumerate(before))

        page.get_by_label("Strategy").select_option("wilkinson")
        page.get_by_role("button", name="Run", exact=True).click()
        page.wait_for_function("() => document.querySelector('.sb-where').innerText.includes('single shift')")
        page.get_by_role("tab", name="Factors").click()
        page.get_by_text("Passed:").wait_for(timeout=60 * SECONDS)

        # larger than the 10 MB that the server would take by default, which counts after encoding as text
        np.save(tmp_path / "large.npy", np.triu(np.ones((1200, 1200))))
        page.get_by_role("tab", name="Open").click()
        with page.expect_file_chooser() as chooser:
            page.get_by_role("button", name="Upload").click()
        chooser.value.set_files(str(tmp_path / "large.npy"))
        page.locator(".sb-head").filter(has_text="large: n = 1200").wait_for(timeout=60 * SECONDS)

        # what Voilà names outside is stopped by the page's own policy before it is asked for
        assert outside == []
        assert faults == []


def test_the_plain_page_is_for_those_who_know_the_token(plant: Path, tmp_path: Path, chromium: str) -> None:
    written = write_notebook(workbench_notebook(plant, page=True), tmp_path, "plant_page")
    with page_server(written, tmp_path / "scratch") as address, chromium_page(chromium, 800, 600) as (page, _):
        page.goto(address.split("?")[0])
        assert page.locator(".sb-bench").count() == 0
        assert "plant" not in page.content()
        # and no file is handed out, whether in the folder of the notebook or outside
        for path in ("voila/files/plant.npy", "voila/files/plant_page.ipynb", "voila/files/../../etc/hostname"):
            answer = page.request.get(address.replace("/?", f"/{path}?"))
            assert answer.status in (403, 404), path


def _where(page: Any) -> str:
    return str(page.locator(".sb-where").inner_text())
