"""What is rehearsed: a design or a study, brought to one form."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Protocol

import numpy as np

from mixbridge.errors import OptionError
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.rehearse.design import Design, Rows
from mixbridge.rehearse.truth import Model, Truth, model_of
from mixbridge.resample import truth_of
from mixbridge.routes import LEDGER_ROUTES, Fit, fit_route

__all__ = ["Setting", "StudyLike", "setting_of"]

NO_ORDER = "differences need the order of rows, which is not in the moments"


class StudyLike(Protocol):
    """What is needed of a study."""

    @property
    def curve(self) -> Curve:
        """The panel."""

    @property
    def fits(self) -> Mapping[str, Fit]:
        """Routes fitted to it."""

    @property
    def panel(self) -> Any:
        """Rows: ``matrix()``, ``codes``, ``period_ordinals``."""

    @property
    def primary(self) -> str:
        """Key of the primary route."""


@dataclass(frozen=True, slots=True, eq=False)
class Setting:
    """A panel, its routes, and a truth.

    Attributes
    ----------
    curve : Curve
    fits : mapping of str to Fit
    model : Model
    rows : Rows or None
        Where the truth needs draws by rows.
    primary : str
    notes : tuple of str
    """

    curve: Curve
    fits: Mapping[str, Fit]
    model: Model
    rows: Rows | None
    primary: str
    notes: tuple[str, ...]

    def repeated(self, times: int) -> Setting:
        """Return the design with as many copies of each unit: N grows, the sizes stay."""
        moments, root = self.curve.moments, float(np.sqrt(times))
        curve = curve_of(
            replace(
                moments,
                counts=moments.counts * times,
                within=moments.within * root,
                between=moments.between * root,
            )
        )
        fits = {key: fit_route(curve, fit.route, fit.conventions, NO_ORDER) for key, fit in self.fits.items()}
        rows = None if self.rows is None else self.rows.repeated(times)
        return Setting(curve, fits, self.model, rows, self.primary, self.notes)


def setting_of(
    source: Design | StudyLike, truth: Truth | None, routes: Sequence[str] | None = None
) -> Setting:
    """Bring a design or a study to one form.

    Parameters
    ----------
    source : Design or study
    truth : Truth or None
        None: the primary fit of the study.
    routes : sequence of str, optional
        Those of the study, or all shown side by side, unless given.

    Returns
    -------
    Setting
    """
    stated = Truth() if truth is None else truth
    if not isinstance(stated, Truth):
        raise OptionError(f"truth={truth!r} is not allowed; allowed: a Truth.")
    if isinstance(source, Design):
        return _of_design(source, stated, routes)
    if not all(hasattr(source, name) for name in ("curve", "fits", "panel", "primary")):
        raise OptionError(f"{type(source).__name__} cannot be rehearsed; allowed: a Design or a Study.")
    study = source
    curve, primary = study.curve, study.primary
    fits = dict(study.fits) if routes is None else {key: _fit(study.fits, curve, key) for key in routes}
    base = study.fits[primary] if primary in study.fits else fit_route(curve, primary, {}, NO_ORDER)
    complete = stated.psi is not None and stated.idiosyncratic is not None
    if complete and not np.isfinite(base.ratio):
        base = fit_route(curve, "reml", {}, NO_ORDER)
    model = model_of(stated, curve, truth_of(base))
    rows = _rows_of(study.panel, stated) if stated.by_rows else None
    taken = "What the truth does not state is the fit of route " + base.route + " to these data."
    return Setting(curve, fits, model, rows, primary, (taken, *_how(stated)))


def _of_design(design: Design, truth: Truth, routes: Sequence[str] | None) -> Setting:
    rows = design.rows()
    stream = np.random.Generator(np.random.PCG64(np.random.SeedSequence(design.seed, spawn_key=(1,))))
    curve = curve_of(Moments.from_arrays(rows.x, stream.standard_normal(len(rows.x)), rows.codes, rows.names))
    keys = [key for key in LEDGER_ROUTES if key != "first_difference"] if routes is None else routes
    fits = {key: fit_route(curve, key, {}, NO_ORDER) for key in keys}
    model = model_of(truth, curve, None)
    drawn = f"The covariates were drawn once (seed {design.seed}); all figures hold given them."
    primary = "reml" if "reml" in fits else next(iter(fits))
    return Setting(curve, fits, model, rows if truth.by_rows else None, primary, (drawn, *_how(truth)))


def _fit(fits: Mapping[str, Fit], curve: Curve, key: str) -> Fit:
    return fits[key] if key in fits else fit_route(curve, key, {}, NO_ORDER)


def _how(truth: Truth) -> tuple[str, ...]:
    if truth.by_rows:
        return ("Errors were drawn row by row; intervals and tests assume independent normal errors.",)
    return ("Errors were drawn as moments, exactly as normal rows would give them.",)


def _rows_of(panel: Any, truth: Truth) -> Rows:
    """Sort the rows of a panel by unit and period."""
    ordinals = panel.period_ordinals
    if truth.serial != 0.0 and ordinals is None:
        raise OptionError(
            "serial needs the order of rows: name the column with period=, or describe a Design."
        )
    x, _ = panel.matrix()
    codes = np.asarray(panel.codes, dtype=np.intp)
    time = np.zeros(len(codes)) if ordinals is None else np.asarray(ordinals, dtype=float)
    order = np.lexsort((time, codes))
    codes, time = codes[order], time[order]
    first = np.diff(codes, prepend=-1) != 0
    gaps = np.diff(time, prepend=0.0)
    step = gaps[~first].min(initial=np.inf) if ordinals is not None else 1.0
    steps = np.where(first, 0.0, gaps / step if np.isfinite(step) and step > 0.0 else 1.0)
    return Rows(np.asarray(x, dtype=float)[order], codes, steps, tuple(panel.names), ordinals is not None)
