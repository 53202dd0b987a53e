"""What the analysis of layout trials hands on: adjusted placements, and what they say together.

Shapes: n nodes, E edges of one geometry. Coordinates stand in pairs (x, y); covariances of coordinates have
shape (2n, 2n) in the order x₁, y₁, x₂, y₂, …; everything is in mm or mm². What could not be solved is NaN.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.notices import Notice

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

OWN_LINE = "own line"
GENERATION_LINE = "generation's line"
LINES = (OWN_LINE, GENERATION_LINE)
"""What lengths are read by: each sensor's own line, or the mean line of its generation."""

SOLVED, PARTLY_SOLVED, NOT_SOLVED = "solved", "partly solved", "not solved"

NO_TEST = "no test: just determined"
NO_BLUNDER = "none found"
DETECTED = "detected, not located"
ONE_EDGE = "one edge"
GROUP = "one edge of a group"

NODE_COLUMNS = (
    *("generation", "module", "placement", "node", "x_mm", "y_mm", "known_x_mm", "known_y_mm"),
    *("sd_x_mm", "sd_y_mm", "cov_xy_mm2", "error_mm", "predicted_sd_mm"),
    *("read_by", "trial", "repetition", "status", "error_x_mm", "error_y_mm"),
    *("fit_error_mm", "fit_predicted_sd_mm", "first_order_fails"),
)
"""Columns of :attr:`Layout.nodes`; the first thirteen are the table's fixed part."""

EDGE_COLUMNS = (
    *("generation", "module", "placement", "sensor", "length_mm", "known_length_mm", "adjusted_length_mm"),
    *("residual_mm", "redundancy", "tau"),
    *(
        "read_by",
        "trial",
        "repetition",
        "status",
        "sd_length_mm",
        "known_sd_mm",
        "error_mm",
        "predicted_sd_mm",
    ),
    *("standardised_residual", "tau_limit", "suspected"),
)
"""Columns of :attr:`Layout.edges`; the first ten are the table's fixed part."""

ERROR_COLUMNS = (
    *("read_by", "generation", "module", "figure", "placements", "nodes_or_edges"),
    *("rms_mm", "largest_mm", "predicted_rms_mm", "predicted_low_mm", "predicted_high_mm"),
    *("predicted_largest_mm", "predicted_largest_low_mm", "predicted_largest_high_mm"),
    *("ratio", "ratio_low", "ratio_high", "as_predicted"),
)
"""Columns of :attr:`Layout.errors` and :attr:`Layout.by_module`.

``read_by`` is one of :data:`LINES`; ``figure`` is ``node error after datum``, ``node error after best fit``
or ``edge length error``; ``module`` is empty in rows of a generation. Predicted limits hold 95 % of what
calibration and known positions alone would give; ``ratio`` is observed over predicted RMS with the 95 %
interval that the prediction's own spread leaves; ``as_predicted`` is whether the observed RMS lies inside the
predicted limits.
"""

EXTRA_COLUMNS = ("read_by", "generation", "extra_sd_mm", "low_mm", "high_mm", "p", "lengths", "label")
"""Columns of :attr:`Layout.extra`: SD to be added to every length for prediction and observation to agree."""

SUM_COLUMNS = (
    *("generation", "module", "placement", "read_by", "trial", "edges", "estimate_mm", "known_mm"),
    *("sd_mm", "sd_independent_mm", "sd_monte_carlo_mm"),
)
"""Columns of :attr:`Layout.sums`: the sum of the edges used of every placement, with its SD from the whole
adjusted covariance, from edges taken as independent (wrong, for comparison), and by Monte Carlo."""


@dataclass(frozen=True)
class Edge:
    """One sensor as an edge of the network, and the two nodes it joins."""

    sensor: str
    first: str
    second: str


@dataclass(frozen=True)
class Blunder:
    """What the tests say about one bad edge.

    Attributes
    ----------
    verdict
        :data:`NO_TEST`, :data:`NO_BLUNDER`, :data:`DETECTED`, :data:`ONE_EDGE` or :data:`GROUP`.
    sensors
        The edge named, or the edges that cannot be told apart; empty where none is named.
    error_mm, uncertainty_mm
        Estimated gross error of the edge with the largest τ (read too long is positive) and its 95 % expanded
        uncertainty; NaN where none is named.
    """

    verdict: str
    sensors: tuple[str, ...] = ()
    error_mm: float = float("nan")
    uncertainty_mm: float = float("nan")


