"""A small writer of charts as SVG text: axes with readable ticks, bands, lines, markers, limits and events.

Colours are from Okabe and Ito's set (Color Universal Design, 2008), told apart by people with any kind of colour
vision; lines that must be told apart differ in their dashes too.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from html import escape

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

BLUE, VERMILION, GREEN, ORANGE, PURPLE, GREY = "#0072b2", "#d55e00", "#009e73", "#e69f00", "#cc79a7", "#666666"
SERIES = ((BLUE, ""), (VERMILION, "7 3"), (GREEN, "2 3"), (PURPLE, "9 3 2 3"))
"""Colour and dashes of the first, second ... line of a chart."""
WIDTH = 720
LEFT, RIGHT, TOP, BOTTOM = 62, 14, 18, 34
EVENT_LABEL_MAX = 28
EVENTS_MAX = 40
"""Events drawn in one chart; more would hide it."""


def ticks(low: float, high: float, *, wish: int = 5) -> list[float]:
    """Round numbers (1, 2 or 5 times a power of ten apart) inside low to high."""
    span = high - low
    if not (math.isfinite(span) and span > 0):
        return [low]
    power = 10 ** math.floor(math.log10(span / wish))
    step = min((power * factor for factor in (1, 2, 5, 10)), key=lambda size: abs(math.log(span / size / wish)))
    first = math.ceil(low / step - 1e-9)
    last = math.floor(high / step + 1e-9)
    return [round(number * step, 12) for number in range(first, last + 1)]


def tick_text(value: float, step: float) -> str:
    """The number with as many decimals as its step needs."""
    decimals = max(0, -math.floor(math.log10(step) + 1e-9)) if step > 0 else 0
    return f"{value if value else 0.0:.{min(decimals, 6)}f}"


def padded(low: float, high: float, *, zero: bool = False) -> tuple[float, float]:
    """A range with a little room at both ends, never of no length; with 0 inside where `zero`."""
    if not (math.isfinite(low) and math.isfinite(high)):
        return 0.0, 1.0
    if zero:
        low, high = min(low, 0.0), max(high, 0.0)
    if high - low < 1e-9 * max(1.0, abs(high)):
        room = max(0.5, abs(high) * 0.05)
        return low - room, high + room
    room = 0.06 * (high - low)
    return low - room, high + room


@dataclass(slots=True)
class Chart:
    """One chart: give its ranges, draw into it, and take its text. `height` is of the whole in px at 720 px width."""

    x_range: tuple[float, float]
    y_range: tuple[float, float]
    y_label: str
    x_label: str = ""
    height: int = 170
    title: str = ""
    _parts: list[str] = field(default_factory=list)
    _legend: list[tuple[str, str, str]] = field(default_factory=list)

    # ---- places --------------------------------------------------------------------------------------------------

    @property
    def _bottom(self) -> float:
        return self.height - (BOTTOM if self.x_label else 20)

    def x(self, value: Floats | float) -> Floats:
        """Where a value lies, px."""
        low, high = self.x_range
        found: Floats = LEFT + (np.asarray(value, dtype=float) - low) / (high - low) * (WIDTH - LEFT - RIGHT)
        return found

    def y(self, value: Floats | float) -> Floats:
        """Where a value lies, px; far outside ones are held near the edge."""
        low, high = self.y_range
        share = np.clip((np.asarray(value, dtype=float) - low) / (high - low), -0.5, 1.5)
        found: Floats = self._bottom - share * (self._bottom - TOP)
        return found

    # ---- what is drawn -------------------------------------------------------------------------------------------

    def line(self, xs: Floats, ys: Floats, *, colour: str = BLUE, dashes: str = "", width: float = 1.3) -> None:
        """A line, broken where a value is NaN."""
        path = _path(self.x(xs), self.y(ys), ys)
        dashed = f' stroke-dasharray="{dashes}"' if dashes else ""
        # round caps make a dot of a value that stands alone
        self._parts.append(
            f'<path d="{path}" fill="none" stroke="{colour}" stroke-width="{width:g}" stroke-linecap="round"{dashed}/>'
        )

    def band(self, xs: Floats, low: Floats, high: Floats, *, colour: str = BLUE) -> None:
        """The area between two lines, as one shape for each stretch without NaN."""
        for begin, end in _stretches(~(np.isnan(low) | np.isnan(high))):
            across = self.x(xs[begin:end])
            if end - begin == 1:
                across = np.array([across[0] - 0.4, across[0] + 0.4])
                tops, bottoms = np.repeat(self.y(high[begin:end]), 2), np.repeat(self.y(low[begin:end]), 2)
            else:
                tops, bottoms = self.y(high[begin:end]), self.y(low[begin:end])
            shape = _points(np.concatenate((across, across[::-1])), np.concatenate((tops, bottoms[::-1])))
            self._parts.append(
                f'<polygon points="{shape}" fill="{colour}" fill-opacity=".28" stroke="{colour}" stroke-opacity=".45" '
                'stroke-width=".5"/>'
            )

    def marks(self, xs: Sequence[float], ys: Sequence[float], *, colour: str, up: bool) -> None:
        """Triangles, pointing up and filled, or down and open."""
        for x, y in zip(self.x(np.array(xs)).tolist(), self.y(np.array(ys)).tolist(), strict=True):
            size = -4.5 if up else 4.5
            fill = colour if up else "#fff"
            self._parts.append(
                f'<path d="M{x - 4.5:.1f} {y - size * 0.6:.1f}h9l-4.5 {size * 1.7:.1f}z" fill="{fill}" '
                f'stroke="{colour}" stroke-width="1.2"/>'
            )

    def level(self, value: float, text: str, *, colour: str = VERMILION) -> None:
        """A limit: a dashed line right across with its name; nothing where it lies outside."""
        low, high = self.y_range
        if not low <= value <= high:
            return
        at = float(self.y(value))
        self._parts.append(
            f'<line x1="{LEFT}" x2="{WIDTH - RIGHT}" y1="{at:.1f}" y2="{at:.1f}" stroke="{colour}" '
            f'stroke-width="1" stroke-dasharray="5 3"/>'
            f'<text x="{WIDTH - RIGHT - 3}" y="{at - 3:.1f}" class="e" text-anchor="end">{escape(text)}</text>'
        )

    def event(self, value: float, text: str, *, colour: str = VERMILION, dashes: str = "") -> None:
        """A moment: a line from top to bottom with its name above it, where it hides nothing."""
        low, high = self.x_range
        if not low <= value <= high:
            return
        at = float(self.x(value))
        anchor, shift = ("end", -3) if at > WIDTH * 0.7 else ("start", 3)
        dashed = f' stroke-dasharray="{dashes}"' if dashes else ""
        self._parts.append(
            f'<line x1="{at:.1f}" x2="{at:.1f}" y1="{TOP}" y2="{self._bottom:.1f}" stroke="{colour}" '
            f'stroke-width="1.2"{dashed}/>'
            f'<text x="{at + shift:.1f}" y="{TOP - 6}" class="e" text-anchor="{anchor}">'
            f"{escape(text[:EVENT_LABEL_MAX])}</text>"
        )

    def name(self, text: str, *, colour: str, dashes: str = "") -> None:
        """An entry of the legend."""
        self._legend.append((text, colour, dashes))

    # ---- the whole -----------------------------------------------------------------------------------------------

    def text(self, alt: str) -> str:
        """The chart as an `svg` element; `alt` says in words what it shows."""
        height = self.height + (16 if self._legend else 0)
        inner = "".join((*self._axes(), *self._parts, *self._legend_parts()))
        return f'<svg viewBox="0 0 {WIDTH} {height}" role="img" aria-label="{escape(alt, quote=True)}">{inner}</svg>'

    def _axes(self) -> list[str]:
        bottom = self._bottom
        parts = []
        ys = ticks(*self.y_range, wish=max(3, self.height // 36))
        step = ys[1] - ys[0] if len(ys) > 1 else 1.0
        for value in ys:
            at = float(self.y(value))
            parts.append(f'<line x1="{LEFT}" x2="{WIDTH - RIGHT}" y1="{at:.1f}" y2="{at:.1f}" class="g"/>')
            parts.append(f'<text x="{LEFT - 6}" y="{at + 3.5:.1f}" text-anchor="end">{tick_text(value, step)}</text>')
        xs = ticks(*self.x_range, wish=8)
        step = xs[1] - xs[0] if len(xs) > 1 else 1.0
        for value in xs:
            at = float(self.x(value))
            parts.append(f'<line x1="{at:.1f}" x2="{at:.1f}" y1="{bottom:.1f}" y2="{bottom + 4:.1f}" class="a"/>')
            parts.append(
                f'<text x="{at:.1f}" y="{bottom + 15:.1f}" text-anchor="middle">{tick_text(value, step)}</text>'
            )
        parts.append(f'<path d="M{LEFT} {TOP}V{bottom:.1f}H{WIDTH - RIGHT}" class="a" fill="none"/>')
        middle = (TOP + bottom) / 2
        parts.append(
            f'<text x="13" y="{middle:.1f}" text-anchor="middle" transform="rotate(-90 13 {middle:.1f})" class="l">'
            f"{escape(self.y_label)}</text>"
        )
        if self.x_label:
            parts.append(
                f'<text x="{(LEFT + WIDTH - RIGHT) / 2:.0f}" y="{self.height - 4}" text-anchor="middle" class="l">'
                f"{escape(self.x_label)}</text>"
            )
        return parts

    def _legend_parts(self) -> list[str]:
        parts, at = [], LEFT
        for text, colour, dashes in self._legend:
            dashed = f' stroke-dasharray="{dashes}"' if dashes else ""
            y = self.height + 6
            parts.append(
                f'<line x1="{at}" x2="{at + 24}" y1="{y}" y2="{y}" stroke="{colour}" stroke-width="2"{dashed}/>'
                f'<text x="{at + 30}" y="{y + 4}">{escape(text)}</text>'
            )
            at += 44 + round(6.2 * len(text))
        return parts


def _stretches(known: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """The runs of True: begin and end of each."""
    edges = np.flatnonzero(np.diff(known.astype(np.int8), prepend=0, append=0))
    return list(zip(edges[0::2].tolist(), edges[1::2].tolist(), strict=True))


def _points(xs: Floats, ys: Floats) -> str:
    return " ".join(f"{x:.1f},{y:.1f}" for x, y in zip(xs.tolist(), ys.tolist(), strict=True))


def _path(xs: Floats, ys: Floats, values: Floats) -> str:
    pieces = []
    for begin, end in _stretches(~np.isnan(values)):
        points = " ".join(
            f"{x:.1f} {y:.1f}" for x, y in zip(xs[begin:end].tolist(), ys[begin:end].tolist(), strict=True)
        )
        pieces.append(f"M{points}" + ("h.1" if end - begin == 1 else ""))
    return "".join(pieces)
