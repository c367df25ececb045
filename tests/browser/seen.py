"""What can be seen of the workbench on a page, and pictures of it for people to look at."""

from __future__ import annotations

from pathlib import Path
from typing import Any

ROOT = Path(__file__).parent.parent.parent

#: Screenshots of test runs; ignored by git.
ARTIFACTS = ROOT / "artifacts"

#: A figure counts as drawn when a mark in it has size: a path with more than its starting point, or a picture.
DRAWN = """
() => Array.from(document.querySelectorAll('.sb-bench .bqplot')).map(figure => {
  const marks = Array.from(figure.querySelectorAll('.svg-figure path, .svg-figure image'));
  return marks.filter(mark => {
    const box = mark.getBoundingClientRect();
    if (mark.tagName === 'image') return (mark.href.baseVal || '').startsWith('blob:') && box.width > 20;
    return (mark.getAttribute('d') || '').length > 20 && box.width + box.height > 20;
  }).length;
})
"""

#: Text that its box cuts off, and panels that lie over each other.
FAULTS = """
() => {
  const faults = [];
  for (const node of document.querySelectorAll('.sb-bench .sb-say, .sb-bench .sb-title, .sb-bench .sb-where, .sb-bench button')) {
    if (node.offsetParent && (node.scrollWidth > node.clientWidth + 1 || node.scrollHeight > node.clientHeight + 3))
      faults.push('cut: ' + node.innerText);
  }
  const boxes = Array.from(document.querySelectorAll('.sb-bench .bqplot')).map(f => f.getBoundingClientRect());
  boxes.forEach((a, i) => boxes.slice(i + 1).forEach(b => {
    if (a.left < b.right - 1 && b.left < a.right - 1 && a.top < b.bottom - 1 && b.top < a.bottom - 1)
      faults.push('figures overlap');
  }));
  const bench = document.querySelector('.sb-bench').getBoundingClientRect();
  const side = document.querySelector('.sb-side').getBoundingClientRect();
  if (side.right > bench.right + 1) faults.push('side column leaves the page');
  return faults;
}
"""

#: Whether the track and all four panels are drawn.
ALL_DRAWN = f"() => ({DRAWN})().length === 5 && ({DRAWN})().every(n => n > 0)"


def picture(page: Any, panel: int) -> str:
    """What a figure shows: the data of its paths and the address of its picture."""
    return str(
        page.evaluate(
            """panel => Array.from(document.querySelectorAll('.sb-bench .bqplot')[panel]
                .querySelectorAll('.svg-figure path, .svg-figure image'))
                .map(mark => mark.getAttribute('d') || mark.href?.baseVal || '').join('|')""",
            panel,
        )
    )


def shot(page: Any, name: str) -> None:
    ARTIFACTS.mkdir(exist_ok=True)
    page.screenshot(path=ARTIFACTS / f"{name}.png")
