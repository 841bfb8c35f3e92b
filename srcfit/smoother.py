"""The estimate as a linear function of the readings, while the weights of its rungs are held.

    value = T d,    T = H U' + sum over ladders of (G - H U'A) shapes diag(gain weights) Z'

in the words of `solvers.frame` and `solvers.ladder`. What a reading moves, what a place is mixed
with and how much noise comes through are all read off T and the hat matrix, without a refit.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from srcfit.bands import Fit
from srcfit.problem import Array, Problem, Questions
from srcfit.solvers.frame import Asked, Frame, ask, frame
from srcfit.solvers.ladder import ALONE, Ladder

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# ladders and rungs with less than this weight change no number that is shown
FAINT = 1e-5
NEVER = 1e-12


@dataclass(frozen=True)
class Part:
    """One ladder of the average, and what q questions take of its c modes.

    Attributes
    ----------
    ladder : Ladder
    weights : (t,)
    gain : (c, t)
        Amount of each mode in the source per amount of it in the readings.
    seen : (q, c)
        What each question takes of a unit amount.
    """

    ladder: Ladder
    weights: Array
    gain: Array
    seen: Array


@dataclass(frozen=True)
class Smoother:
    """The estimate of some questions as a linear function of n rows.

    Attributes
    ----------
    fit : Fit
    frame : Frame
    asked : Asked
        The questions, in the frame.
    parts : tuple of Part
        Empty where there is no smooth part.
    """

    fit: Fit
    frame: Frame
    asked: Asked
    parts: tuple[Part, ...]

    def matrix(self) -> Array:
        """T (q, n), knowledge rows included; nan where a question is undetermined."""
        T = self.asked.H @ self.frame.U.T
        for part in self.parts:
            if part.weights.sum() > FAINT:
                T = T + (part.seen * (part.gain @ part.weights)) @ part.ladder.Z.T
        return np.where(self.asked.determined[:, None], T, np.nan)

    def noise_variance(self) -> Array:
        """Variance (q,) that the noise of all rows gives each estimate."""
        return np.asarray((self.matrix() ** 2).sum(axis=1) * self.fit.noise**2)

    def values(self, part: Part) -> Array:
        """Value of each question at every rung of a ladder, (q, t)."""
        level = self.asked.H @ self.frame.Ud
        return np.asarray(level[:, None] + part.seen @ part.ladder.amounts)

    def moved(self, decades: float) -> tuple[Array, float]:
        """Values (q,) and effective dof were every strength moved by so many decades.

        Between rungs they are interpolated along the ladder; nan for cuts and where a ladder has
        a single rung.
        """
        total, dof = np.zeros(len(self.asked.H)), 0.0
        for part in self.parts:
            ladder = part.ladder
            if ladder.solver != "tikhonov" or len(ladder.strengths) < 2:
                return np.full(len(total), np.nan), float("nan")
            here = np.log10(ladder.strengths)
            turn = 1 if here[-1] > here[0] else -1  # np.interp wants ascending places
            x = here[::turn]
            for q, row in enumerate(self.values(part)):
                total[q] += part.weights @ np.interp(here + decades, x, row[::turn])
            dof += float(part.weights @ np.interp(here + decades, x, ladder.dof[::turn]))
        told: Array = np.where(self.asked.determined, total, np.nan)
        return (told, dof) if self.parts else (np.full(len(total), np.nan), float("nan"))

    def shifts(self, colour: csr_array | None = None) -> Array:
        """How far each reading alone moves each estimate, (q, readings).

        The estimate less the one without that reading, at the same strengths but weighed anew:
        what is left of a rung's evidence is divided by how probable it made the reading. nan
        where nothing but the reading itself tells some unknown.

        Parameters
        ----------
        colour : (readings, readings), optional
            Whitened rows per reading, where neighbours are correlated (see `colours`).

        Notes
        -----
        With residual r and P = I - hat matrix, both seen from the readings, leaving reading i out
        changes T d by T_i r_i / P_ii, and the reading is predicted with variance 1 / P_ii.
        Sources: Craven & Wahba (1979), Numer. Math. 31, 377; Cook & Weisberg, Residuals and
        Influence in Regression (1982), ch. 3.
        """
        fr, n = self.frame, self.frame.readings
        own = np.ones(n) if colour is None else np.asarray(colour.power(2).sum(axis=0)).ravel()
        U = _back(colour, fr.U[:n])
        level, alone = self.asked.H @ U.T, own - (U**2).sum(axis=1)
        if not self.parts:
            left = _back(colour, self.fit.residual[:, None])[:, 0]
            return self._told(level * left / np.where(alone > ALONE * own, alone, np.nan))
        values, weights, kinds = [], [], []
        for part in self.parts:
            keep = part.weights > NEVER
            ladder, Z = part.ladder, _back(colour, part.ladder.Z[:n])
            residual = _back(colour, ladder.residuals[:, keep])
            free = alone[:, None] - Z**2 @ ladder.fill[:, keep]
            free = np.where(free > ALONE * own[:, None], free, np.nan)
            gone = residual / free
            gain = part.gain[:, keep]
            step = np.stack([(Z * row) @ gain for row in part.seen]) + level[:, :, None]
            values.append(self.values(part)[:, None, keep] - step * gone)
            weights.append(np.tile(part.weights[keep], (n, 1)))
            kinds.append(self._surprise(ladder, keep, residual, free))
        value = np.concatenate(values, axis=2)
        weight = np.concatenate(weights, axis=1)
        if weight.shape[1] > 1 and np.isfinite(weight).all():
            odds = np.concatenate(kinds, axis=1)
            weight = weight * np.exp(odds - odds.max(axis=1, keepdims=True))
        weight = weight / weight.sum(axis=1, keepdims=True)
        mean = sum(self.values(p) @ p.weights for p in self.parts)
        return self._told(np.asarray(mean)[:, None] - (value * weight).sum(axis=2))

    def _surprise(
        self, ladder: Ladder, keep: NDArray[np.bool_], residual: Array, free: Array
    ) -> Array:
        """Minus the log probability of each reading given the others, (readings, t)."""
        lost = residual**2 / free
        if self.frame.problem.stated:
            return np.asarray(0.5 * lost - 0.5 * np.log(free))
        rough = ladder.strengths * ladder.roughness**2
        energy = ((ladder.all_residuals**2).sum(axis=0) + rough)[keep]
        left = np.maximum(energy - lost, np.finfo(float).tiny)
        nu = self.frame.nu
        ratio = nu * np.log(energy) - (nu - 1) * np.log(left)
        return np.asarray(0.5 * ratio - 0.5 * np.log(free))

    def _told(self, rows: Array) -> Array:
        return np.where(self.asked.determined[:, None], rows, np.nan)

    def free(self, patterns: Array) -> Array:
        """Variance c'(I - H)c (p,) of the residuals along whitened patterns (readings, p).

        In units of the noise's variance; the hat matrix averaged like everything else.
        """
        fr = self.frame
        n = len(patterns)
        left = (patterns**2).sum(axis=0) - ((fr.U[:n].T @ patterns) ** 2).sum(axis=0)
        for part in self.parts:
            if part.weights.sum() > FAINT:
                along = (part.ladder.Z[:n].T @ patterns) ** 2
                left = left - (part.ladder.fill @ part.weights) @ along
        return np.asarray(left)


def _back(colour: csr_array | None, rows: Array) -> Array:
    return rows if colour is None else np.asarray(colour.T @ rows)


def smoother(problem: Problem, fit: Fit, questions: Questions) -> Smoother:
    """The linear map behind a fit, for some questions."""
    if not fit.ladders:
        fr = frame(problem)
        return Smoother(fit, fr, ask(fr, questions), ())
    fr = fit.ladders[0].frame
    asked = ask(fr, questions)
    parts = []
    for ladder, weights in zip(fit.ladders, fit.weights, strict=True):
        shapes = ladder.shapes[-1]
        for factor in ladder.shapes[-2::-1]:
            shapes = factor @ shapes
        seen = np.asarray(asked.G @ shapes - asked.H @ (fr.UA @ shapes))
        parts.append(Part(ladder, weights, _gain(ladder), seen))
    return Smoother(fit, fr, asked, tuple(parts))


def _gain(ladder: Ladder) -> Array:
    """Amounts of the modes per unit of the readings' part in them, (c, t)."""
    y = ladder.y[:, None]
    silent = y == 0
    gain = ladder.amounts / np.where(silent, 1.0, y)
    if not silent.any():
        return np.asarray(gain)
    if ladder.solver != "tikhonov":
        return np.asarray(ladder.fill)
    return np.where(silent, (1 - ladder.fill) / ladder.strengths, gain)


def colours(before: NDArray[np.intp], lag: Array) -> csr_array | None:
    """Whitened rows per reading of first-order autoregressive noise; None where it has none.

    Parameters
    ----------
    before : (n,) int
        Row of the neighbour before; -1 where there is none.
    lag : (n,)
        Correlation with it, 0 where there is none.
    """
    here = np.flatnonzero(lag)
    if not len(here):
        return None
    from scipy.sparse import csr_array

    size = np.sqrt(1 - lag**2)
    every = np.arange(len(lag))
    places = np.concatenate([every, here]), np.concatenate([every, before[here]])
    values = np.concatenate([1 / size, -lag[here] / size[here]])
    return csr_array((values, places), shape=(len(lag), len(lag)))
