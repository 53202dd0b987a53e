"""A nested mixed model as the user states it, the check at the door, and well-scaled columns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class RandomTerm:
    """One random effect: a vector of d coefficients for every unit of a level (and every copy in it).

    Attributes
    ----------
    name
        Name of the effect, unique in the model: 'module', 'sensor', 'sensor_by_level', 'run' …
    level
        Name of the nested level whose units carry the effect.
    columns
        (N, d) design columns, for a line [1, x]. The covariance of the effect is a free d × d matrix.
    copies
        (N,) integers or None. Within a unit of the level, which independent copy of the effect the row
        belongs to (the run of a module that all its sensors shared, the nominal level of a sensor). None: one
        copy.
    """

    name: str
    level: str
    columns: FloatArray
    copies: IntArray | None = None


@dataclass(frozen=True)
class NestedModel:
    """y = X β + Σ Z u + e with random effects nested in each other.

    Attributes
    ----------
    response
        (N,) readings.
    fixed
        (N, p) columns of the fixed part, of full rank.
    fixed_names
        p names.
    levels
        (name, codes (N,)) from the outermost to the innermost level. A code need only be unique within its
        outer unit.
    terms
        The random effects.
    """

    response: FloatArray
    fixed: FloatArray
    fixed_names: tuple[str, ...]
    levels: tuple[tuple[str, IntArray], ...]
    terms: tuple[RandomTerm, ...]

    def term(self, name: str) -> RandomTerm:
        """The random effect of that name.

        Raises
        ------
        KeyError
            There is none.
        """
        for term in self.terms:
            if term.name == name:
                return term
        raise KeyError(
            f"no random effect '{name}'; there are {', '.join(t.name for t in self.terms) or 'none'}"
        )


def check_model(model: NestedModel) -> None:
    """Check shapes, names and numbers, all at once.

    Raises
    ------
    ValueError
        Everything that is wrong with the model, one sentence each.
    """
    rows = len(model.response)
    wrong = [
        *_wrong_fixed_part(model, rows),
        *(
            f"level '{name}' has {len(codes)} codes for {rows} rows"
            for name, codes in model.levels
            if len(codes) != rows
        ),
        *(sentence for term in model.terms for sentence in _wrong_term(term, model, rows)),
    ]
    names = [term.name for term in model.terms]
    wrong += [
        f"two random effects are called '{name}'" for name in sorted({n for n in names if names.count(n) > 1})
    ]
    if wrong:
        raise ValueError("; ".join(wrong))


def _wrong_fixed_part(model: NestedModel, rows: int) -> list[str]:
    wrong = []
    if model.response.ndim != 1 or not np.isfinite(model.response).all():
        wrong.append("the response must be one finite number a row")
    if model.fixed.ndim != 2 or len(model.fixed) != rows or not np.isfinite(model.fixed).all():
        wrong.append(f"the fixed part must be a finite table of {rows} rows")
    elif model.fixed.shape[1] != len(model.fixed_names):
        wrong.append(f"{model.fixed.shape[1]} fixed columns have {len(model.fixed_names)} names")
    elif not 0 < model.fixed.shape[1] < rows:
        wrong.append(f"{model.fixed.shape[1]} fixed columns cannot be estimated from {rows} rows")
    return wrong


def _wrong_term(term: RandomTerm, model: NestedModel, rows: int) -> list[str]:
    wrong = []
    if term.level not in [name for name, _ in model.levels]:
        wrong.append(
            f"random effect '{term.name}' belongs to level '{term.level}', which the model does not have"
        )
    if term.columns.ndim != 2 or len(term.columns) != rows or not np.isfinite(term.columns).all():
        wrong.append(f"random effect '{term.name}' must have finite columns of {rows} rows")
    if term.copies is not None and len(term.copies) != rows:
        wrong.append(f"random effect '{term.name}' has {len(term.copies)} copy numbers for {rows} rows")
    return wrong


@dataclass(frozen=True)
class ScaledColumns:
    """The model's columns in coordinates in which nothing is large, small or nearly collinear.

    Attributes
    ----------
    terms
        For each random effect (N, d): the columns made orthogonal to each other with unit mean square, so
        that for [1, x] they are [1, (x − mean)/sd].
    term_bases
        For each random effect R (d, d), upper triangular: columns = scaled columns @ R. An effect u in the
        user's coordinates is R u in the scaled ones.
    fixed
        (N, p) scaled fixed columns: each fixed column times x becomes the same column times (x − mean)/sd.
    fixed_basis
        G (p, p): the user's fixed columns = fixed @ G.
    """

    terms: tuple[FloatArray, ...]
    term_bases: tuple[FloatArray, ...]
    fixed: FloatArray
    fixed_basis: FloatArray


def scale_columns(model: NestedModel) -> ScaledColumns:
    """Rotate random and fixed columns into well-scaled coordinates.

    Raises
    ------
    ValueError
        The columns of a random effect are linearly dependent.
    """
    terms: list[FloatArray] = []
    bases: list[FloatArray] = []
    for number, term in enumerate(model.terms):
        twin = next((k for k in range(number) if _same(model.terms[k].columns, term.columns)), None)
        scaled, basis = _orthogonal(term) if twin is None else (terms[twin], bases[twin])
        terms.append(scaled)
        bases.append(basis)
    fixed, fixed_basis = _scale_fixed(model, terms, bases)
    return ScaledColumns(tuple(terms), tuple(bases), fixed, fixed_basis)


def _same(a: FloatArray, b: FloatArray) -> bool:
    return a is b or (a.shape == b.shape and np.array_equal(a, b))


def _orthogonal(term: RandomTerm) -> tuple[FloatArray, FloatArray]:
    d = term.columns.shape[1]
    scaled = np.empty(term.columns.shape, order="F")
    basis = np.zeros((d, d))
    for k in range(d):
        column = term.columns[:, k].astype(float)
        size = np.sqrt(np.mean(column**2))
        for i in range(k):
            basis[i, k] = np.mean(column * scaled[:, i])
            column = column - basis[i, k] * scaled[:, i]
        basis[k, k] = np.sqrt(np.mean(column**2))
        if basis[k, k] <= 1e-10 * size or size == 0.0:
            raise ValueError(f"the columns of random effect '{term.name}' are linearly dependent")
        scaled[:, k] = column / basis[k, k]
    return scaled, basis


def _scale_fixed(
    model: NestedModel, terms: list[FloatArray], bases: list[FloatArray]
) -> tuple[FloatArray, FloatArray]:
    """Rewrite fixed columns that are another fixed column times a random column; scale those of odd size."""
    raw = model.fixed
    fixed = np.array(raw, dtype=float, order="F")
    to_user = np.eye(fixed.shape[1])
    done: set[int] = set()
    for term, scaled, basis in zip(model.terms, terms, bases, strict=True):
        if term.columns.shape[1] < 2 or not (term.columns[:, 0] == 1.0).all():
            continue
        for (partner, k), j in sorted(_products(raw, term.columns).items()):
            inner = {i: _products_of(raw, term.columns, partner, i) for i in range(1, k)}
            if j in done or partner in done or None in inner.values():
                continue
            fixed[:, j] = raw[:, partner] * scaled[:, k]
            to_user[:, j] = 0.0
            to_user[j, j], to_user[partner, j] = basis[k, k], basis[0, k]
            for i, column in inner.items():
                to_user[column, j] = basis[i, k]
            done.add(j)
    for j in set(range(fixed.shape[1])) - done:
        size = float(np.sqrt(np.mean(raw[raw[:, j] != 0.0, j] ** 2))) if raw[:, j].any() else 1.0
        if not 0.1 < size < 10.0:
            fixed[:, j] /= size
            to_user[j] *= size
    return fixed, to_user


def _products(fixed: FloatArray, columns: FloatArray) -> dict[tuple[int, int], int]:
    """Which fixed column j equals fixed column i times random column k: {(i, k): j}."""
    found = {}
    sums = fixed.sum(axis=0)
    sizes = np.abs(fixed).sum(axis=0)
    for k in range(1, columns.shape[1]):
        wanted = fixed.T @ columns[:, k]
        near = np.abs(wanted[:, None] - sums[None, :]) <= 1e-9 * np.maximum(sizes, 1e-300)[None, :]
        for i, j in zip(*np.nonzero(near), strict=True):
            if i != j and np.array_equal(fixed[:, j], fixed[:, i] * columns[:, k]):
                found[int(i), k] = int(j)
    return found


def _products_of(fixed: FloatArray, columns: FloatArray, partner: int, k: int) -> int | None:
    return _products(fixed, columns).get((partner, k))