@dataclass(frozen=True)
class NetworkTests:
    """Tests of one adjusted placement; arrays have shape (E,), NaN for edges without a length.

    Attributes
    ----------
    degrees_of_freedom
        Redundancy of the network: edges solved for less coordinates solved for.
    chi_square, chi_square_limit, p
        Sum of squares of whitened residuals against the known length covariance, its 95 % limit and p; NaN
        without redundancy.
    sigma0
        Square root of χ² over its degrees of freedom: 1 where the known covariance holds.
    residuals_mm
        Adjusted less read length.
    redundancy
        Share of each length that the others check, from 0 to 1; they add up to ``degrees_of_freedom``.
    standardised
        Residuals over their own known SD (data snooping).
    tau, tau_limit
        The same over their SD with σ0 estimated (Pope), and the 5 % limit over all edges.
    blunder
        What follows.
    """

    degrees_of_freedom: int
    chi_square: float
    chi_square_limit: float
    p: float
    sigma0: float
    residuals_mm: FloatArray
    redundancy: FloatArray
    standardised: FloatArray
    tau: FloatArray
    tau_limit: float
    blunder: Blunder


@dataclass(frozen=True)
class Ellipses:
    """Ellipses of the adjusted nodes, arrays of shape (n,).

    Attributes
    ----------
    semi_major_mm, semi_minor_mm
        Of the standard ellipse.
    angle_rad
        Of the major axis from +x, counter-clockwise.
    factor_95
        Times this they hold 95 %: 2.45 (√χ² of two degrees of freedom), the covariance being known.
    """

    semi_major_mm: FloatArray
    semi_minor_mm: FloatArray
    angle_rad: FloatArray
    factor_95: float


@dataclass(frozen=True)
class MonteCarlo:
    """The same propagation by drawing lengths (JCGM 101), beside first order.

    Attributes
    ----------
    draws, failed
        Lengths drawn, and those of them for which no shape exists.
    mean_mm, covariance_mm2
        Shape (n, 2) and (2n, 2n) over the draws that were solved.
    first_order_fails
        Shape (n,): whether a node's SD differs from first order by more than ``tolerance``, or its mean is
        moved by more than this share of its SD.
    tolerance
        The share meant.
    sum_sd_mm
        SD of the sum of all edges used.
    """

    draws: int
    failed: int
    mean_mm: FloatArray
    covariance_mm2: FloatArray
    first_order_fails: BoolArray
    tolerance: float
    sum_sd_mm: float


@dataclass(frozen=True)
class NodeErrors:
    """Errors of the adjusted nodes in one frame, beside those that calibration and known positions predict.

    Attributes
    ----------
    known_mm
        Shape (n, 2): known positions in the frame of the adjusted ones.
    errors_mm, covariance_mm2
        Shape (n, 2) adjusted less known, and their predicted covariance (2n, 2n).
    sizes_mm, predicted_mm
        Shape (n,): length of each error, and its predicted root mean square.
    rms_mm, largest_mm
        Over the nodes, the origin of the datum included.
    predicted_rms_mm
        Root of the predicted mean square.
    predicted_rms_low_mm, predicted_rms_high_mm
        Limits that hold 95 % of the predicted RMS.
    predicted_largest_mm, predicted_largest_low_mm, predicted_largest_high_mm
        Median and 95 % limits of the predicted largest error.
    """

    known_mm: FloatArray
    errors_mm: FloatArray
    covariance_mm2: FloatArray
    sizes_mm: FloatArray
    predicted_mm: FloatArray
    rms_mm: float
    largest_mm: float
    predicted_rms_mm: float
    predicted_rms_low_mm: float
    predicted_rms_high_mm: float
    predicted_largest_mm: float
    predicted_largest_low_mm: float
    predicted_largest_high_mm: float


