"""Make the picture of the workbench that README shows: ``python -m tests.browser.pictures``.

It is taken of the notebook in this repository, in Chromium, at 1280 by 800. Look at it before you commit it.
"""

from __future__ import annotations

import shutil
import sys
import tempfile
from pathlib import Path

from tests.browser.lab import chromium_page, lab_server, open_notebook, run_all, set_theme
from tests.browser.seen import ALL_DRAWN, FAULTS, ROOT
from tests.conftest import find_chromium

PICTURE = ROOT / "notebooks" / "workbench.png"


def main() -> int:
    chromium = find_chromium()
    if chromium is None:
        print("no chromium is on the path; install it first", file=sys.stderr)
        return 2
    PICTURE.parent.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory() as place:
        notebook = Path(shutil.copy(ROOT / "notebooks" / "workbench.ipynb", place))
        with (
            lab_server(notebook, Path(place) / "scratch") as address,
            chromium_page(chromium, 1280, 800) as (page, _),
        ):
            open_notebook(page, address)
            run_all(page)
            page.get_by_text("Converged after").first.wait_for()
            page.locator(".sb-finding").first.wait_for()
            page.wait_for_function(ALL_DRAWN)
            set_theme(page, "JupyterLab Light")
            page.wait_for_timeout(1500)
            page.locator(".sb-bench").evaluate("bench => bench.scrollIntoView()")
            faults = page.evaluate(FAULTS)
            if faults:
                print("; ".join(faults), file=sys.stderr)
                return 1
            page.screenshot(path=PICTURE)
    print(f"{PICTURE.relative_to(ROOT)}: {PICTURE.stat().st_size // 1024} kB")
    return 0


if __name__ == "__main__":
    sys.exit(main())
