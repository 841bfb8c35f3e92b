"""The scikit-learn face: one estimator, for model selection with scikit-learn's own tools.

`SourceRegressor` learns the source that drives a member from readings along it and predicts
readings elsewhere.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from numbers import Integral, Real
from typing import Any, ClassVar

import numpy as np
from numpy.typing import ArrayLike
from sklearn.base import BaseEstimator, RegressorMixin
from sklearn.utils._param_validation import Interval, Options, RealNotInt, StrOptions
from sklearn.utils.validation import _check_sample_weight, check_is_fitted, validate_data
from threadpoolctl import ThreadpoolController

from srcfit.bands import undetermined
from srcfit.case import make_member
from srcfit.criteria import CRITERIA, choose
from srcfit.errors import SolveError
from srcfit.member import Member
from srcfit.priors import family, null_columns
from srcfit.problem import Array, Problem
from srcfit.solve import mode_shapes
from srcfit.solvers import SOLVERS
from srcfit.solvers.frame import Frame, frame
from srcfit.solvers.ladder import Ladder
from srcfit.view import look, string

ROUNDING = 1e-12  # what is this small beside the whole is left over by rounding


class SourceRegressor(RegressorMixin, BaseEstimator):  # type: ignore[misc]
    """The source of a member, learnt from readings along it by penalised least squares.

    readings = H[f] + Z coef + noise: f is the source on equal cells, H the member's response (its
    Green's kernel over each cell, ends and ambient included). Minimised is the sum of
    (residual / sd)**2 plus strength times the roughness of f. The mean of f, unknown prescribed
    amounts, free motions and `coef` are not penalised.

    Parameters
    ----------
    member : Member, mapping or None
        A member, or the keys of `[member]` for `srcfit.make_member`. None: a string of unit
        tension that reaches past the positions by 5 % of their span, its ends at unknown heights;
        then f is minus the second derivative of the profile.
    quantity : str
        What the readings are: "response" and the other quantities of `srcfit.kernel`, or a sensor
        kind of the member. Readings of the response itself are absolute (temperatures in K).
    cells : int
        Number of equal cells, 3 or more.
    roughness : {0, 1, 2} or float
        Order of the derivative of f whose square is integrated, or (a float) the correlation
        length [m] of a Matern 3/2 covariance.
    choose : str
        Criterion for the strength: evidence (not for cuts), gcv, robust-gcv, leave-one-out,
        k-fold, l-curve, discrepancy or risk (these two need `sd`).
    strength : float, optional
        The strength itself, in SI (for cuts the number of shapes kept); then nothing is chosen.
    sd : float, optional
        Standard deviation of a reading of weight 1 [SI]. None: unknown, and `strength` counts
        as if it were 1.
    solver : {"tikhonov", "eigenbasis", "svd-cut"}
    distance : float, optional
        Depth below the axis [m], for strains of a beam.

    Attributes
    ----------
    source_ : (cells,) array
        Source density on each cell [SI].
    edges_ : (cells + 1,) array
        Cell edges [m].
    coef_ : (p - 1,) array
        Effect of each further column of X, reading per unit.
    unknowns_ : dict
        Name -> amount [SI] of what the member prescribes as unknown.
    strength_ : float
        nan where the readings leave nothing to choose by.
    sd_ : float
        Stated or estimated sd of a reading of weight 1; nan where it cannot be estimated.
    undetermined_ : tuple of tuples of str
        Unpenalised unknowns that the readings cannot tell apart (the shortest was taken).
    member_ : Member

    Notes
    -----
    Estimates only: `srcfit.recover` has intervals, zones and findings, and the same source with
    ``roughness = 1, choose = "evidence"``.
    Source: Tikhonov & Arsenin (1977); Wahba (1990), Spline Models for Observational Data.

    Examples
    --------
    A wire between two fixed ends under a uniform load of 5 N/m, read at nine places:

    >>> import numpy as np
    >>> from srcfit.sklearn import SourceRegressor
    >>> wire = {"kind": "cable", "length": "10 m", "tension": "50 N", "left": "fixed",
    ...         "right": "fixed"}
    >>> x = np.arange(1.0, 10.0)
    >>> sag = 5.0 * x * (10.0 - x) / (2 * 50.0)
    >>> model = SourceRegressor(wire, cells=20).fit(x[:, None], sag)
    >>> model.predict([[2.5]]).round(6)
    array([0.9375])
    >>> model.source_[:3].round(4)
    array([5., 5., 5.])
    """

    _parameter_constraints: ClassVar[Mapping[str, Any]] = {
        "member": [Member, Mapping, None],
        "quantity": [str],
        "cells": [Interval(Integral, 3, None, closed="left")],
        "roughness": [Options(Integral, {0, 1, 2}),
                      Interval(RealNotInt, 0, None, closed="neither")],
        "choose": [StrOptions(set(CRITERIA))],
        "strength": [Interval(Real, 0, None, closed="left"), None],
        "sd": [Interval(Real, 0, None, closed="neither"), None],
        "solver": [StrOptions(set(SOLVERS))],
        "distance": [Real, None],
    }  # fmt: skip

    def __init__(
        self,
        member: Member | Mapping[str, Any] | None = None,
        *,
        quantity: str = "response",
        cells: int = 200,
        roughness: int | float = 1,
        choose: str = "evidence",
        strength: float | None = None,
        sd: float | None = None,
        solver: str = "tikhonov",
        distance: float | None = None,
    ) -> None:
        self.member = member
        self.quantity = quantity
        self.cells = cells
        self.roughness = roughness
        self.choose = choose
        self.strength = strength
        self.sd = sd
        self.solver = solver
        self.distance = distance

    def fit(
        self, X: ArrayLike, y: ArrayLike, sample_weight: ArrayLike | None = None
    ) -> SourceRegressor:
        """Learn the source.

        Parameters
        ----------
        X : (n, p)
            First the position [m]; further columns are covariates with an unknown linear effect
            (a temperature less its reference, say; a column of ones is an unknown offset).
        y : (n,)
            Readings [SI], in the member's own sign.
        sample_weight : (n,), optional
            Readings of weight w have the sd ``sd / sqrt(w)``; those of weight 0 are left out.

        Returns
        -------
        SourceRegressor
            Itself.

        Raises
        ------
        ValueError
            For parameters, positions or weights that cannot be used.
        SrcfitError
            When the member cannot be computed or the criterion has nothing to say.
        """
        self._validate_params()
        options = {"dtype": np.float64, "y_numeric": True, "ensure_min_samples": 2}
        data, target = validate_data(self, X, y, **options)
        if self.strength == 0 and self.solver == "tikhonov":
            raise ValueError("strength must be above 0 with the solver tikhonov.")
        weight = _check_sample_weight(sample_weight, data, dtype=np.float64)
        if (weight < 0).any() or not weight.any():
            raise ValueError("sample_weight must not be negative, nor 0 everywhere.")
        used, target = weight > 0, np.asarray(target, dtype=np.float64)
        with _threads().limit(limits=1):
            return self._fit(data[used], target[used], weight[used])

    def _fit(self, X: Array, y: Array, weight: Array) -> SourceRegressor:
        member = string(X[:, 0]) if self.member is None else self.member
        self.member_ = member if isinstance(member, Member) else make_member(member)
        if self.member_.driven:
            raise ValueError("a driven member has complex readings; use srcfit.recover for it.")
        self._view = look(self.member_, self.quantity, int(self.cells), self.distance)
        self.edges_ = self._view.edges
        problem = self._view.problem(self._places(X), y, X[:, 1:], weight, self.sd)
        self.undetermined_ = undetermined(problem)
        found = _estimate(self, problem)
        self.source_, self.strength_ = found.source, found.strength
        self.sd_ = found.noise if self.sd is None else float(self.sd)
        self._amounts, self.coef_ = np.split(found.amounts, [problem.B.shape[1] - X.shape[1] + 1])
        self.unknowns_ = self._view.absolute(self._amounts)
        return self

    def predict(self, X: ArrayLike) -> Array:
        """Predict readings at other places.

        Parameters
        ----------
        X : (n, p)
            As in `fit`. Positions must be on the member; the plain string (``member=None``) goes
            on beyond its ends at their heights.

        Returns
        -------
        (n,) array [SI]

        Raises
        ------
        ValueError for positions off the member.
        """
        check_is_fitted(self)
        data = validate_data(self, X, dtype=np.float64, reset=False)
        with _threads().limit(limits=1):
            cells, columns, known = self._view.rows(self._places(data))
        found = known + cells @ self.source_ + columns @ self._amounts
        return np.asarray(found + data[:, 1:] @ self.coef_)

    def _places(self, X: Array) -> Array:
        """Positions, on the member."""
        x, start, end = X[:, 0], self.member_.start, self.member_.end
        slack = 1e-9 * self.member_.length
        wrong = (x < start - slack) | (x > end + slack)
        if wrong.any() and self.member is not None:
            place, span = f"{x[wrong][0]:g} m (first column of X)", f"from {start:g} to {end:g} m"
            raise ValueError(f"the position {place} is not on the member, which runs {span}.")
        return np.asarray(np.clip(x, start, end))


@cache
def _threads() -> ThreadpoolController:
    return ThreadpoolController()  # looking for the libraries takes as long as a small fit


@dataclass(frozen=True)
class _Estimate:
    """Source (m,), amounts (k,) of the unpenalised columns, strength and sd of the noise."""

    source: Array
    amounts: Array
    strength: float
    noise: float


def _estimate(model: SourceRegressor, problem: Problem) -> _Estimate:
    """The estimate at the stated or chosen strength."""
    rough = model.roughness
    rough = int(rough) if isinstance(rough, Integral) else float(rough)
    fr = frame(problem, null_columns(family(rough, problem.grid).base, problem.grid))
    seen = np.linalg.norm(fr.QA) > ROUNDING * np.linalg.norm(problem.A)
    left = np.hypot(np.linalg.norm(fr.Qd), np.linalg.norm(fr.rest))
    if not seen or left <= ROUNDING * np.linalg.norm(problem.d):
        return _unpenalised(fr)
    given: dict[str, Any] = {}
    if model.solver == "eigenbasis":
        given["basis"] = mode_shapes(model.member_, problem.grid, fr.readings)
    elif model.solver == "tikhonov" and model.strength is not None:
        given["strengths"] = np.array([float(model.strength)])
    ladder = SOLVERS[model.solver](problem, roughness=rough, **given)
    at = _rung(ladder, model)
    return _Estimate(
        ladder.estimates[:, at], ladder.columns[:, at], float(ladder.strengths[at]),
        _noise(float(ladder.residual_norms[at]), ladder.readings - float(ladder.dof[at])),
    )  # fmt: skip


def _rung(ladder: Ladder, model: SourceRegressor) -> int:
    """Number of the stated or chosen strength."""
    if model.strength is not None:
        return int(np.argmin(np.abs(ladder.strengths - model.strength)))
    found = choose(ladder, model.choose)
    if found.index < 0:
        what = f"{model.choose} cannot choose a strength here: {found.note}"
        raise SolveError(what, "choose", "choose another criterion or state the strength")
    return found.index


def _unpenalised(fr: Frame) -> _Estimate:
    """Least squares of the unpenalised unknowns alone: they tell all that the readings tell."""
    amounts = fr.solve @ fr.Ud
    shapes = int(fr.problem.constant) + fr.extra.shape[1]
    level = amounts[0] if fr.problem.constant else 0.0
    source = level + fr.extra @ amounts[shapes - fr.extra.shape[1] : shapes]
    residual = (fr.problem.d - fr.U @ fr.Ud)[: fr.readings]
    noise = _noise(float(np.linalg.norm(residual)), fr.readings - fr.U.shape[1])
    return _Estimate(source, amounts[shapes:], float("nan"), noise)


def _noise(norm: float, dof: float) -> float:
    return norm / float(np.sqrt(dof)) if dof > ROUNDING else float("nan")