@dataclass(frozen=True)
class Placement:
    """One placement of one module, read by one choice of lines, adjusted.

    Attributes
    ----------
    generation, module, session, trial, repetition, name
        Whose it is; ``name`` is the placement's in its trial.
    line
        :data:`OWN_LINE` or :data:`GENERATION_LINE`.
    geometry
        Name of the geometry in the description.
    nodes, edges
        Names of all nodes, and all edges of the module, in the order of every array.
    datum
        (origin, node on +x).
    status, reason
        :data:`SOLVED`, :data:`PARTLY_SOLVED` or :data:`NOT_SOLVED`, and what stood in the way.
    solved
        Shape (n,): the nodes that could be solved.
    used
        Shape (E,): the edges that the adjustment took.
    unstretched_mm
        Shape (n, 2): the geometry as described, in the datum's frame.
    known_mm, known_uncertainty_mm
        Shape (n, 2): known positions in the datum's frame, and the standard uncertainty of each recorded
        coordinate (NaN where not stated: taken as exact).
    lengths_mm, length_covariance_mm2
        Read lengths (E,), and their whole covariance (E, E), shared parts included.
    known_lengths_mm, known_length_covariance_mm2
        From the known positions.
    adjusted_mm, covariance_mm2
        Shape (n, 2) and (2n, 2n), NaN where not solved, 0 in the coordinates that the datum fixes.
    adjusted_lengths_mm, adjusted_length_covariance_mm2
        Of the edges between solved nodes.
    edge_errors_mm, edge_error_covariance_mm2
        Adjusted less known length (as read where not adjusted), and their predicted covariance.
    ellipses
        In the datum's frame; ``None`` where nothing was solved.
    tests
        ``None`` where nothing was solved.
    monte_carlo
        ``None`` where nothing was solved.
    after_datum, after_fit
        Node errors in the datum's frame, and after the best rigid fit, which no datum decides; ``None`` where
        nothing was solved.
    amplification
        Shape (n,): SD of a node after best fit per SD of a length, all lengths independent and alike.
    """

    generation: str
    module: str
    session: str
    trial: str
    repetition: int
    name: str
    line: str
    geometry: str
    nodes: tuple[str, ...]
    edges: tuple[Edge, ...]
    datum: tuple[str, str]
    status: str
    reason: str
    solved: BoolArray
    used: BoolArray
    unstretched_mm: FloatArray
    known_mm: FloatArray
    known_uncertainty_mm: float
    lengths_mm: FloatArray
    length_covariance_mm2: FloatArray
    known_lengths_mm: FloatArray
    known_length_covariance_mm2: FloatArray
    adjusted_mm: FloatArray
    covariance_mm2: FloatArray
    adjusted_lengths_mm: FloatArray
    adjusted_length_covariance_mm2: FloatArray
    edge_errors_mm: FloatArray
    edge_error_covariance_mm2: FloatArray
    ellipses: Ellipses | None = None
    tests: NetworkTests | None = None
    monte_carlo: MonteCarlo | None = None
    after_datum: NodeErrors | None = None
    after_fit: NodeErrors | None = None
    amplification: FloatArray = field(default_factory=lambda: np.zeros(0))

    @property
    def key(self) -> tuple[str, str, str, int, str]:
        """Generation, module, trial, repetition and name: what names a placement whatever its line."""
        return self.generation, self.module, self.trial, self.repetition, self.name


@dataclass(frozen=True)
class AmplificationMap:
    """Node SD per unit length SD over the reachable shapes of one geometry.

    The unstretched layout is stretched along x by ``stretch`` (1 + strain) and sheared by ``shear`` (x moves
    by shear × y); lengths are independent with equal SD; nodes after best rigid fit.

    Attributes
    ----------
    geometry
        Name of the geometry.
    stretch, shear
        Shape (a,) and (b,): the grid.
    root_mean_square, largest
        Shape (a, b): over the nodes; NaN where a length leaves the calibrated strain range, and where the
        figure is singular.
    by_node
        Shape (a, b, n), in the order of ``nodes``.
    nodes
        Names of the nodes.
    strain_low, strain_high
        The calibrated range of strain that bounds the map.
    """

    geometry: str
    stretch: FloatArray
    shear: FloatArray
    root_mean_square: FloatArray
    largest: FloatArray
    by_node: FloatArray
    nodes: tuple[str, ...]
    strain_low: float
    strain_high: float


@dataclass(frozen=True)
class NetworkFacts:
    """What a geometry can tell: nodes, edges, coordinates to be found, and what checks what.

    Attributes
    ----------
    geometry
        Name of the geometry.
    nodes, edges
        Their numbers.
    redundancy
        Edges less coordinates to be found; negative: under-determined.
    statement
        ``"under-determined"``, ``"just determined"``, ``"a bad edge can be detected, not located"`` or
        ``"a bad edge can be detected and named"``.
    flexible_nodes
        Nodes that the edges leave free to move; empty for a rigid figure.
    """

    geometry: str
    nodes: int
    edges: int
    redundancy: int
    statement: str
    flexible_nodes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Layout:
    """What the layout trials of a campaign say.

    Attributes
    ----------
    placements
        Every placement by every choice of lines, sorted.
    nodes, edges
        Columns of :data:`NODE_COLUMNS` and :data:`EDGE_COLUMNS`.
    errors, by_module
        Columns of :data:`ERROR_COLUMNS`: generations, and modules.
    extra
        Columns of :data:`EXTRA_COLUMNS`.
    sums
        Columns of :data:`SUM_COLUMNS`.
    amplification, facts
        One a geometry.
    figures
        Figures of merit for the limit ``node_error``, columns of
        :data:`campaign.analyses.sensor_figures.FIGURE_COLUMNS`; one a module, ``sensor`` being its worst
        node.
    labels
        What the results must be read with, by short name: ``known_nodes``, ``shared_parts``, ``runs``,
        ``mean_line``, ``temperature``.
    notices
        Placements and sensors that could not be used, or only in part.
    """

    placements: tuple[Placement, ...]
    nodes: pd.DataFrame
    edges: pd.DataFrame
    errors: pd.DataFrame
    by_module: pd.DataFrame
    extra: pd.DataFrame
    sums: pd.DataFrame
    amplification: tuple[AmplificationMap, ...]
    facts: tuple[NetworkFacts, ...]
    figures: pd.DataFrame
    labels: dict[str, str] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()

    def of_line(self, line: str) -> tuple[Placement, ...]:
        """Return the placements read by one choice of lines."""
        return tuple(p for p in self.placements if p.line == line)
