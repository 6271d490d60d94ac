"""Pictures as SVG text, drawn by hand: a title and a description for readers who cannot see them, ink for both papers.

Three plain charts need rectangles, lines and words. A plotting library would be a large dependency for them, writes
outlines of letters instead of words, and knows nothing of a reader's dark page; what is written here can be read and
compared line by line.
"""

from __future__ import annotations

from html import escape
from pathlib import Path

# Okabe and Ito's colours, told apart by colour-blind readers; a lighter ink stands in on dark paper.
COLOURS = ("#0072b2", "#e69f00", "#009e73", "#cc79a7", "#56b4e9", "#d55e00", "#999999")
STYLE = """
  svg { font: 13px system-ui, sans-serif; }
  .paper { fill: #ffffff; } .ink { fill: #1b1f24; } .faint { fill: #57606a; }
  .rule { stroke: #d0d7de; } .edge { stroke: #1b1f24; fill: none; }
  .head { font-weight: 600; }
  @media (prefers-color-scheme: dark) {
    .paper { fill: #0d1117; } .ink { fill: #e6edf3; } .faint { fill: #9198a1; }
    .rule { stroke: #30363d; } .edge { stroke: #e6edf3; }
  }
"""


class Picture:
    """Shapes in the order they are drawn, later ones on top."""

    def __init__(self, width: float, title: str, description: str) -> None:
        self.width = width
        self.height = 0.0
        self.title = title
        self.description = description
        self._shapes: list[str] = []

    def text(self, x: float, y: float, words: str, *, kind: str = "ink", anchor: str = "start") -> None:
        """Words whose baseline begins (or ends, or has its middle) at a point."""
        self._reach(y + 8)
        self._shapes.append(
            f'<text class="{kind}" x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}">{escape(words)}</text>'
        )

    def bar(self, x: float, y: float, width: float, height: float, colour: int, words: str) -> None:
        """A filled rectangle; `words` are shown to who points at it and read to who cannot see it."""
        self._reach(y + height)
        fill = COLOURS[colour % len(COLOURS)]
        self._shapes.append(
            f'<rect x="{x:.1f}" y="{y:.1f}" width="{max(0.0, width):.1f}" height="{height:.1f}" fill="{fill}">'
            f"<title>{escape(words)}</title></rect>"
        )

    def frame(self, x: float, y: float, width: float, height: float) -> None:
        """An empty rectangle."""
        self._reach(y + height)
        self._shapes.append(
            f'<rect class="edge" x="{x:.1f}" y="{y:.1f}" width="{max(0.0, width):.1f}" height="{height:.1f}"/>'
        )

    def line(self, x1: float, y1: float, x2: float, y2: float) -> None:
        """A thin rule."""
        self._reach(max(y1, y2))
        self._shapes.append(f'<line class="rule" x1="{x1:.1f}" y1="{y1:.1f}" x2="{x2:.1f}" y2="{y2:.1f}"/>')

    def curve(self, points: list[tuple[float, float]], colour: int) -> None:
        """A line through points, each marked."""
        ink = COLOURS[colour % len(COLOURS)]
        joined = " ".join(f"{x:.1f},{y:.1f}" for x, y in points)
        self._shapes.append(f'<polyline points="{joined}" fill="none" stroke="{ink}" stroke-width="2"/>')
        self._shapes += [f'<circle cx="{x:.1f}" cy="{y:.1f}" r="4" fill="{ink}"/>' for x, y in points]
        for _, y in points:
            self._reach(y)

    def _reach(self, y: float) -> None:
        self.height = max(self.height, y)

    def svg(self) -> str:
        """The picture as text."""
        width, height = self.width, self.height + 12
        return "\n".join(
            [
                f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:.0f} {height:.0f}" width="{width:.0f}"'
                f' height="{height:.0f}" role="img" aria-labelledby="title description">',
                f'<title id="title">{escape(self.title)}</title>',
                f'<desc id="description">{escape(self.description)}</desc>',
                f"<style>{STYLE}</style>",
                f'<rect class="paper" width="{width:.0f}" height="{height:.0f}"/>',
                *self._shapes,
                "</svg>",
                "",
            ]
        )

    def save(self, path: Path) -> None:
        path.write_text(self.svg())


def decades(low: float, high: float) -> list[float]:
    """Round figures for a logarithmic axis that holds both ends: 1, 2, 5, 10, 20, …; at least two."""
    steps = [mantissa * 10.0**power for power in range(-4, 7) for mantissa in (1, 2, 5)]
    first = max(index for index, step in enumerate(steps) if step <= low)
    last = min(index for index, step in enumerate(steps) if step >= high)
    return steps[first : max(last, first + 1) + 1]
