"""Model coordinates: moments as factors of the model's own columns, and what these cannot tell apart.

With an explicit constant, model columns are centred and scaled; without one they are only scaled, since
moving the origin would change the model. Coefficients come back by ``beta = scale_y L beta* + o``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError
from mixbridge.moments.closed import Moments
from mixbridge.moments.columns import Span, dependency_text, noise

__all__ = ["ModelCoordinates", "hidden", "model_coordinates", "refuse_collinear", "touched"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ModelCoordinates:
    """Moments in the columns of the model, in the order of the formula.

    Attributes
    ----------
    names : tuple of str
        Columns of the design.
    constant : str or None
        Name of the explicit constant column, if there is one.
    within : ndarray of shape (k, p + 1)
        Factor of W; the outcome is the last column.
    between : ndarray of shape (G, k + 1, p + 1)
        Factor of each B_T; the outcome is the last column.
    to_model : ndarray of shape (p, p)
        L in ``beta = scale_y L beta* + o``.
    offset : ndarray of shape (p,)
        o, in the units of the coefficients.
    floor : ndarray of shape (p + 1,)
        Length of each column, over all rows, that rounding of the stored data alone can produce.
    """

    names: tuple[str, ...]
    constant: str | None
    within: FloatArray
    between: FloatArray
    to_model: FloatArray
    offset: FloatArray
    floor: FloatArray

    @property
    def typical(self) -> FloatArray:
        """Typical size of each column, in the units of the data."""
        return np.asarray(1.0 / np.abs(np.diag(self.to_model)))


def model_coordinates(moments: Moments) -> ModelCoordinates:
    """Write moments in the columns of the model.

    Parameters
    ----------
    moments : Moments

    Returns
    -------
    ModelCoordinates
    """
    names, columns = moments.design, moments.columns
    p, k = len(names), len(columns)
    z = np.zeros((k + 1, p + 1))  # from (1, scaled z) to model columns and outcome
    to_model = np.zeros((p, p))
    offset = np.zeros(p)
    floor = np.zeros(p + 1)
    bound = noise(moments)
    free = moments.constant is None
    intercept = None if free else names.index(str(moments.constant))
    for j, name in enumerate(names):
        if j == intercept:
            z[0, j] = to_model[j, j] = 1.0
            offset[j] = moments.shift[-1]
            continue
        at = columns.index(name)
        z[at + 1, j] = 1.0
        to_model[j, j] = 1.0 / moments.scale[at]
        floor[j] = bound[at]
        if free:
            z[0, j] = moments.shift[at] / moments.scale[at]
        else:
            to_model[intercept, j] = -moments.shift[at] / moments.scale[at]
    z[k, p] = 1.0
    floor[p] = bound[-1]
    if free:
        z[0, p] = moments.shift[-1] / moments.scale[-1]
    return ModelCoordinates(
        names=names,
        constant=moments.constant,
        within=moments.within @ z[1:],
        between=moments.between @ z,
        to_model=to_model,
        offset=offset,
        floor=floor,
    )


def touched(model: ModelCoordinates, span: Span) -> NDArray[np.bool_]:
    """Tell which coefficients each null direction touches.

    Parameters
    ----------
    model : ModelCoordinates
    span : Span
        Of some factor of the model columns.

    Returns
    -------
    ndarray of bool, shape (p, p - rank)
        Coefficients are rows, null directions columns; what is small against the terms it is made of is zero.
    """
    to_model = model.to_model
    null = np.abs(span.null)
    found = null > 1e-9 * null.max(axis=0, initial=0.0)
    for j in np.flatnonzero((to_model != 0.0).sum(axis=1) > 1):  # the intercept, which collects all origins
        found[j] = np.abs(to_model[j] @ span.null) > 1e-9 * (np.abs(to_model[j]) @ null)
    return np.asarray(found)


def hidden(model: ModelCoordinates, span: Span, where: str) -> dict[str, str]:
    """Say for each coefficient that is not estimable which dependency hides it.

    Parameters
    ----------
    model : ModelCoordinates
    span : Span
        Of the factor of one kind of variation.
    where : str
        That kind in words, ``"within units"`` or ``"between unit means"``.

    Returns
    -------
    dict
        Coefficient -> reason.
    """
    names, which = model.names, touched(model, span)
    reasons: dict[str, str] = {}
    null = model.to_model @ span.null
    for j in np.flatnonzero(which.any(axis=1)):
        at = next(
            (k for k in np.flatnonzero(which[j]) if span.dependencies[k].column == j), int(which[j].argmax())
        )
        dependency = span.dependencies[at]
        if dependency.column == j and not dependency.others:
            reasons[names[j]] = f"does not vary {where}"
        else:
            visible = np.where(which[:, at], null[:, at], 0.0)
            if where.startswith("within"):  # a constant drops out of deviations from unit means
                visible[[name == model.constant for name in names]] = 0.0
            text = dependency_text(dependency.column, visible, names, model.typical)
            reasons[names[j]] = f"not separable {where}: {text}"
    return reasons


def refuse_collinear(model: ModelCoordinates, span: Span) -> None:
    """Refuse a design with dependent columns, naming each dependency.

    Parameters
    ----------
    model : ModelCoordinates
    span : Span
        Of the factor of all rows.

    Raises
    ------
    IdentificationError
        If there is a dependency.
    """
    if not span.dependencies:
        return
    null = np.where(touched(model, span), model.to_model @ span.null, 0.0)
    lines = [
        dependency_text(dependency.column, null[:, at], model.names, model.typical)
        for at, dependency in enumerate(span.dependencies)
    ]
    raise IdentificationError(
        f"the columns of the design are exactly collinear: {'; '.join(lines)}. "
        "No data can tell these coefficients apart; leave one column of each dependency out of the formula."
    )
