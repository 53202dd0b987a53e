"""Profile intervals of standard deviations, of totals and of ratios, of a nested fit.

All numbers of the model are written as absolute factors Λ (in units of σ̂) and log σ. The SD of an effect in
a direction v is |Λ'v|; scaling what Λ has along v gives it any length while everything else stays free, and
the same holds for a set of SDs whose squares add up to a total, and for a ratio of two such lengths. The
profile is the criterion minimised under that condition. Its interval holds the lengths whose profile lies
less than a quantile of χ² with one degree of freedom above the minimum; a lower limit is exactly zero where
the profile at zero stays below that.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import optimize, stats

from campaign.methods.batched_minimiser import IntArray, Objective, inverse_curvature, minimise_many
from campaign.methods.nested_criterion import eliminate, gradient_of, value_of
from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_factors import Factors
from campaign.methods.nested_fit import NestedModelFit
from campaign.methods.nested_limits import Limit, advance
from campaign.methods.nested_parameters import Layout, replicates_at_once

RESIDUAL = "residual"
"""Name under which the residual SD is asked for."""

_ROUGHLY, _EXACTLY = 3e-3, 1e-6
"""How far above its minimum the criterion may be at the first length, and at all others; what is left is
estimated and taken off."""


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

    @property
    def swapped(self) -> _Target:
        """The inverse ratio."""
        return _Target(self.over, self.parts)


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

    Raises
    ------
    ValueError
        A direction does not fit its effect, or the fit did not converge.
    """
    targets = [_Target((_part(fit, name, direction),)) for name, direction in requests]
    return _profile(fit, targets, level)


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


class _Set:
    """A set of SDs for each of M conditions: its length is the root of the sum of their squares."""

    def __init__(self, sizes: tuple[int, ...], sets: Sequence[tuple[tuple[int, FloatArray], ...]]) -> None:
        self.directions = [np.zeros((d, len(sets))) for d in sizes]
        self.residual = np.zeros(len(sets))
        self.empty = np.array([not parts for parts in sets])
        for m, parts in enumerate(sets):
            for number, direction in parts:
                if number < 0:
                    self.residual[m] = 1.0
                else:
                    self.directions[number][:, m] = direction

    def along(self, factors: Factors, which: IntArray) -> list[FloatArray]:
        """Λ'v of each effect, (d, k)."""
        return [
            np.einsum("ik,ijk->jk", v[:, which], f) for v, f in zip(self.directions, factors, strict=True)
        ]

    def length(self, along: list[FloatArray], sigma: FloatArray, which: IntArray) -> FloatArray:
        """Length of the set, (k,); one where the set is empty."""
        square = self.residual[which] * sigma**2 + sum((a**2).sum(axis=0) for a in along)
        return np.asarray(np.where(self.empty[which], 1.0, np.sqrt(square)))


@dataclass(frozen=True)
class _Scaled:
    """The state under the conditions: what the gradient and the slope of the profile need."""

    factors: Factors
    sigma: FloatArray
    along_top: list[FloatArray]
    along_low: list[FloatArray]
    top: FloatArray
    low: FloatArray
    scale: FloatArray


