"""Tests of an adjusted network: whether the covariance of its lengths holds, and whether one edge is bad.

With v the residuals, P the inverse covariance of the lengths and Q_vv that of the residuals, an error in edge
i alone is estimated by −(P v)ᵢ / (P Q_vv P)ᵢᵢ, and (P v)ᵢ / √(P Q_vv P)ᵢᵢ is its test value w (W. Baarda, A
testing procedure for use in geodetic networks, 1968); for independent lengths it is the residual over its SD.
τ is the same with σ0 estimated (A. J. Pope, The statistics of residuals and the detection of outliers, NOAA
NOS 65 NGS 1, 1976). Both from memory; checked against published networks.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy import stats

from campaign.methods.distance_network import AdjustedNetwork

FloatArray = npt.NDArray[np.float64]

RISK = 0.05
"""Of each test, over all edges of a network."""

ALIKE = 0.9
"""Edges whose test values are correlated beyond this are given as a group."""

INDISTINCT = float(stats.chi2.ppf(0.99, 1))
"""Edges whose error alone would explain the network almost as well, by less than this in χ², are a group."""

NO_TEST, NO_BLUNDER = "no test: just determined", "none found"
DETECTED, ONE_EDGE, GROUP = "detected, not located", "one edge", "one edge of a group"


@dataclass(frozen=True)
class GrossError:
    """What is said of one bad edge.

    Attributes
    ----------
    verdict
        :data:`NO_TEST`, :data:`NO_BLUNDER`, :data:`DETECTED`, :data:`ONE_EDGE` or :data:`GROUP`.
    edges
        Numbers of the edges named, most suspect first; empty where none is.
    error, expanded_uncertainty
        Estimated error of the most suspect edge (too long is positive), and the 95 % reach; NaN where none is
        named.
    """

    verdict: str
    edges: tuple[int, ...] = ()
    error: float = float("nan")
    expanded_uncertainty: float = float("nan")


@dataclass(frozen=True)
class NetworkTest:
    """Tests of one adjusted network of E edges.

    Attributes
    ----------
    degrees_of_freedom, chi_square, chi_square_limit, p
        Global test against the known covariance (upper tail, 5 %); NaN without redundancy.
    sigma0
        Estimated SD of unit weight; NaN without redundancy.
    redundancy
        Shape (E,): share of an error of each length that shows in its residual; they add up to the degrees
        of freedom, and lie from 0 to 1 where lengths are independent.
    standardised, tau
        Shape (E,): w with the known covariance, and τ; NaN where an edge is not checked by any other.
    standardised_limit, tau_limit
        5 % over all edges.
    correlations
        Shape (E, E), between the test values.
    gross_error
        What follows.
    """

    degrees_of_freedom: int
    chi_square: float
    chi_square_limit: float
    p: float
    sigma0: float
    redundancy: FloatArray
    standardised: FloatArray
    tau: FloatArray
    standardised_limit: float
    tau_limit: float
    correlations: FloatArray
    gross_error: GrossError


def tau_quantile(degrees_of_freedom: int, edges: int, risk: float = RISK) -> float:
    """Return Pope's limit of τ over *edges* tests at *risk* together; NaN below redundancy 2."""
    if degrees_of_freedom < 2:
        return float("nan")
    t = float(stats.t.ppf(1.0 - risk / (2.0 * edges), degrees_of_freedom - 1))
    return float(np.sqrt(degrees_of_freedom) * t / np.sqrt(degrees_of_freedom - 1 + t**2))


def network_tests(network: AdjustedNetwork, covariance: FloatArray) -> NetworkTest:
    """Test an adjusted network against the known covariance of its lengths.

    Parameters
    ----------
    network
        From :func:`campaign.methods.distance_network.adjust_network`.
    covariance
        Shape (E, E), of the given lengths.

    Notes
    -----
    One edge is named only from redundancy 2 on (with one, all w are equal but for sign and τ = ±1), and only
    where its error alone explains the failed global test: w beyond its limit and what remains no longer
    failing, or τ beyond its limit (which needs no known σ).
    """
    freedom, edges = network.degrees_of_freedom, len(covariance)
    if freedom == 0:
        return _untested(edges)
    weights = np.linalg.inv(covariance)
    residual_covariance = covariance - network.length_covariance
    spread = weights @ residual_covariance @ weights
    redundancy = np.diag(residual_covariance @ weights)
    checked = np.diag(spread) > 1e-9 * np.diag(weights)
    root = np.sqrt(np.where(checked, np.diag(spread), np.nan))
    standardised = weights @ network.residuals / root
    sigma0 = float(np.sqrt(network.chi_square / freedom))
    found = NetworkTest(
        degrees_of_freedom=freedom,
        chi_square=network.chi_square,
        chi_square_limit=float(stats.chi2.ppf(1.0 - RISK, freedom)),
        p=float(stats.chi2.sf(network.chi_square, freedom)),
        sigma0=sigma0,
        redundancy=redundancy,
        standardised=standardised,
        tau=standardised / sigma0 if sigma0 > 0 else np.zeros(edges),
        standardised_limit=float(stats.norm.ppf(1.0 - RISK / (2.0 * edges))),
        tau_limit=tau_quantile(freedom, edges),
        correlations=spread / np.outer(root, root),
        gross_error=GrossError(NO_BLUNDER),
    )
    return _with_gross_error(found, root)


def _untested(edges: int) -> NetworkTest:
    nan, none = float("nan"), np.full(edges, np.nan)
    return NetworkTest(
        *(0, nan, nan, nan, nan),
        *(np.zeros(edges), none, none),
        *(nan, nan),
        np.full((edges, edges), np.nan),
        GrossError(NO_TEST),
    )


def _with_gross_error(found: NetworkTest, root: FloatArray) -> NetworkTest:
    return replace(found, gross_error=_gross_error(found, root))


def _gross_error(found: NetworkTest, root: FloatArray) -> GrossError:
    """Decide whether there is a bad edge, and which."""
    fails = found.p < RISK
    squares = np.where(np.isfinite(found.standardised), found.standardised**2, 0.0)
    worst = int(np.argmax(squares))
    freedom = found.degrees_of_freedom
    rest = max(found.chi_square - float(squares[worst]), 0.0)
    by_tau = fails and freedom >= 2 and abs(float(found.tau[worst])) > found.tau_limit
    explained = stats.chi2.sf(rest, freedom - 1) >= RISK if freedom >= 2 else False
    by_known = fails and bool(explained) and squares[worst] > found.standardised_limit**2
    if freedom < 2 or not (by_known or by_tau):
        return GrossError(DETECTED if fails else NO_BLUNDER)
    scale = max(rest / (freedom - 1), 1.0)
    alike = np.abs(found.correlations[worst]) > ALIKE
    indistinct = squares[worst] - squares < INDISTINCT * scale
    named = np.flatnonzero((alike | indistinct) & (squares > 0))
    order = tuple(int(k) for k in named[np.argsort(-squares[named], kind="stable")])
    t = stats.norm.ppf(0.975) if scale == 1.0 else stats.t.ppf(0.975, freedom - 1)
    return GrossError(
        ONE_EDGE if len(order) == 1 else GROUP,
        order,
        float(-found.standardised[worst] / root[worst]),
        float(t * np.sqrt(scale) / root[worst]),
    )
