"""The ladder: estimates over a grid of strengths or cuts, and all that the criteria need of them.

In the modes Z of the projected problem every rung is a set of filters: the fitted part of mode j
at rung t is fill[j, t] y[j]. So residuals, hat values, leave-one-out residuals and estimates are
matrix products, for all rungs at once.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from srcfit.priors import Family
from srcfit.problem import Array, Questions
from srcfit.solvers.frame import Frame, ask
from srcfit.solvers.spectrum import Spectrum

# a reading whose hat value is this close to 1 is told by nothing else
ALONE = 1e-9


@dataclass(frozen=True)
class Ladder:
    """Estimates over t strengths, ascending in smoothness or in cuts.

    n rows (readings first), c modes, m cells, k columns of `Problem.B`.

    Attributes
    ----------
    solver : str
        As in SOLVERS.
    family : Family
        What the roughness norm measures.
    frame : Frame
    strengths : (t,)
        tau [1 / source**2 of the family's unit] for penalties, the number kept for cuts.
    Z : (n, c)
        Modes; `y` (c,) the readings' part in them, `rest` (n,) what lies beyond.
    fill : (c, t)
        Fitted part of each mode.
    shapes : tuple of matrices
        Factors whose product (m', c) gives the source per amount of each mode.
    amounts : (c, t)
        Amounts of each mode in the source.
    roughness : (t,)
        Roughness norms, sqrt(f'Qf).
    log_evidence : (t,)
        Restricted log likelihood up to a constant shared by all families; nan for cuts.
    """

    solver: str
    family: Family
    frame: Frame
    strengths: Array
    Z: Array
    y: Array
    rest: Array
    fill: Array
    shapes: tuple[Array, ...]
    amounts: Array
    roughness: Array
    log_evidence: Array

    @property
    def readings(self) -> int:
        """Number of rows that are readings."""
        return self.frame.readings

    @cached_property
    def all_residuals(self) -> Array:
        """Whitened residuals of all rows, knowledge included, (n, t)."""
        out = self.Z @ ((1 - self.fill) * self.y[:, None])
        out += self.rest[:, None]
        return np.asarray(out)

    @property
    def residuals(self) -> Array:
        """Whitened residuals of the readings, (readings, t)."""
        return self.all_residuals[: self.readings]

    @cached_property
    def hat(self) -> Array:
        """Diagonal of the hat matrix at the readings, (readings, t)."""
        own = (self.frame.U[: self.readings] ** 2).sum(axis=1)
        return np.asarray(self.Z[: self.readings] ** 2 @ self.fill + own[:, None])

    @cached_property
    def dof(self) -> Array:
        """Effective degrees of freedom, unpenalised columns included, (t,)."""
        return np.asarray(self.hat.sum(axis=0))

    @cached_property
    def leave_one_out(self) -> Array:
        """Residual of each reading when it is left out of the fit, (readings, t).

        nan where nothing but the reading itself tells some unknown. Source: Craven & Wahba
        (1979), Numer. Math. 31, 377 (leaving-out-one lemma).
        """
        free = 1 - self.hat
        free[free < ALONE] = np.nan
        return np.asarray(self.residuals / free)

    @cached_property
    def residual_norms(self) -> Array:
        """Norms of the whitened residuals of the readings, (t,)."""
        return np.asarray(np.linalg.norm(self.residuals, axis=0))

    @cached_property
    def variation(self) -> Array:
        """Source about its unpenalised part on the free cells, (m', t)."""
        f = self.unbalanced
        return f if self.frame.balanced is None else self.frame.balanced @ f

    @cached_property
    def unbalanced(self) -> Array:
        """The same before it is projected onto balanced sources, (m', t)."""
        f = self.amounts
        for factor in reversed(self.shapes):
            f = factor @ f
        return f

    @cached_property
    def unpenalised(self) -> Array:
        """Amounts of the unpenalised columns (constant, further shapes, B), (k', t)."""
        fr = self.frame
        return np.asarray(fr.solve @ (fr.Ud[:, None] - fr.UA @ self.unbalanced))

    @property
    def columns(self) -> Array:
        """Amounts of the columns of `Problem.B`, (k, t)."""
        k = self.frame.problem.B.shape[1]
        return self.unpenalised[len(self.unpenalised) - k :]

    @cached_property
    def estimates(self) -> Array:
        """Source density on every cell, constant included, (m, t)."""
        problem = self.frame.problem
        out = np.zeros((len(problem.grid.unknown), len(self.strengths)))
        f = self.variation.copy()
        shapes = self.frame.extra
        if problem.constant:
            shapes = np.hstack([problem.grid.constants, shapes])
        f += shapes @ self.unpenalised[: shapes.shape[1]]
        if problem.along is not None:
            f += (problem.along[:, :-1] @ self.columns + problem.along[:, -1:])[self.frame.free]
        out[self.frame.free] = f
        return out

    def answers(self, questions: Questions) -> Array:
        """Values of linear questions at every rung, (q, t)."""
        fr, f = self.frame, self.unbalanced
        asked = ask(fr, questions)
        return np.asarray(asked.G @ f + asked.H @ (fr.Ud[:, None] - fr.UA @ f))


def penalised(sp: Spectrum, strengths: Array) -> Ladder:
    """Ladder of one family over strengths tau = 1 / sigma**2 (in units of the noise)."""
    size = sp.V.shape[0]
    return filtered(sp.frame, sp.family, sp.lam, sp.Z, sp.y, (sp.K[:, :size], sp.V), strengths)


def filtered(
    fr: Frame,
    family: Family,
    lam: Array,
    Z: Array,
    y: Array,
    shapes: tuple[Array, ...],
    strengths: Array,
) -> Ladder:
    """Ladder of penalised estimates from modes Z with variances lam; `shapes` give A'Z in C."""
    # one division; the fill is 1 - tau / (lam + tau)
    amounts = 1 / (lam[:, None] + strengths)
    fill = lam[:, None] * amounts
    amounts *= y[:, None]
    rest = fr.rest + fr.rows(fr.Qd) - Z @ y
    return Ladder(
        solver="tikhonov",
        family=family,
        frame=fr,
        strengths=strengths,
        Z=Z,
        y=y,
        rest=rest,
        fill=fill,
        shapes=shapes,
        amounts=amounts,
        roughness=np.sqrt(lam @ amounts**2),
        log_evidence=log_evidence(fr, lam, y, float(rest @ rest), strengths),
    )


def log_evidence(
    fr: Frame,
    lam: Array,
    y: Array,
    beyond: float,
    strengths: Array,
    noise: float | None = None,
) -> Array:
    """Restricted log likelihood at each strength, up to a constant shared by all families, (t,).

    `beyond` is the sum of squares that no mode reaches, `noise` a known variance of the whitened
    noise; an unstated one that is not given is integrated out under a prior uniform in ln s.
    Source: Harville (1977); Wahba (1985), Ann. Stat. 13, 1378.
    """
    energy = misfit(lam, y, beyond, strengths)
    volume = -0.5 * np.log1p(lam[:, None] / strengths).sum(axis=0)
    if fr.problem.stated or noise:
        return np.asarray(volume - 0.5 * energy / (noise or 1.0))
    # readings without any noise at all: as good as the smallest number
    return np.asarray(volume - 0.5 * fr.nu * np.log(np.maximum(energy, np.finfo(float).tiny)))


def misfit(lam: Array, y: Array, beyond: float, strengths: Array) -> Array:
    """Quadratic form d'(I + A C A' / tau)^-1 d of the projected readings, (t,)."""
    return np.asarray(y**2 @ (strengths / (lam[:, None] + strengths)) + beyond)
