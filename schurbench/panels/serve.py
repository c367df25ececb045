"""Open the workbench: a notebook of one cell, and the server that shows it. Imports no widgets."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import threading
from importlib.util import find_spec
from pathlib import Path
from typing import Any
from urllib.parse import quote

from schurbench.errors import InputError, SchurbenchError
from schurbench.intake import load

__all__ = [
    "lab_command",
    "open_workbench",
    "page_command",
    "server_environment",
    "workbench_notebook",
    "write_notebook",
]

#: Largest message the page may send. A matrix of order 2000 is 32 MB, and uploads travel as text; the default of the
#: server, 10 MB, drops larger ones without a word.
MESSAGE_LIMIT = 512 << 20

#: Seconds a server may take to close its kernels after an interrupt before it is told again.
_PATIENCE = 5.0

#: What a plain page may load: nothing but what the server itself has. Voilà's pages name style sheets on another host;
#: the browser then asks for none of them.
_PAGE_POLICY = "default-src 'self' 'unsafe-inline' 'unsafe-eval' data: blob:; frame-ancestors 'self'"

_ANNOUNCEMENTS = "@jupyterlab/apputils-extension:announcements"


def workbench_notebook(
    file: Path | None = None, key: str | None = None, labels: Path | None = None, page: bool = False
) -> dict[str, Any]:
    """The notebook that shows the workbench on a file, or on the demonstration plant.

    Parameters
    ----------
    file : Path, optional
    key : str, optional
        Array in the file.
    labels : Path, optional
        Text file with the name of one state a line.
    page : bool
        For a plain page: without the words about running cells. Its cell ends when the first run has, because what
        changes while Voilà's page fetches the widgets never reaches it.

    Returns
    -------
    dict
        nbformat 4.5, without outputs. Paths and key appear in it as escaped Python literals.
    """
    if file is None:
        matrix, what = "sb.demo_matrix()", "the demonstration plant"
    else:
        given = {"key": key, "labels": labels}
        further = "".join(f", {name}={_literal(str(value))}" for name, value in given.items() if value)
        matrix, what = f"sb.load({_literal(str(file))}{further})", "your matrix"
    words = f"Run the cell below (Shift and Enter) for the workbench on {what}; after a restart of the kernel, again."
    markdown = {"cell_type": "markdown", "id": "words", "metadata": {}, "source": [words]}
    code = {
        "cell_type": "code",
        "execution_count": None,
        "id": "workbench",
        "metadata": {},
        "outputs": [],
        "source": [
            "import schurbench as sb\n",
            "\n",
            f"wb = sb.Workbench({matrix})\n",
            *(("wb.wait()\n",) if page else ()),
            "wb",
        ],
    }
    return {
        "cells": [code] if page else [markdown, code],
        "metadata": {
            "kernelspec": {"display_name": "Python 3 (ipykernel)", "language": "python", "name": "python3"},
            "language_info": {"name": "python"},
        },
        "nbformat": 4,
        "nbformat_minor": 5,
    }


def _literal(text: str) -> str:
    """A Python string literal in plain ASCII, whatever the text holds."""
    return ascii(text)


def write_notebook(notebook: dict[str, Any], folder: Path, stem: str) -> Path:
    """Write a notebook under a name that is free; one that holds the same already is used as it is.

    Raises
    ------
    OSError
        The folder cannot be written to.
    """
    text = json.dumps(notebook, indent=1, ensure_ascii=False) + "\n"
    for attempt in range(1, 1000):
        path = folder / (f"{stem}.ipynb" if attempt == 1 else f"{stem}-{attempt}.ipynb")
        try:
            with path.open("x", encoding="utf-8") as out:
                out.write(text)
            return path
        except FileExistsError:
            if path.is_file() and path.read_bytes() == text.encode("utf-8"):
                return path
    raise InputError(f"{folder} holds 1000 notebooks named {stem} already; remove some")


def lab_command(notebook: Path, *, browser: bool = True, extra: tuple[str, ...] = ()) -> list[str]:
    """The command that serves one notebook in JupyterLab: this machine only, with a token, asking nothing outside."""
    return [
        sys.executable,
        "-m",
        "jupyterlab",
        "--ServerApp.ip=127.0.0.1",
        f"--ServerApp.root_dir={notebook.parent}",
        f"--LabApp.default_url=/lab/tree/{quote(notebook.name)}",
        f"--ServerApp.tornado_settings={{'websocket_max_message_size': {MESSAGE_LIMIT}}}",
        "--LabApp.news_url=None",
        "--LabApp.check_for_updates_class=jupyterlab.NeverCheckForUpdate",
        "--LabApp.extension_manager=readonly",
        "--ServerApp.answer_yes=True",
        # in a container the user often is root; the server still listens to this machine only, with a token
        *(("--allow-root",) if getattr(os, "geteuid", lambda: 1)() == 0 else ()),
        *(() if browser else ("--no-browser",)),
        *extra,
    ]


def page_command(notebook: Path, *, browser: bool = True, extra: tuple[str, ...] = ()) -> list[str]:
    """The command that serves one notebook as a plain page through Voilà: this machine only, with a token."""
    return [
        sys.executable,
        "-m",
        "voila",
        str(notebook),
        "--Voila.ip=127.0.0.1",
        "--Voila.auto_token=True",
        "--VoilaConfiguration.show_tracebacks=True",  # a page has no other place to say what went wrong
        *(() if browser else ("--no-browser",)),
        *extra,
    ]


def server_environment(folder: Path) -> dict[str, str]:
    """The environment for `lab_command` and `page_command`.

    ``folder`` receives the settings that keep news banners off JupyterLab, and a plain page from asking outside.
    """
    page = {"websocket_max_message_size": MESSAGE_LIMIT, "headers": {"Content-Security-Policy": _PAGE_POLICY}}
    settings: dict[str, dict[str, Any]] = {
        "labconfig/page_config.json": {"disabledExtensions": {_ANNOUNCEMENTS: True}},
        "voila.json": {"Voila": {"tornado_settings": page}},
    }
    (folder / "labconfig").mkdir(parents=True, exist_ok=True)
    for name, content in settings.items():
        (folder / name).write_text(json.dumps(content), encoding="utf-8")
    paths = [str(folder), *filter(None, [os.environ.get("JUPYTER_CONFIG_PATH")])]
    return {**os.environ, "JUPYTER_CONFIG_PATH": os.pathsep.join(paths)}


def open_workbench(
    file: Path | None = None,
    *,
    key: str | None = None,
    labels: Path | None = None,
    page: bool = False,
    browser: bool = True,
) -> int:
    """Serve the workbench until the user stops the server.

    Parameters
    ----------
    file : Path, optional
        Matrix file; the demonstration plant without it.
    key : str, optional
        Array in the file.
    labels : Path, optional
        Text file with the name of one state a line.
    page : bool
        A plain page through Voilà instead of JupyterLab.
    browser : bool
        Whether to open a browser window on it.

    Returns
    -------
    int
        Exit code of the server.

    Raises
    ------
    InputError
        The file holds no matrix that can be loaded, or a key or labels are given without a file.
    SchurbenchError
        JupyterLab, or for a page Voilà, is not installed.
    """
    wanted = {"voila" if page else "jupyterlab": None, "ipywidgets": None, "bqplot": None}
    missing = [name for name in wanted if find_spec(name) is None]
    if missing:
        raise SchurbenchError(
            f"{' and '.join(missing)} not found; to open the workbench, run: "
            f"pip install 'schurbench[{'page' if page else 'workbench'}]'"
        )
    stem = "schurbench_demo"
    if file is not None:
        stem = f"{_plain_stem(load(file, key, labels).name)}_workbench"
        file, labels = Path(file).resolve(), None if labels is None else Path(labels).resolve()
    elif key is not None or labels is not None:
        raise InputError("an array or labels are named, but no matrix file; name the file they belong to")
    notebook = workbench_notebook(file, key, labels, page)
    if page:
        stem += "_page"
    with tempfile.TemporaryDirectory(prefix="schurbench-") as scratch:
        try:
            written = write_notebook(notebook, Path.cwd(), stem)
        except OSError:
            # a folder that cannot be written to is no reason not to work; the notebook goes with the server
            written = write_notebook(notebook, Path(scratch), stem)
        print(f"Workbench notebook: {written}. Stop the server with Ctrl+C.", file=sys.stderr)
        command = page_command(written, browser=browser) if page else lab_command(written, browser=browser)
        return _until_stopped(subprocess.Popen(command, env=server_environment(Path(scratch) / "settings")))


def _until_stopped(server: subprocess.Popen[bytes]) -> int:
    """Wait for the server; whoever stops this process stops the server with it."""
    main = threading.current_thread() is threading.main_thread()
    before = signal.signal(signal.SIGTERM, lambda *_: server.terminate()) if main else None
    try:
        while True:
            try:
                return server.wait()
            except KeyboardInterrupt:
                # From a terminal the server got the interrupt too and is closing its kernels; from elsewhere it did not.
                try:
                    return server.wait(_PATIENCE)
                except subprocess.TimeoutExpired:
                    server.terminate()
    finally:
        if main:
            signal.signal(signal.SIGTERM, before)


def _plain_stem(name: str) -> str:
    kept = "".join(c if c.isascii() and (c.isalnum() or c in "-_") else "_" for c in name).strip("_")
    return kept[:60] or "matrix"
