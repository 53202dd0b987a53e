"""Where to look next for a limit of a profile: the length at which its root reaches that of a quantile."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from campaign.methods.nested_design import FloatArray

_PRECISION = 2e-3
"""How near the profile's root must come to the quantile's before a last step ends the search."""


@dataclass
class Limit:
    """One limit while it is sought.

    `inside` and `outside` are lengths whose profile lies below and above the cutoff; `outside` is NaN as long
    as none is known. `first` is the estimate or, where that is zero, a small length. `vector` and `inverse`
    are the last minimum and the inverse second derivative there. `seen` is (root of the profile, its slope
    over log length, log length) where it was looked at last.
    """

    member: int
    upper: bool
    estimate: float
    inside: float
    length: float
    vector: FloatArray
    inverse: FloatArray
    zero_possible: bool
    first: float
    outside: float = float("nan")
    limit: float = float("nan")
    looks: int = 0
    seen: tuple[float, float, float] | None = None

    @property
    def roughly(self) -> bool:
        """Whether a rough minimum will do: the first length is a guess, and says where to look next."""
        return self.looks == 0 and self.length > 0.0

    @property
    def done(self) -> bool:
        """Whether it is found."""
        return not np.isnan(self.limit)


def advance(limit: Limit, root: float, slope: float, cutoff: float) -> None:
    """Take in the root of the profile at the current length and its slope; choose the next, or end."""
    length, roughly = limit.length, limit.roughly
    limit.looks += 1
    if length == 0.0 and root <= cutoff:
        limit.limit = 0.0
        return
    if roughly and abs(root - cutoff) < 15.0 * _PRECISION:
        limit.length = _where_straight(length, root, slope, cutoff)
        return
    if root <= cutoff:
        limit.inside = length
    else:
        limit.outside = length
    if root <= cutoff and not limit.upper and length < 1e-6 * limit.estimate:
        limit.limit = 0.0
        return
    straight = _where_straight(length, root, slope, cutoff)
    step = _where_curved(limit, root, slope, cutoff, straight)
    if _has_levelled_off(limit, root, slope, cutoff):
        limit.limit = np.inf
        return
    if not np.isnan(step) and _is_near(abs(root - cutoff), step, straight):
        limit.limit = step
    elif limit.looks > 40:
        limit.limit = np.inf if np.isnan(limit.outside) and limit.upper else length
    else:
        limit.length = _kept_between(limit, step)


def _is_near(short: float, curved: float, straight: float) -> bool:
    """Whether a last step ends the search: it is very short, or short and all but straight."""
    return short < _PRECISION or (short < 5.0 * _PRECISION and 1.0 - 5e-5 < curved / straight < 1.0 + 5e-5)


def _where_curved(limit: Limit, root: float, slope: float, cutoff: float, straight: float) -> float:
    """Length at which the root would reach the cutoff.

    Log length is taken as the cubic of the root that has its values and slopes at this and the last length;
    as `straight` where the cubic would bend far or there was no last length.
    """
    last, limit.seen = limit.seen, None
    if np.isnan(straight):
        return straight
    limit.seen = here = (root, slope * limit.length, float(np.log(limit.length)))
    if last is None or abs(root - last[0]) < 1e-4 or here[1] * last[1] <= 0.0:
        return straight
    width = root - last[0]
    chord, first, second = (here[2] - last[2]) / width, 1.0 / last[1], 1.0 / here[1]
    t = (cutoff - root) / width
    away = t * second + t**2 * (2.0 * second + first - 3.0 * chord) + t**3 * (first + second - 2.0 * chord)
    linear = t * second
    return float(limit.length * np.exp(away * width)) if 0.5 < away / linear < 2.0 else straight


def _where_straight(length: float, root: float, slope: float, cutoff: float) -> float:
    """Length at which the root would reach the cutoff, were it straight over log length."""
    if length == 0.0 or slope == 0.0 or root < 1e-6:
        return float("nan")
    return float(length * np.exp(np.clip((cutoff - root) / (slope * length), -30.0, 30.0)))


def _has_levelled_off(limit: Limit, root: float, slope: float, cutoff: float) -> bool:
    """Whether an upper limit lies beyond all lengths: far out, and the profile hardly rises any more.

    From an estimate of zero the root begins to rise with a power of the length: only where it rises by far
    less than in proportion has it levelled off.
    """
    far = limit.upper and np.isnan(limit.outside) and limit.length > 30.0 * limit.first
    rise = slope * limit.length
    return bool(far and cutoff - root > 3.0 * rise and rise <= 0.3 * root)


def _kept_between(limit: Limit, wanted: float) -> float:
    """The wanted length if it makes progress within what is known, else one that does."""
    inside, outside = limit.inside, limit.outside
    if np.isnan(outside):
        return _further(limit, wanted)
    low, high = min(inside, outside), max(inside, outside)
    if low < wanted < high and limit.looks < 12:
        return wanted
    return (low + high) / 2.0 if low == 0.0 else float(np.sqrt(low * high))


def _further(limit: Limit, wanted: float) -> float:
    """The wanted length, not too far from the last one; zero where a lower limit goes there."""
    length = limit.length
    if limit.upper:
        return min(wanted, 4.0 * length) if wanted > length else 2.0 * length
    if not wanted < length:
        wanted = 0.5 * length
    return 0.0 if wanted < 0.3 * limit.estimate and limit.zero_possible else max(wanted, 0.25 * length)
