"""Files and arrays become a `WorkingMatrix`; the demonstration plant is built here too.

`load` dispatches, one module reads each family of formats (`numpy_files`, `market`, `matlab`, `text`), and everything
they find passes the same rules (`checks`, `limits`) on its way in. Readers decide nothing about types, shapes or
finiteness.
"""

from __future__ import annotations

from schurbench.intake.demo import DEMO_STORY, demo_matrix
from schurbench.intake.load import load
from schurbench.intake.matrix import WorkingMatrix

__all__ = ["DEMO_STORY", "WorkingMatrix", "demo_matrix", "load"]
