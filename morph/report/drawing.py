"""A drawing of a window of the plane, in mm with y up, written as SVG.

Shapes go in as millimetres and come out in screen pixels, so that letters and lines keep their size
whether the window is 20 mm or 200 mm wide. The same shapes give the same text. Everything that is
written as text is escaped here.
"""

from __future__ import annotations

from html import escape

import numpy as np

from morph.core.arrays import Floats

FONT = "system-ui, 'Segoe UI', 'Helvetica Neue', Arial, sans-serif"
INK = "#1c2430"
FAINT = "#8a94a0"
PAPER = "#ffffff"

Point = tuple[float, float]


def number(value: float) -> str:
    """Returns `value` with at most two decimals.

    >>> number(1.5), number(-0.001), number(3.0)
    ('1.5', '0', '3')
    """
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text in ("-0", "") else text


class Drawing:
    """An SVG drawing.

    Args:
        low_mm: lower left corner of the window. high_mm: its upper right corner.
        width_px: drawn width; the height follows from the window.
        ident: prefix of every id inside, unique on the page.
        title: what the drawing shows, read out by screen readers. description: the same at more length.
    """

    def __init__(
        self, low_mm: Point, high_mm: Point, width_px: float, ident: str, title: str, description: str = ""
    ) -> None:
        self.low_mm, self.high_mm, self.ident, self.width_px = low_mm, high_mm, ident, width_px
        self.px_per_mm = width_px / (high_mm[0] - low_mm[0])
        self.height_px = (high_mm[1] - low_mm[1]) * self.px_per_mm
        self._title, self._description = title, description
        self._definitions: list[str] = []
        self._parts: list[str] = []

    def mm(self, pixels: float) -> float:
        """Returns how many mm of the window `pixels` are."""
        return pixels / self.px_per_mm

    def xy(self, at: Point) -> tuple[str, str]:
        """Returns the pixel coordinates of a point in mm as text."""
        return (
            number((at[0] - self.low_mm[0]) * self.px_per_mm),
            number((self.high_mm[1] - at[1]) * self.px_per_mm),
        )

    def define(self, markup: str) -> None:
        """Adds a pattern, marker or clip path."""
        self._definitions.append(markup)

    def hatch(self, name: str, colour: str, spacing_px: float, angle_deg: float, width_px: float = 1.0) -> str:
        """Defines parallel lines and returns the paint that uses them."""
        step = number(spacing_px)
        self.define(
            f'<pattern id="{self.ident}-{name}" width="{step}" height="{step}" patternUnits="userSpaceOnUse" '
            f'patternTransform="rotate({number(angle_deg)})">'
            f'<line x1="0" y1="0" x2="0" y2="{step}" stroke="{colour}" stroke-width="{number(2 * width_px)}"/>'
            "</pattern>"
        )
        return f"url(#{self.ident}-{name})"

    def raw(self, markup: str) -> None:
        """Adds finished markup."""
        self._parts.append(markup)

    def path_data(self, points_mm: Floats, closed: bool = False) -> str:
        """Returns the path through `points_mm (k, 2)`."""
        return "M" + " ".join(",".join(self.xy((x, y))) for x, y in points_mm.tolist()) + ("Z" if closed else "")

    def shape(self, data: str, **style: str) -> None:
        """Adds a path; keywords are its presentation attributes with underscores for dashes."""
        written = " ".join(f'{key.replace("_", "-")}="{value}"' for key, value in style.items())
        self._parts.append(f'<path d="{data}" {written}/>')

    def line(self, a: Point, b: Point, colour: str, width_px: float, dash: str = "") -> None:
        """Adds a straight line, dashed by `dash` in pixels."""
        (x1, y1), (x2, y2) = self.xy(a), self.xy(b)
        dashed = f' stroke-dasharray="{dash}"' if dash else ""
        self._parts.append(
            f'<line x1="{x1}" y1="{y1}" x2="{x2}" y2="{y2}" stroke="{colour}" '
            f'stroke-width="{number(width_px)}"{dashed}/>'
        )

    def label(
        self,
        at: Point,
        words: str,
        *,
        size_px: float = 12.0,
        colour: str = INK,
        anchor: str = "middle",
        bold: bool = False,
    ) -> None:
        """Adds a line of text centred on its height at `at`, with a paper-coloured rim so that it reads over lines."""
        x, y = self.xy(at)
        weight = ' font-weight="600"' if bold else ""
        self._parts.append(
            f'<text x="{x}" y="{y}" dy="0.35em" font-size="{number(size_px)}" fill="{colour}" text-anchor="{anchor}" '
            f'stroke="{PAPER}" stroke-width="3" paint-order="stroke" stroke-linejoin="round"{weight}>'
            f"{escape(words)}</text>"
        )

    def scale_bar(self, at: Point, share: float = 0.25) -> None:
        """Adds a bar of a round length, at most `share` of the width, its left end at `at`, with its length."""
        wanted = share * (self.high_mm[0] - self.low_mm[0])
        base = float(10.0 ** np.floor(np.log10(wanted)))
        length = max(step * base for step in (1.0, 2.0, 5.0) if step * base <= wanted)
        (x, y), tick = at, self.mm(3.5)
        self.line((x, y), (x + length, y), INK, 1.6)
        for end in (x, x + length):
            self.line((end, y - tick), (end, y + tick), INK, 1.6)
        self.label((x + 0.5 * length, y + self.mm(10.0)), f"{length:g} mm", size_px=11.0)

    def svg(self) -> str:
        """Returns the drawing as an inline SVG element."""
        describe = f"<desc>{escape(self._description)}</desc>" if self._description else ""
        definitions = f"<defs>{''.join(self._definitions)}</defs>" if self._definitions else ""
        return (
            f'<svg role="img" aria-labelledby="{self.ident}-title" '
            f'width="{number(self.width_px)}" height="{number(self.height_px)}" '
            f'viewBox="0 0 {number(self.width_px)} {number(self.height_px)}" font-family="{escape(FONT)}">'
            f'<title id="{self.ident}-title">{escape(self._title)}</title>{describe}{definitions}'
            + "\n".join(self._parts)
            + "</svg>"
        )