class _Profiles:
    """The criterion of M conditions on one model, as a function of free vectors (n + 1, M)."""

    def __init__(self, fit: NestedModelFit, targets: Sequence[_Target]) -> None:
        self.fit = fit
        self.layout: Layout = fit.layout
        self.degrees = fit.compression.rows - (fit.compression.fixed if fit.restricted else 0)
        self.top = _Set(self.layout.sizes, [target.parts for target in targets])
        self.low = _Set(self.layout.sizes, [target.over for target in targets])
        self.count = len(targets)
        self.estimate = self.length_of(np.append(fit.vector, 0.0)[:, None], np.arange(self.count))

    def length_of(self, vectors: FloatArray, which: IntArray) -> FloatArray:
        """Length (or ratio of lengths) of each condition's set at free vectors (n + 1, k or 1)."""
        factors = self.layout.factors(np.repeat(vectors[:-1], len(which) // vectors.shape[1], axis=1))
        sigma = np.exp(vectors[-1])
        top = self.top.length(self.top.along(factors, which), sigma, which)
        low = self.low.length(self.low.along(factors, which), sigma, which)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(top / low)

    def lifted_start(self) -> FloatArray:
        """The estimate (n + 1,) with diagonal elements of zero lifted: at zero their gradient vanishes."""
        out = np.append(self.fit.vector, 0.0)
        for n in self.layout.diagonal():
            least = 0.1 * self.noise_of(self.layout.places[n][0])
            out[n] = max(out[n], least)
        return out

    def noise_of(self, term: int) -> float:
        """SD, in units of σ, that the noise of one unit's readings gives its effect."""
        rows = self.fit.compression.term_rows[term]
        return float((rows.units * rows.copies / self.fit.compression.rows) ** 0.5)

    def objective(self, length: FloatArray, which: IntArray) -> Objective:
        """The criterion of the conditions `which` at the given lengths, for the minimiser."""
        return lambda vectors, some: self.evaluate(vectors, length[some], which[some])

    def evaluate(
        self, vectors: FloatArray, length: FloatArray, which: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """Criterion (k,); gradient and, as its last row, derivative with respect to the length (n + 2, k)."""
        chunk = replicates_at_once(self.fit.compression)
        parts = []
        for k in range(0, len(which), chunk):
            here = slice(k, k + chunk)
            state = self._scaled(vectors[:, here], length[here], which[here])
            value, outer, outer_sigma = self._criterion(state.factors, state.sigma)
            parts.append((value, self._to_free(vectors[:, here], which[here], state, outer, outer_sigma)))
        values, gradients = zip(*parts, strict=True)
        return np.concatenate(values), np.hstack(gradients)

    def free_gradient(self, vectors: FloatArray) -> FloatArray:
        """Gradient (n + 1, R) without any condition."""
        chunk = replicates_at_once(self.fit.compression)
        parts = []
        for k in range(0, vectors.shape[1], chunk):
            here = vectors[:, k : k + chunk]
            sigma = np.exp(here[-1])
            _, outer, outer_sigma = self._criterion(self.layout.factors(here[:-1]), sigma)
            parts.append(np.vstack([self.layout.vector(outer), outer_sigma * sigma]))
        return np.hstack(parts)

    def _scaled(self, vectors: FloatArray, length: FloatArray, which: IntArray) -> _Scaled:
        """Scale what the factors have along the directions so that the set has the given length."""
        factors, sigma = self.layout.factors(vectors[:-1]), np.exp(vectors[-1])
        along_top, along_low = self.top.along(factors, which), self.low.along(factors, which)
        top, low = self.top.length(along_top, sigma, which), self.low.length(along_low, sigma, which)
        scale = length * low / top
        for direction, along, factor in zip(self.top.directions, along_top, factors, strict=True):
            v = direction[:, which]
            factor += (scale - 1.0) * v[:, None] * along[None] / _square(v)
        sigma = sigma * np.where(self.top.residual[which] > 0.0, scale, 1.0)
        return _Scaled(factors, sigma, along_top, along_low, top, low, scale)

    def _criterion(self, factors: Factors, sigma: FloatArray) -> tuple[FloatArray, Factors, FloatArray]:
        """Criterion at absolute factors and σ/σ̂, with its derivatives with respect to both."""
        fit, compression = self.fit, self.fit.compression
        relative = [f / sigma for f in factors]
        variance = sigma**2 * fit.residual_variance
        eliminated = eliminate(compression, compression.products, relative)
        value = value_of(compression, eliminated, restricted=fit.restricted, residual_variance=variance)
        slope = gradient_of(
            compression, eliminated, value, relative, restricted=fit.restricted, residual_variance=variance
        ).factors
        own = 2.0 * (self.degrees - value.residual_square / variance)
        shared = sum((g * r).sum(axis=(0, 1)) for g, r in zip(slope, relative, strict=True))
        return value.criterion, [g / sigma for g in slope], np.asarray((own - shared) / sigma)

    def _to_free(
        self, vectors: FloatArray, which: IntArray, state: _Scaled, outer: Factors, outer_sigma: FloatArray
    ) -> FloatArray:
        """Gradient with respect to free vectors and, last, to the length, from that to scaled factors."""
        sigma = np.exp(vectors[-1])
        residual = self.top.residual[which]
        tops = [v[:, which] for v in self.top.directions]
        pulls = [np.einsum("ik,ijk->jk", v, g) / _square(v) for v, g in zip(tops, outer, strict=True)]
        pull = residual * outer_sigma * sigma
        for along, mine in zip(state.along_top, pulls, strict=True):
            pull = pull + (along * mine).sum(axis=0)
        inner = []
        rows = zip(tops, self.low.directions, outer, pulls, state.along_top, state.along_low, strict=True)
        for v, below, g, mine, along, along_low in rows:
            gain = (state.scale - 1.0) * mine - pull * state.scale / state.top**2 * along
            low_gain = pull * state.scale / state.low**2 * along_low
            inner.append(g + v[:, None] * gain[None] + below[:, which][:, None] * low_gain[None])
        own = outer_sigma * np.where(residual > 0.0, state.scale, 1.0)
        own = own - residual * pull * state.scale / state.top**2 * sigma
        own = own + self.low.residual[which] * pull * state.scale / state.low**2 * sigma
        return np.vstack([self.layout.vector(inner), own * sigma, pull * state.low / state.top])


def _square(direction: FloatArray) -> FloatArray:
    """|v|² of each condition (k,), one where there is no direction."""
    square = (direction**2).sum(axis=0)
    return np.asarray(np.where(square > 0.0, square, 1.0))


def _profile(fit: NestedModelFit, targets: Sequence[_Target], level: float) -> list[Interval]:
    if not targets:
        return []
    if not fit.converged:
        raise ValueError("no profile: the search found no certified minimum of the criterion")
    if not fit.model.terms:
        return [_residual_interval(fit, level)] * len(targets)
    profiles = _Profiles(fit, targets)
    infinite = [k for k, estimate in enumerate(profiles.estimate) if not np.isfinite(estimate)]
    if infinite:
        swapped = [target.swapped if k in infinite else target for k, target in enumerate(targets)]
        found = _profile(fit, swapped, level)
        return [
            Interval(np.inf, 1.0 / interval.high if interval.high else np.inf, np.inf)
            if k in infinite
            else interval
            for k, interval in enumerate(found)
        ]
    limits = _limits(profiles, float(np.sqrt(stats.chi2.ppf(level, 1))), _least(fit))
    sigma = float(np.sqrt(fit.residual_variance))
    units = [1.0 if target.over else sigma for target in targets]
    return [
        Interval(float(estimate) * unit, low.limit * unit, high.limit * unit)
        for estimate, unit, (low, high) in zip(profiles.estimate, units, limits, strict=True)
    ]


def _least(fit: NestedModelFit) -> float:
    """The criterion at the estimate, in scaled columns."""
    compression = fit.compression
    eliminated = eliminate(compression, compression.products, fit.layout.factors(fit.vector[:, None]))
    return float(value_of(compression, eliminated, restricted=fit.restricted).criterion[0])


def _residual_interval(fit: NestedModelFit, level: float) -> Interval:
    """The interval of σ without random effects, where the profile n (log σ² + σ̂²/σ²) is a closed form."""
    degrees = fit.compression.rows - (fit.compression.fixed if fit.restricted else 0)
    cutoff = float(stats.chi2.ppf(level, 1)) / degrees

    def excess(log_square: float) -> float:
        return log_square + float(np.exp(-log_square)) - 1.0 - cutoff

    low = optimize.brentq(excess, -np.log1p(cutoff) - 5.0, 0.0)
    high = optimize.brentq(excess, 0.0, cutoff + 5.0)
    sigma = float(np.sqrt(fit.residual_variance))
    return Interval(sigma, sigma * float(np.exp(low / 2.0)), sigma * float(np.exp(high / 2.0)))


def _limits(profiles: _Profiles, cutoff: float, least: float) -> list[tuple[Limit, Limit]]:
    """Both limits of every target, in units of σ̂ (ratios: none)."""
    pairs = _first_limits(profiles, cutoff)
    everyone = [limit for pair in pairs for limit in pair]
    longest = np.append(np.full(len(profiles.fit.vector), np.inf), 1.0)
    while True:
        running = [limit for limit in everyone if not limit.done]
        if not running:
            return pairs
        which = np.array([limit.member for limit in running])
        length = np.array([limit.length for limit in running])
        minima = minimise_many(
            profiles.objective(length, which),
            np.column_stack([limit.vector for limit in running]),
            np.stack([limit.inverse for limit in running], axis=2),
            tolerance=np.where([limit.roughly for limit in running], _ROUGHLY, _EXACTLY),
            longest=longest,
        )
        rise, slope = minima.value - minima.promise - least, minima.gradient[-1]
        for k, limit in enumerate(running):
            limit.vector, limit.inverse = minima.x[:, k], minima.inverse[:, :, k]
            root = float(np.sqrt(max(rise[k], 0.0)))
            advance(limit, root, float(slope[k]) / (2.0 * max(root, 1e-9)), cutoff)


def _first_limits(profiles: _Profiles, cutoff: float) -> list[tuple[Limit, Limit]]:
    """Where each limit is looked for first: where a parabola through the estimate would have it."""
    start = profiles.lifted_start()
    hessian = _hessian(profiles, start)
    inverse = inverse_curvature(hessian[:, :, None])[:, :, 0]
    lengths = profiles.length_of(start[:, None], np.arange(profiles.count))
    pairs = []
    for m, estimate in enumerate(profiles.estimate.tolist()):
        normal = _length_gradient(profiles, start, m)
        response = inverse @ normal
        spread = max(float(normal @ response), 1e-300)
        reach = cutoff * float(np.sqrt(2.0 * spread))
        tangent = inverse - np.outer(response, response) / spread
        lifted = float(lengths[m])
        base = max(estimate, lifted)
        for_zero = profiles.top.residual[m] == 0.0
        down = float(estimate * np.exp(-reach / estimate)) if estimate > 0.0 else 0.0
        if for_zero and down < 0.2 * estimate:
            down = 0.0
        up = float(base * np.exp(min(reach / base, 1.0)))
        pair = []
        for upper, length in ((False, down), (True, up)):
            moved = start + response / spread * float(np.clip(length - lifted, -0.5 * base, 0.5 * base))
            pair.append(Limit(m, upper, estimate, estimate, length, moved, tangent, for_zero, base))
        if estimate == 0.0:
            pair[0].limit = 0.0
        pairs.append((pair[0], pair[1]))
    return pairs


def _hessian(profiles: _Profiles, start: FloatArray) -> FloatArray:
    """Second derivatives without conditions, by differences of the gradient."""
    widths = 1e-4 * np.maximum(np.abs(start), 1e-2 * np.abs(start).max())
    widths[-1] = 1e-4
    places = np.column_stack([start, start[:, None] + np.diag(widths)])
    gradients = profiles.free_gradient(places)
    hessian = (gradients[:, 1:] - gradients[:, :1]) / widths
    return np.asarray((hessian + hessian.T) / 2.0)


def _length_gradient(profiles: _Profiles, start: FloatArray, m: int) -> FloatArray:
    """Derivative of a condition's length with respect to the free vector."""
    widths = 1e-6 * np.maximum(np.abs(start), 1e-2 * np.abs(start).max())
    widths[-1] = 1e-6
    ends = np.hstack([start[:, None] + np.diag(widths), start[:, None] - np.diag(widths)])
    lengths = profiles.length_of(ends, np.full(ends.shape[1], m))
    return np.asarray((lengths[: len(start)] - lengths[len(start) :]) / (2.0 * widths))
