"""Servers as ``schurbench open`` starts them, and a page of Chromium on them, for the browser tests."""

from __future__ import annotations

import contextlib
import os
import secrets
import signal
import socket
import subprocess
import time
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from schurbench.panels.serve import lab_command, page_command, server_environment

#: Software drawing, no background traffic.
CHROMIUM_ARGUMENTS = [
    "--no-sandbox",
    "--disable-dev-shm-usage",
    "--disable-gpu-compositing",
    "--use-gl=angle",
    "--use-angle=swiftshader",
    "--enable-unsafe-swiftshader",
    "--disable-background-networking",
    "--disable-component-update",
]

_NOTEBOOK_READY = """
() => {
  const app = window.jupyterapp;
  const panel = app && app.shell.currentWidget;
  const session = panel && panel.sessionContext && panel.sessionContext.session;
  return !!(session && session.kernel && session.kernel.connectionStatus === 'connected'
            && session.kernel.status === 'idle');
}
"""


@contextlib.contextmanager
def lab_server(notebook: Path, scratch: Path) -> Iterator[str]:
    """Serve a notebook in JupyterLab, on a port of its own; yields the address of the notebook."""
    port, token = _free_port(), secrets.token_hex(16)
    extra = (
        f"--ServerApp.port={port}",
        "--ServerApp.port_retries=0",
        f"--IdentityProvider.token={token}",
        "--LabApp.expose_app_in_browser=True",
    )
    base = f"http://127.0.0.1:{port}"
    command = lab_command(notebook, browser=False, extra=extra)
    with _serving(command, f"{base}/api/status?token={token}", notebook.parent, scratch):
        yield f"{base}/lab/tree/{notebook.name}?reset&token={token}"


@contextlib.contextmanager
def page_server(notebook: Path, scratch: Path) -> Iterator[str]:
    """Serve a notebook as a plain page, on a port of its own; yields the address of the page."""
    port, token = _free_port(), secrets.token_hex(16)
    extra = (f"--Voila.port={port}", "--Voila.port_retries=0", f"--Voila.token={token}")
    base = f"http://127.0.0.1:{port}"
    # the page itself would start a kernel for whoever asks, so readiness is read from a file that it needs
    ready = f"{base}/voila/static/voila.js?token={token}"
    with _serving(page_command(notebook, browser=False, extra=extra), ready, notebook.parent, scratch):
        yield f"{base}/?token={token}"


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextlib.contextmanager
def _serving(command: list[str], ready: str, folder: Path, scratch: Path) -> Iterator[None]:
    """Run a server in a folder until the block ends, which begins when it answers under ``ready``."""
    environment = server_environment(scratch / "settings") | {
        "JUPYTER_CONFIG_DIR": str(scratch / "config"),
        "JUPYTER_DATA_DIR": str(scratch / "data"),
        "JUPYTER_RUNTIME_DIR": str(scratch / "runtime"),
        "PYTHONUNBUFFERED": "1",
    }
    environment.pop("JUPYTER_TOKEN", None)
    with (scratch / "server.log").open("w", encoding="utf-8") as log:
        server = subprocess.Popen(
            command, env=environment, stdout=log, stderr=subprocess.STDOUT, cwd=folder, start_new_session=True
        )
        try:
            _wait_for(ready, server, scratch / "server.log")
            yield
        finally:
            server.send_signal(signal.SIGINT)
            try:
                server.wait(15)
            except subprocess.TimeoutExpired:
                os.killpg(server.pid, signal.SIGKILL)
                server.wait(15)


def _wait_for(address: str, server: subprocess.Popen[bytes], log: Path) -> None:
    until = time.monotonic() + 60.0
    while time.monotonic() < until:
        if server.poll() is not None:
            break
        with contextlib.suppress(OSError), urllib.request.urlopen(address, timeout=5) as answer:
            if answer.status == 200:
                return
        time.sleep(0.2)
    raise AssertionError("the server did not start:\n" + log.read_text(encoding="utf-8")[-2000:])


@contextlib.contextmanager
def chromium_page(chromium: str, width: int, height: int) -> Iterator[tuple[Any, list[str]]]:
    """A page that reaches this machine only, and the list of every address outside that it would have fetched.

    What the page's own policy stops never leaves the browser and is not listed.
    """
    from playwright.sync_api import sync_playwright

    outside: list[str] = []

    def refuse(route: Any) -> None:
        outside.append(route.request.url)
        route.abort()

    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=chromium, args=CHROMIUM_ARGUMENTS)
        try:
            page = browser.new_page(viewport={"width": width, "height": height})
            page.on("websocket", lambda socket: outside.append(socket.url) if _elsewhere(socket.url) else None)
            page.route(_elsewhere, refuse)
            yield page, outside
        finally:
            browser.close()


def _elsewhere(address: str) -> bool:
    return not address.startswith(("http://127.0.0.1:", "ws://127.0.0.1:", "data:", "blob:", "about:"))


def open_notebook(page: Any, address: str) -> None:
    """Go to a notebook, wait for its kernel, and make room for it."""
    page.goto(address)
    page.wait_for_function(_NOTEBOOK_READY, timeout=60_000)
    page.evaluate("() => window.jupyterapp.shell.collapseLeft()")


def run_all(page: Any) -> None:
    page.evaluate("() => window.jupyterapp.commands.execute('notebook:run-all-cells')")


def set_theme(page: Any, theme: str) -> None:
    page.evaluate("name => window.jupyterapp.commands.execute('apputils:change-theme', {theme: name})", theme)
    page.wait_for_function("() => document.body.dataset.jpThemeName !== undefined")
