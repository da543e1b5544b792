"""A design described without data: units, sizes, and how the covariates vary within and between units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError

__all__ = ["Correlation", "Design", "Rows"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

Correlation = Mapping[tuple[str, str], float] | Sequence[Sequence[float]] | FloatArray | None


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """Design columns row by row, units together and in the order of their periods.

    Attributes
    ----------
    x : ndarray of shape (n, p)
    codes : ndarray of int, shape (n,)
        Unit of each row, not decreasing.
    steps : ndarray of shape (n,)
        Periods since the unit's row before; 0 at its first row.
    names : tuple of str
    ordered : bool
        Whether rows of a unit have an order.
    """

    x: FloatArray
    codes: IntArray
    steps: FloatArray
    names: tuple[str, ...]
    ordered: bool = True

    def repeated(self, times: int) -> Rows:
        """Return the rows of as many copies of all units."""
        units = int(self.codes[-1]) + 1
        return Rows(
            np.tile(self.x, (times, 1)),
            np.concatenate([self.codes + units * copy for copy in range(times)]),
            np.tile(self.steps, times),
            self.names,
            self.ordered,
        )


@dataclass(frozen=True, eq=False)
class Design:
    """A panel that has not been observed yet.

    A covariate is ``mean + b_i + d_it``, b and d normal with the variances given, and X is drawn once, from `seed`:
    what is said about the design holds given that X. The variance of its unit means is about ``between + within / T``.

    Attributes
    ----------
    units : int
        Number of units.
    sizes : int, sequence of int, or mapping of int to int
        Rows of every unit; of each unit; or number of units by rows.
    covariates : mapping of str to (within, between) or (within, between, mean)
        Variances within and between units; within 0: the same in all rows of a unit.
    within_correlation, between_correlation : mapping or matrix, optional
        Correlations of the two parts, by pair of names or as a matrix in the order of the covariates.
    seed : int
        From which X is drawn.

    Raises
    ------
    IdentificationError
        If no such panel could be analysed.
    OptionError
        If a value is out of its range.
    """

    units: int
    sizes: int | Sequence[int] | Mapping[int, int]
    covariates: Mapping[str, Sequence[float]] = field(default_factory=dict)
    within_correlation: Correlation = None
    between_correlation: Correlation = None
    seed: int = 20_060

    def __post_init__(self) -> None:
        """Refuse what could not be analysed."""
        _whole("units", self.units, 1)
        _whole("seed", self.seed, 0)
        sizes = self.unit_sizes()
        for name, given in self.covariates.items():
            _check_covariate(name, given)
        columns = 1 + len(self.covariates)
        if self.units <= columns:
            raise IdentificationError(
                f"units={self.units} for {columns} columns that vary between units (the intercept counted): nothing "
                "is left between units. Plan more units or fewer covariates."
            )
        if sizes.max() == 1:
            raise IdentificationError(
                "every unit has one row: within variance is zero everywhere. Plan more rows per unit."
            )
        if self.covariates and not any(given[0] > 0.0 for given in self.covariates.values()):
            raise IdentificationError(
                "within variance is zero for every covariate, so there is no within route to compare: "
                f"{', '.join(self.covariates)}. Give one of them a variance within units."
            )
        varying = sum(given[0] > 0.0 for given in self.covariates.values())
        if int(sizes.sum()) - self.units <= varying:
            raise IdentificationError(
                f"{int(sizes.sum())} rows of {self.units} units leave no degrees of freedom within units beside "
                f"{varying} covariates. Plan more rows per unit."
            )
        self._parts()

    def unit_sizes(self) -> IntArray:
        """Return the number of rows of each unit."""
        given = self.sizes
        if isinstance(given, Mapping):
            for size, count in given.items():
                _whole("sizes: rows", size, 1)
                _whole(f"sizes: units with {size} rows", count, 0)
            found = np.repeat(np.array(list(given), dtype=np.intp), list(given.values()))
        elif isinstance(given, (int, np.integer)):
            _whole("sizes", given, 1)
            found = np.full(self.units, int(given), dtype=np.intp)
        elif not isinstance(given, (tuple, list, np.ndarray)):
            raise OptionError(
                f"sizes={given!r} is not allowed; allowed: rows of every unit, rows of each unit, or a mapping from "
                "rows to number of units."
            )
        else:
            for size in given:
                _whole("sizes: rows", size, 1)
            found = np.array(list(given), dtype=np.intp)
        if found.size != self.units:
            raise OptionError(
                f"sizes describe {found.size} units, units={self.units}: the two must be the same."
            )
        return found

    def rows(self) -> Rows:
        """Draw X; the same one each time."""
        stream = np.random.Generator(np.random.PCG64(np.random.SeedSequence(self.seed)))
        sizes = self.unit_sizes()
        codes = np.repeat(np.arange(self.units), sizes)
        inside, means, level = self._parts()
        between = stream.standard_normal((self.units, len(level))) @ means.T
        within = stream.standard_normal((codes.size, len(level))) @ inside.T
        steps = np.ones(codes.size)
        steps[np.cumsum(sizes) - sizes] = 0.0
        x = np.column_stack([np.ones(codes.size), level + between[codes] + within])
        return Rows(x, codes, steps, ("Intercept", *self.covariates))

    def _parts(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return square roots of both covariance matrices, and the means."""
        given = list(self.covariates.values())
        variances = np.array([one[:2] for one in given], dtype=float).reshape(-1, 2)
        level = np.array([one[2] if len(one) == 3 else 0.0 for one in given])
        names = tuple(self.covariates)
        roots = [
            np.sqrt(variances[:, at])[:, None] * _root(names, variances[:, at], chosen, word)
            for at, chosen, word in (
                (0, self.within_correlation, "within_correlation"),
                (1, self.between_correlation, "between_correlation"),
            )
        ]
        return roots[0], roots[1], level


