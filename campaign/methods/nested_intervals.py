"""Profile intervals of standard deviations, of totals and of ratios, of a nested fit.

An SD of a random effect in a direction v is made a single parameter by turning the effect's coordinates so
that the first one is v'u: with a lower-triangular factor its SD is σ θ₁₁. All numbers of the model are then
written as absolute factors, of which a chosen set (one SD, or the SDs whose squares add up to a total) is
scaled to a given length while everything else is free. The profile is the criterion minimised under that
condition; its interval holds the values whose profile lies less than a quantile of χ² with one degree of
freedom above the minimum. A lower limit is exactly zero where the profile at zero stays below that.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

from campaign.methods.batched_algebra import product, semidefinite_cholesky, transposed_product
from campaign.methods.batched_minimiser import IntArray, Objective, inverse_curvature, minimise_many
from campaign.methods.nested_criterion import Factors, eliminate, gradient_of, value_of
from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_fit import NestedModelFit
from campaign.methods.nested_parameters import Layout, replicates_at_once

RESIDUAL = "residual"
"""Name under which the residual SD is asked for."""


@dataclass(frozen=True)
class Interval:
    """An estimate and its limits; an infinite upper limit where the data set none."""

    estimate: float
    low: float
    high: float


@dataclass(frozen=True)
class _Target:
    """What is profiled: the root of the sum of squares of `parts`, over that of `over` where given.

    Parts are (term number, direction in scaled columns); the number −1 stands for the residual.
    """

    parts: tuple[tuple[int, FloatArray], ...]
    over: tuple[tuple[int, FloatArray], ...] = ()


def profile_interval(
    fit: NestedModelFit, name: str, direction: FloatArray | Sequence[float] = (1.0,), level: float = 0.95
) -> Interval:
    """Profile interval of the SD of direction'·effect.

    Parameters
    ----------
    fit
        The fitted model.
    name
        A random effect, or 'residual' (whose direction is left out).
    direction
        (d,) weights in the user's columns: [1, x] gives the SD of the effect's line at x.
    level
        Coverage.

    References
    ----------
    Venzon & Moolgavkar (1988), Applied Statistics 37, 87: profile-likelihood intervals.
    """
    return profile_intervals(fit, [(name, direction)], level)[0]


def profile_intervals(
    fit: NestedModelFit,
    requests: Sequence[tuple[str, FloatArray | Sequence[float]]],
    level: float = 0.95,
) -> list[Interval]:
    """Profile intervals of many SDs at once.

    Parameters
    ----------
    fit
        The fitted model.
    requests
        (name, direction) each, as in :func:`profile_interval`.
    level
        Coverage.
    """
    return _profile(fit, [_Target((_part(fit, name, direction),)) for name, direction in requests], level)


def profile_total(
    fit: NestedModelFit, parts: Mapping[str, FloatArray | Sequence[float]], level: float = 0.95
) -> Interval:
    """Profile interval of the root of the sum of the variances of several components.

    Parameters
    ----------
    fit
        The fitted model.
    parts
        Random effect (or 'residual') → direction, as in :func:`profile_interval`.
    level
        Coverage.
    """
    return _profile(fit, [_Target(tuple(_part(fit, n, v) for n, v in parts.items()))], level)[0]


def profile_ratio(
    fit: NestedModelFit,
    name: str,
    direction: FloatArray | Sequence[float],
    over: Mapping[str, FloatArray | Sequence[float]],
    level: float = 0.95,
) -> Interval:
    """Profile interval of the SD of one component over the total SD of others.

    Parameters
    ----------
    fit
        The fitted model.
    name, direction
        The component above the line.
    over
        Random effect (or 'residual') → direction of the components below the line, not including `name`.
    level
        Coverage.
    """
    target = _Target((_part(fit, name, direction),), tuple(_part(fit, n, v) for n, v in over.items()))
    return _profile(fit, [target], level)[0]


def profile_share(
    fit: NestedModelFit,
    name: str,
    direction: FloatArray | Sequence[float],
    others: Mapping[str, FloatArray | Sequence[float]],
    level: float = 0.95,
) -> Interval:
    """Profile interval of a component's share of the variance of itself and `others` together.

    The share rises with the ratio of :func:`profile_ratio`, ρ²/(1 + ρ²), so that its limits are those of the
    ratio.
    """
    ratio = profile_ratio(fit, name, direction, others, level)
    return Interval(
        *(1.0 if np.isinf(r) else r * r / (1.0 + r * r) for r in (ratio.estimate, ratio.low, ratio.high))
    )


def _part(fit: NestedModelFit, name: str, direction: FloatArray | Sequence[float]) -> tuple[int, FloatArray]:
    if name == RESIDUAL:
        return -1, np.ones(1)
    number = fit.model.terms.index(fit.model.term(name))
    basis = fit.compression.columns.term_bases[number]
    vector = np.asarray(direction, dtype=float)
    if vector.shape != (len(basis),) or not vector.any():
        raise ValueError(f"the direction of '{name}' must be {len(basis)} numbers, not all zero: {direction}")
    return number, np.linalg.solve(basis.T, vector)


class _Profiles:
    """The criterion of M conditions on one model, as a function of free vectors (n + 1, M).

    A vector holds the turned absolute factors in units of σ̂ and log(σ/σ̂). `chosen` marks the entries that
    are scaled to the given length; where `above` is not negative, that entry is the given multiple of the
    length of `chosen`.
    """

    def __init__(self, fit: NestedModelFit, targets: Sequence[_Target]) -> None:
        self.fit = fit
        self.layout: Layout = fit.layout
        self.count = len(self.layout.places)
        self.degrees = fit.compression.rows - (fit.compression.fixed if fit.restricted else 0)
        members = len(targets)
        self.turn_back: Factors = [np.zeros((d, d, members)) for d in self.layout.sizes]
        self.chosen = np.zeros((self.count + 1, members))
        self.above = np.full(members, -1)
        self.start = np.zeros((self.count + 1, members))
        first = {t: n for n, (t, i, k) in enumerate(self.layout.places) if i == k == 0}
        for m, target in enumerate(targets):
            self._place(m, target, first)
        value = np.where(np.arange(self.count + 1)[:, None] == self.count, 1.0, self.start)
        self.estimate = np.sqrt((self.chosen * value**2).sum(axis=0))
        ratio = np.flatnonzero(self.above >= 0)
        with np.errstate(divide="ignore"):
            self.estimate[ratio] = np.abs(self.start[self.above[ratio], ratio]) / self.estimate[ratio]
        self.is_ratio = self.above >= 0

    def _place(self, m: int, target: _Target, first: dict[int, int]) -> None:
        lengths = {}
        theta = self.fit.layout.factors(self.fit.vector[:, None])
        for t, size in enumerate(self.layout.sizes):
            self.turn_back[t][:, :, m] = np.eye(size)
        for number, direction in (*target.parts, *target.over):
            if number >= 0:
                turn = _turn(direction)
                self.turn_back[number][:, :, m] = np.linalg.inv(turn)
                lengths[number] = turn
        turned = []
        for t, factor in enumerate(theta):
            turn = lengths.get(t, np.eye(len(factor)))
            covariance = turn @ factor[:, :, 0] @ factor[:, :, 0].T @ turn.T
            turned.append(semidefinite_cholesky(covariance, 1e-10)[:, :, None])
        self.start[: self.count, m] = self.layout.vector(turned)[:, 0]
        for number, _ in target.over or target.parts:
            self.chosen[first[number] if number >= 0 else self.count, m] = 1.0
        if target.over:
            self.above[m] = first[target.parts[0][0]]

    def lifted_start(self) -> FloatArray:
        """The estimate with diagonal elements of zero lifted: at zero their gradient vanishes."""
        out = self.start.copy()
        for n in self.layout.diagonal():
            t = self.layout.places[n][0]
            size = 0.05 * np.abs(out[self.layout.column_of(n)]).max(axis=0)
            least = np.maximum(size, 0.1 * self.noise_of(t))
            out[n] = np.where(np.abs(out[n]) < 1e-3 * least, least, out[n])
        return out

    def noise_of(self, term: int) -> float:
        """SD that an effect of unit scale must have to show, from the information of its units."""
        rows = self.fit.compression.term_rows[term]
        return float((self.fit.compression.rows / (rows.units * rows.copies)) ** -0.5)

    def effective(self, vectors: FloatArray, length: FloatArray, which: IntArray) -> FloatArray:
        """Absolute factors and σ after the condition, (n + 1, k)."""
        value = vectors.copy()
        value[-1] = np.exp(vectors[-1])
        chosen = self.chosen[:, which]
        norm = np.sqrt((chosen * value**2).sum(axis=0))
        ratio = self.is_ratio[which]
        out = np.where(ratio, value, value * (1.0 + chosen * (length / norm - 1.0)))
        out[self.above[which[ratio]], np.flatnonzero(ratio)] = (length * norm)[ratio]
        return np.asarray(out)

    def evaluate(
        self, vectors: FloatArray, length: FloatArray, which: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """Criterion (k,) and gradient (n + 1, k) under the condition."""
        chunk = replicates_at_once(self.fit.compression)
        parts = [
            self._evaluate(vectors[:, k : k + chunk], length[k : k + chunk], which[k : k + chunk])
            for k in range(0, len(which), chunk)
        ]
        return np.concatenate([a for a, _ in parts]), np.hstack([b for _, b in parts])

    def objective(self, length: FloatArray, which: IntArray) -> Objective:
        """The criterion of the conditions `which` at the given lengths, for the minimiser."""
        return lambda vectors, some: self.evaluate(vectors, length[some], which[some])

    def _evaluate(
        self, vectors: FloatArray, length: FloatArray, which: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        fit, compression = self.fit, self.fit.compression
        absolute = self.effective(vectors, length, which)
        sigma = absolute[-1]
        relative = absolute[:-1] / sigma
        back = [b[:, :, which] for b in self.turn_back]
        factors = [product(b, f) for b, f in zip(back, self.layout.factors(relative), strict=True)]
        if not factors:
            raise ValueError("a model without random effects has no profile")
        eliminated = eliminate(compression, compression.products, factors)
        variance = sigma**2 * fit.residual_variance
        value = value_of(compression, eliminated, restricted=fit.restricted, residual_variance=variance)
        gradient = gradient_of(
            compression, eliminated, value, factors, restricted=fit.restricted, residual_variance=variance
        )
        turned = [transposed_product(b, g) for b, g in zip(back, gradient.factors, strict=True)]
        slope = self.layout.vector(turned)
        outer = np.empty_like(vectors)
        outer[:-1] = slope / sigma
        own = 2.0 * (self.degrees - value.residual_square / variance)
        outer[-1] = (own - (slope * relative).sum(axis=0)) / sigma
        return value.criterion, self._to_free(vectors, length, which, outer)

    def _to_free(
        self, vectors: FloatArray, length: FloatArray, which: IntArray, outer: FloatArray
    ) -> FloatArray:
        """Gradient with respect to free vectors from that with respect to absolute factors."""
        value = vectors.copy()
        value[-1] = np.exp(vectors[-1])
        chosen = self.chosen[:, which]
        norm = np.sqrt((chosen * value**2).sum(axis=0))
        radial = (chosen * outer * value).sum(axis=0)
        scaled = outer + chosen * (outer * (length / norm - 1.0) - value * radial * length / norm**3)
        ratio = np.flatnonzero(self.is_ratio[which])
        if len(ratio):
            above = self.above[which[ratio]]
            pull = outer[above, ratio] * length[ratio] / norm[ratio]
            scaled[:, ratio] = outer[:, ratio] + chosen[:, ratio] * value[:, ratio] * pull
            scaled[above, ratio] = 0.0
        scaled[-1] *= value[-1]
        return np.asarray(scaled)


def _turn(direction: FloatArray) -> FloatArray:
    """Invertible (d, d) whose first row is `direction`, the others orthogonal to it with its length."""
    size = np.linalg.norm(direction)
    full = np.linalg.qr(np.column_stack([direction / size, np.eye(len(direction))]))[0][:, : len(direction)]
    turn = size * full.T
    turn[0] = direction
    return np.asarray(turn)


@dataclass
class _Sides:
    """Both limits of every target while they are sought; an entry a limit, lower ones first.

    `inside` and `outside` are lengths whose profile lies below and above the cutoff, with the root of the
    profile there; `outside` is NaN as long as none is known.
    """

    upper: FloatArray
    length: FloatArray
    inside: FloatArray
    inside_root: FloatArray
    outside: FloatArray
    outside_root: FloatArray
    done: np.ndarray[tuple[int], np.dtype[np.bool_]]
    limit: FloatArray


def _profile(fit: NestedModelFit, targets: Sequence[_Target], level: float) -> list[Interval]:
    if not targets:
        return []
    if not fit.model.terms:
        return [_residual_interval(fit, level)] * len(targets)
    profiles = _Profiles(fit, [*targets, *targets])
    estimates = profiles.estimate
    limits = _limits(profiles, float(np.sqrt(stats.chi2.ppf(level, 1))), _least(fit))
    unit = np.where(profiles.is_ratio, 1.0, np.sqrt(fit.residual_variance))
    scaled = limits * unit
    return [
        Interval(float(estimates[k] * unit[k]), float(scaled[k]), float(scaled[len(targets) + k]))
        for k in range(len(targets))
    ]


def _least(fit: NestedModelFit) -> float:
    """The criterion at the estimate, in scaled columns."""
    compression = fit.compression
    factors = fit.layout.factors(fit.vector[:, None])
    eliminated = eliminate(compression, compression.products, factors)
    return float(value_of(compression, eliminated, restricted=fit.restricted).criterion[0])


def _residual_interval(fit: NestedModelFit, level: float) -> Interval:
    """The interval of σ without random effects, where the profile n (log σ² + σ̂²/σ²) is a closed form."""
    degrees = fit.compression.rows - (fit.compression.fixed if fit.restricted else 0)
    cutoff = float(stats.chi2.ppf(level, 1)) / degrees

    def root(low: float, high: float) -> float:
        for _ in range(200):
            middle = (low + high) / 2.0
            above = middle - 1.0 - np.log(middle) > cutoff
            low, high = (middle, high) if above == (high <= 1.0) else (low, middle)
        return (low + high) / 2.0

    sigma = float(np.sqrt(fit.residual_variance))
    least, most = root(1e-12, 1.0), root(1.0, 100.0 + 100.0 * cutoff)
    return Interval(sigma, sigma / np.sqrt(most), sigma / np.sqrt(least))


def _limits(profiles: _Profiles, cutoff: float, least: float) -> FloatArray:
    """Both limits of every target, lower ones first, in units of σ̂ (ratios: none)."""
    members = len(profiles.estimate)
    half = members // 2
    vectors = profiles.lifted_start()
    inverse = _first_inverse(profiles, vectors)
    sides = _first_lengths(profiles, half)
    longest = np.append(np.full(profiles.count, np.inf), 1.0)
    for _ in range(60):
        which = np.flatnonzero(~sides.done)
        if not len(which):
            break
        minima = minimise_many(
            profiles.objective(sides.length[which], which),
            vectors[:, which],
            inverse[:, :, which],
            tolerance=1e-8,
            longest=longest,
        )
        vectors[:, which], inverse[:, :, which] = minima.x, minima.inverse
        roots = np.sqrt(np.maximum(minima.value - least, 0.0))
        for m, root in zip(which, roots, strict=True):
            _note(sides, int(m), float(root), cutoff, float(profiles.estimate[m]))
    return sides.limit


def _first_inverse(profiles: _Profiles, vectors: FloatArray) -> FloatArray:
    """Inverse second derivatives at the estimate, by differences of the gradient."""
    count, members = vectors.shape
    which = np.arange(members)
    length = np.where(profiles.estimate > 0.0, profiles.estimate, 0.1)
    length = np.where(np.isfinite(length), length, 1.0)
    _, centre = profiles.evaluate(vectors, length, which)
    hessian = np.empty((count, count, members))
    for n in range(count):
        width = 1e-4 * np.maximum(np.abs(vectors[n]), 1e-2 * np.abs(vectors).max(axis=0))
        moved = vectors.copy()
        moved[n] += width
        hessian[n] = (profiles.evaluate(moved, length, which)[1] - centre) / width
    return inverse_curvature((hessian + hessian.transpose(1, 0, 2)) / 2.0)


def _first_lengths(profiles: _Profiles, half: int) -> _Sides:
    """Where each limit is looked for first: lower ones at zero, upper ones two rough standard errors up."""
    members = 2 * half
    estimate = profiles.estimate
    upper = np.arange(members) >= half
    spread = np.array([_rough_spread(profiles, m) for m in range(members)])
    with_residual = (profiles.chosen[-1] > 0.0) & ~profiles.is_ratio
    noise = np.array([_rough_size(profiles, m) for m in range(members)])
    with np.errstate(invalid="ignore"):
        up = np.where(estimate > 0.0, np.maximum(estimate * np.exp(spread), 0.3 * noise), noise)
        down = np.where(with_residual, estimate * np.exp(-spread), 0.0)
    sides = _Sides(
        upper=upper.astype(float),
        length=np.where(upper, up, down),
        inside=estimate.copy(),
        inside_root=np.zeros(members),
        outside=np.full(members, np.nan),
        outside_root=np.full(members, np.nan),
        done=np.zeros(members, dtype=bool),
        limit=np.zeros(members),
    )
    infinite = ~np.isfinite(estimate)
    sides.done |= infinite | (~upper & (estimate == 0.0))
    sides.limit[infinite & upper] = np.inf
    return sides


def _rough_spread(profiles: _Profiles, m: int) -> float:
    """Two standard errors of the logarithm of an SD, from the number of units of its parts."""
    parts = np.flatnonzero(profiles.chosen[:, m])
    rows = profiles.fit.compression.term_rows
    units = [
        profiles.degrees if n == profiles.count else rows[profiles.layout.places[n][0]].units for n in parts
    ]
    return float(min(2.0 / np.sqrt(2.0 * max(min(units) - 1.0, 1.0)), 1.0))


def _rough_size(profiles: _Profiles, m: int) -> float:
    """Where to look for the upper limit of an SD whose estimate is zero or small, in units of σ̂."""
    if profiles.is_ratio[m]:
        return 0.3
    numbers = [profiles.layout.places[n][0] for n in np.flatnonzero(profiles.chosen[:-1, m])]
    turns = [np.linalg.inv(profiles.turn_back[t][:, :, m]) for t in numbers]
    scale = [np.linalg.norm(turn[0]) * profiles.noise_of(t) for t, turn in zip(numbers, turns, strict=True)]
    return float(max(scale, default=0.1))


def _note(sides: _Sides, m: int, root: float, cutoff: float, estimate: float) -> None:
    """Take in the profile at the length of limit m, and choose the next length or end."""
    length, upper = float(sides.length[m]), bool(sides.upper[m])
    if length == 0.0 and root <= cutoff:
        sides.limit[m], sides.done[m] = 0.0, True
        return
    if root <= cutoff:
        sides.inside[m], sides.inside_root[m] = length, root
    else:
        sides.outside[m], sides.outside_root[m] = length, root
    if abs(root - cutoff) < 1e-5:
        sides.limit[m], sides.done[m] = length, True
    elif np.isnan(sides.outside[m]):
        _go_further(sides, m, root, cutoff, estimate, upper)
    else:
        sides.length[m] = _between(sides, m, cutoff)
        width = abs(float(sides.outside[m] - sides.inside[m]))
        if width < 1e-9 * max(float(sides.length[m]), 1e-300):
            sides.limit[m], sides.done[m] = sides.length[m], True


def _go_further(sides: _Sides, m: int, root: float, cutoff: float, estimate: float, upper: bool) -> None:
    """Away from the estimate, by as much as a straight root of the profile over log length would need."""
    length = float(sides.length[m])
    if estimate > 0.0 and length != estimate:
        reach = np.log(length / estimate)
        wanted = reach * np.clip(1.05 * cutoff / max(root, 1e-6), 1.2, 3.0)
        sides.length[m] = estimate * np.exp(np.clip(wanted, -30.0, 30.0))
    else:
        sides.length[m] = length * float(np.clip(1.05 * np.sqrt(cutoff / max(root, 1e-6)), 1.2, 4.0))
    if upper and sides.length[m] > 1e8 * max(estimate, 1e-3):
        sides.limit[m], sides.done[m] = np.inf, True


def _between(sides: _Sides, m: int, cutoff: float) -> float:
    """The next length between an inside and an outside one: straight line of the root, kept off the ends."""
    inside, outside = float(sides.inside[m]), float(sides.outside[m])
    low, high = float(sides.inside_root[m]), float(sides.outside_root[m])
    part = float(np.clip((cutoff - low) / (high - low), 0.02, 0.98))
    if inside > 0.0 and outside > 0.0:
        return float(np.exp(np.log(inside) + part * (np.log(outside) - np.log(inside))))
    return inside + part * (outside - inside)
