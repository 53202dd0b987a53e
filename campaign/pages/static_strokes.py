"""Paths of static pictures: whole tenths of a pixel, steps from point to point, shapes of markers.

Every coordinate is a whole number of tenths of a pixel; the picture's ``viewBox`` is ten times its size. A
path says where it begins and then only how far each next point lies away, which is shorter than saying where.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

TENTHS = 10
"""Coordinates of a picture per pixel."""

_FLAT = 5.0
"""How far, in tenths of a pixel, a point may lie off its neighbours' chord and be left out of a curve."""
_FLAT_EDGE = 10.0
"""The same for the edge of an area that is seen through."""
_PASSES = 6


def tenths(pixels: float) -> str:
    """Return a length in pixels as a whole number of tenths."""
    return str(round(TENTHS * pixels))


def number(value: float) -> str:
    """Return a number with at most one decimal."""
    text = f"{value:.1f}".removesuffix(".0")
    return "0" if text == "-0" else text


def steps(across: Sequence[int], upright: Sequence[int]) -> str:
    """Return ``"3-4 5 6"``: pairs of numbers, a minus sign serving as a separator."""
    flat: list[int] = [0] * (2 * len(across))
    flat[::2], flat[1::2] = across, upright
    return " ".join(map(str, flat)).replace(" -", "-")


def curve(x: Floats, y: Floats, shape: str = "linear") -> str:
    """Return the path through points in pixels; one that is not a number breaks it.

    Points that lie within half a pixel off the chord of their neighbours are left out. ``shape="hv"`` goes
    across first and then up or down.
    """
    return "".join(_unbroken(*run, shape) for run in _runs(x, y))


def outline(x: Floats, y: Floats) -> str:
    """Return the closed path through points in pixels; those that are not numbers are passed over."""
    path = "".join(_unbroken(*run, "linear", _FLAT_EDGE) for run in _runs(x, y))
    return f"{path}z" if path else ""


def segments(x0: Floats, y0: Floats, x1: Floats, y1: Floats) -> str:
    """Return separate straight lines, those with an end that is not a number left out."""
    ends = np.column_stack([x0, y0, x1, y1])
    whole = np.rint(TENTHS * ends[np.isfinite(ends).all(axis=1)]).astype(int).tolist()
    return "".join(_segment(*four) for four in whole)


def segment(x0: float, y0: float, x1: float, y1: float) -> str:
    """Return one straight line between two places in pixels."""
    return _segment(*(round(TENTHS * v) for v in (x0, y0, x1, y1)))


def rectangle(left: float, right: float, top: float, bottom: float) -> str:
    """Return the outline of a rectangle in pixels."""
    x, y = round(TENTHS * left), round(TENTHS * top)
    width, height = round(TENTHS * right) - x, round(TENTHS * bottom) - y
    return f"M{x} {y}h{width}v{height}h{-width}z"


def markers(symbol: str, x: Floats, y: Floats, size: float) -> str:
    """Return the outlines of one kind of marker around points in pixels; all are one path.

    Parameters
    ----------
    symbol
        The plot library's name of it.
    size
        Its size in pixels.
    """
    seen = np.isfinite(x) & np.isfinite(y)
    if not seen.any():
        return ""
    across, upright = np.rint(TENTHS * x[seen]).astype(int), np.rint(TENTHS * y[seen]).astype(int)
    shape = _OUTLINES.get(symbol.removesuffix("-open"), _circle)(TENTHS * size / 2)
    if symbol in CAPS:
        shape = _DOT
    first = f"M{across[0] + shape.begin[0]} {upright[0] + shape.begin[1]}{shape.path}"
    right = across[1:] - across[:-1] + (shape.begin[0] - shape.end[0])
    down = upright[1:] - upright[:-1] + (shape.begin[1] - shape.end[1])
    pairs = zip(right.tolist(), down.tolist(), strict=True)
    return (first + "".join(f"m{dx} {dy}{shape.path}" for dx, dy in pairs)).replace(" -", "-")


def _runs(x: Floats, y: Floats) -> list[tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]]:
    """Return the unbroken runs of points, in whole tenths."""
    seen = np.isfinite(x) & np.isfinite(y)
    if seen.all():
        pieces = [slice(0, len(x))] if len(x) else []
    else:
        edges = np.flatnonzero(np.diff(np.concatenate([[False], seen, [False]]).astype(int)))
        pieces = [slice(a, b) for a, b in edges.reshape(-1, 2).tolist()]
    return [
        (np.rint(TENTHS * x[piece]).astype(np.int64), np.rint(TENTHS * y[piece]).astype(np.int64))
        for piece in pieces
    ]