def _check_covariate(name: str, given: Sequence[float]) -> None:
    wanted = "allowed: (variance within, variance between) or (variance within, variance between, mean)"
    if name == "Intercept":
        raise OptionError("covariates: 'Intercept' is in every design; give the covariate another name.")
    if not isinstance(given, (tuple, list, np.ndarray)) or len(given) not in (2, 3):
        raise OptionError(f"covariates: {name!r}: {given!r} is not allowed; {wanted}.")
    if not np.isfinite(np.asarray(given, dtype=float)).all() or min(given[:2]) < 0.0:
        raise OptionError(f"covariates: {name!r}: {given!r} has a variance below 0 or no number; {wanted}.")
    if given[0] == given[1] == 0.0:
        raise OptionError(f"covariates: {name!r} varies neither within nor between units.")


def _root(names: tuple[str, ...], variances: FloatArray, given: Correlation, word: str) -> FloatArray:
    """Return a square root of a correlation matrix; refuses an impossible one."""
    p = len(names)
    matrix = np.eye(p)
    if isinstance(given, Mapping):
        for pair, value in given.items():
            if len(pair) != 2 or pair[0] == pair[1]:
                raise OptionError(f"{word}: {pair!r} is not a pair of covariates.")
            for name in pair:
                if name not in names:
                    raise OptionError.not_among(f"{word}: covariate", name, names)
            i, j = (names.index(name) for name in pair)
            matrix[i, j] = matrix[j, i] = value
    elif given is not None:
        matrix = np.asarray(given, dtype=float)
        if (
            matrix.shape != (p, p)
            or not np.array_equal(matrix, matrix.T)
            or not (np.diag(matrix) == 1.0).all()
        ):
            raise OptionError(f"{word} must be a symmetric {p} by {p} matrix with ones on its diagonal.")
    if not (np.isfinite(matrix).all() and np.abs(matrix).max(initial=0.0) <= 1.0):
        raise OptionError(f"{word} has a value outside -1 to 1.")
    for i, j in np.argwhere(np.triu(matrix, 1) != 0.0):
        fixed = [names[k] for k in (i, j) if variances[k] == 0.0]
        if fixed:
            raise OptionError(f"{word}: {names[i]!r} with {names[j]!r}: {fixed[0]!r} has no such variance.")
    try:
        return np.asarray(np.linalg.cholesky(matrix)) if p else matrix
    except np.linalg.LinAlgError:
        raise OptionError(
            f"{word} is impossible: with an eigenvalue of {np.linalg.eigvalsh(matrix)[0]:.3g} it is not positive "
            "definite. No variables have such correlations, or one is a combination of the others."
        ) from None


def _whole(name: str, value: object, least: int) -> None:
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < least:
        raise OptionError(f"{name}={value!r} is not allowed; allowed: an integer, at least {least}.")
