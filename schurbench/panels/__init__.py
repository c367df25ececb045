"""The panels: pure view functions, thin figures over them, and the `Workbench` that puts them on one page.

`views` turns a run and a cursor into small arrays and sentences and imports no widgets; `figures` and `side` show what
they are given; `workbench` holds the state; `serve` opens it in JupyterLab. Names load on first use.
"""

from __future__ import annotations

from typing import Any

from schurbench.errors import SchurbenchError

__all__ = ["Workbench"]


def __getattr__(name: str) -> Any:
    if name != "Workbench":
        raise AttributeError(f"module 'schurbench.panels' has no attribute {name!r}")
    try:
        import bqplot  # noqa: F401
        import ipywidgets  # noqa: F401
    except ModuleNotFoundError as missing:
        raise SchurbenchError(
            f"the workbench needs {missing.name}, which is not installed; run: pip install 'schurbench[workbench]'"
        ) from None
    from schurbench.panels.workbench import Workbench

    globals()["Workbench"] = Workbench
    return Workbench