def _unbroken(x: npt.NDArray[np.int64], y: npt.NDArray[np.int64], shape: str, flat: float = _FLAT) -> str:
    if shape == "hv":
        pairs = zip((x[1:] - x[:-1]).tolist(), (y[1:] - y[:-1]).tolist(), strict=True)
        return f"M{x[0]} {y[0]}" + "".join(f"h{dx}v{dy}" for dx, dy in pairs)
    x, y = _without_flat_points(x, y, flat)
    if len(x) == 1:
        return f"M{x[0]} {y[0]}h0"
    return f"M{x[0]} {y[0]}l" + steps((x[1:] - x[:-1]).tolist(), (y[1:] - y[:-1]).tolist())


def _without_flat_points(x: Any, y: Any, reach: float) -> tuple[Any, Any]:
    """Leave out points on the chord of their neighbours, every other one at a time."""
    for turn in range(_PASSES):
        if len(x) < 3:
            break
        chord_x, chord_y = x[2:] - x[:-2], y[2:] - y[:-2]
        step_x, step_y = x[1:-1] - x[:-2], y[1:-1] - y[:-2]
        square = chord_x**2 + chord_y**2
        along = step_x * chord_x + step_y * chord_y
        off = np.abs(step_x * chord_y - step_y * chord_x)
        flat = (off <= reach * np.sqrt(square)) & (along >= 0) & (along <= square)
        if not flat.any():
            break
        flat[(turn % 2) :: 2] = False
        if not flat.any():
            continue
        kept = np.concatenate([[True], ~flat, [True]])
        x, y = x[kept], y[kept]
    return x, y


def _segment(x0: int, y0: int, x1: int, y1: int) -> str:
    """Return a straight piece of a path, by its one coordinate where it is level or upright."""
    if y0 == y1:
        return f"M{x0} {y0}H{x1}"
    return f"M{x0} {y0}V{y1}" if x0 == x1 else f"M{x0} {y0}L{x1} {y1}"


@dataclass(frozen=True)
class Outline:
    """A marker's shape in tenths of a pixel: where its path begins and ends, seen from its place."""

    begin: tuple[int, int]
    path: str
    end: tuple[int, int]


def _circle(radius: float) -> Outline:
    """A whole turn but for a tenth of a pixel, which closing the path adds: one arc instead of two."""
    r = round(radius)
    return Outline((-r, 0), f"a{r} {r} 0 1 1 0 1z", (-r, 0))


def _square(radius: float) -> Outline:
    half = round(0.9 * radius)
    return Outline((-half, -half), f"h{2 * half}v{2 * half}h-{2 * half}z", (-half, -half))


def _diamond(radius: float) -> Outline:
    h = round(1.25 * radius)
    return Outline((0, -h), f"l{h} {h}-{h} {h}-{h}-{h}z", (0, -h))


def _triangle(radius: float) -> Outline:
    height, half, rise = round(1.15 * radius), round(1.035 * radius), round(1.955 * radius)
    return Outline((0, -height), f"l{half} {rise}h-{2 * half}z", (0, -height))


def _triangle_down(radius: float) -> Outline:
    height, half, rise = round(1.15 * radius), round(1.035 * radius), round(1.955 * radius)
    return Outline((0, height), f"l{half}-{rise}h-{2 * half}z", (0, height))


def _saltire(radius: float) -> Outline:
    r = round(radius)
    return Outline((-r, -r), f"l{2 * r} {2 * r}m-{2 * r} 0l{2 * r}-{2 * r}", (r, -r))


def _cross(radius: float) -> Outline:
    r = round(radius)
    return Outline((-r, 0), f"h{2 * r}m-{r}-{r}v{2 * r}", (0, r))


def _upright_tick(radius: float) -> Outline:
    r = round(radius)
    return Outline((0, -r), f"v{2 * r}", (0, r))


def _level_tick(radius: float) -> Outline:
    r = round(radius)
    return Outline((-r, 0), f"h{2 * r}", (r, 0))


_DOT = Outline((0, 0), "h0", (0, 0))
CAPS: dict[str, tuple[str, float]] = {"circle": ("round", 1.0), "square": ("square", 0.9)}
"""Markers that are caps of lines without length: the cap, and its width as a share of the size."""
STROKES = frozenset({"x", "cross", "line-ns", "line-ew"})
"""Markers that are strokes, not areas."""
_OUTLINES: dict[str, Callable[[float], Outline]] = {
    "circle": _circle,
    "square": _square,
    "diamond": _diamond,
    "triangle-up": _triangle,
    "triangle-down": _triangle_down,
    "x": _saltire,
    "cross": _cross,
    "line-ns": _upright_tick,
    "line-ew": _level_tick,
}
