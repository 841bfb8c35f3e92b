"""Which readings are gross outliers: so far from all others that no source could have made them.

At every strength the column of one reading alone and those of sources narrower than a cell
compete for the misfit, the best first. A source that neighbours see explains more than one
reading and wins; a reading that does not win clearly over all sources is unsure. Of all
explanations, at any strength and with any number of suspects, the likeliest is taken.

Sources: Cook, Holschuh & Weisberg (1982), J. R. Stat. Soc. B 44, 370, and Thompson (1985),
J. R. Stat. Soc. B 47, 53, for an outlier as one reading with a noise of its own, found by
restricted likelihood; Mallat & Zhang (1993), IEEE Trans. Signal Process. 41, 3397, for pursuit of
the best column first.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from srcfit.noise import few
from srcfit.problem import Array, Problem
from srcfit.solvers.frame import Frame
from srcfit.solvers.ladder import ALONE, misfit, penalised
from srcfit.whitening import Links, Rows

Mask = NDArray[np.bool_]

# chance that a sound set of readings holds one that is called gross; no bound below LEAST
SURE, LEAST = 0.001, 3.5
# log likelihood by which a reading must explain a misfit better than any source
MARGIN = 3.0
# no more than this part of the readings can be gross
PART = 0.25
# picks in a row that gain nothing before a path is given up
VAIN = 4
# median of chi-square with one degree of freedom
CHI = 0.4549364231195724


def gross(n: int, dof: float | None = None) -> float:
    """Standard deviations beyond which one of n readings is gross.

    By the normal law, or by Student's with `dof` degrees of freedom where the noise is not stated.
    """
    from scipy.special import ndtri, stdtrit

    p = SURE / max(n, 1)
    return max(float(-ndtri(p) if dof is None else -stdtrit(max(dof, 1.0), p)), LEAST)


@dataclass(frozen=True)
class View:
    """One family of sources on t rungs: what it leaves of the rows, and how it sees new columns.

    The rows' precision, unpenalised columns projected out, is P = I - U U' - Z diag(fill) Z'.

    Attributes
    ----------
    residual : (n, t)
        P d.
    energy : (t,)
        d'P d.
    volume : (t,)
        Log determinant part of the log restricted likelihood.
    weights : (t,)
        Evidence, 1 in all over the views.
    """

    fr: Frame
    Z: Array
    fill: Array
    residual: Array
    energy: Array
    volume: Array
    weights: Array

    def sizes(self, U: Array, Z: Array, squares: Array, at: int | slice = slice(None)) -> Array:
        """Sizes c'P c of columns c, from their products with U and Z and their squares."""
        own = squares - (U**2).sum(axis=1)
        seen = Z**2 @ self.fill[:, at]
        left = (own[:, None] if seen.ndim == 2 else own) - seen
        floor = ALONE * (squares[:, None] if seen.ndim == 2 else squares)
        return np.asarray(np.where(left > floor, left, np.inf))

    def times(self, column: Array, at: int) -> Array:
        """P c at one rung."""
        U, Z = self.fr.U, self.Z
        smooth = Z @ (self.fill[:, at] * (Z.T @ column))
        return np.asarray(column - U @ (U.T @ column) - smooth)


def views(problem: Problem) -> list[View]:
    """A few families of a problem; without a smooth part only the unpenalised columns."""
    fr, found = few(problem)
    if not found:
        left = problem.d - fr.U @ fr.Ud
        Z, fill, one = np.zeros((len(left), 0)), np.zeros((0, 1)), np.ones(1)
        return [View(fr, Z, fill, left[:, None], one * (left @ left), 0 * one, one)]
    out = []
    for w in found:
        sp, tau = w.spectrum, w.sigma**-2.0
        ladder = penalised(sp, tau)
        volume = -0.5 * np.log1p(sp.lam[:, None] / tau).sum(axis=0)
        energy = misfit(sp.lam, sp.y, float(sp.rest @ sp.rest), tau)
        out.append(
            View(fr, sp.Z, ladder.fill, ladder.all_residuals, energy, volume, w.weights)
        )  # fmt: skip
    return out


@dataclass(frozen=True)
class Columns:
    """What an error of each reading alone does to the whitened rows, as columns W e_i.

    `weight` is that of the rows, `links` their correlation.
    """

    links: Links
    weight: Array

    def seen(self, rows: Array) -> Array:
        """Products with each column, (n, ...), of whitened rows (n + pseudo, ...)."""
        n = len(self.weight)
        lag = self.links.lag.reshape(-1, *[1] * (rows.ndim - 1))
        scale = 1 / np.sqrt(1 - lag**2)
        out = scale * rows[:n]
        here = np.flatnonzero(self.links.lag)
        out[self.links.before[here]] -= (lag * scale)[here] * rows[here]
        return np.asarray(out * np.sqrt(self.weight).reshape(lag.shape))

    @property
    def squares(self) -> Array:
        """Squared norms of the columns, (n,)."""
        share = 1 / (1 - self.links.lag**2)
        out = share.copy()
        here = np.flatnonzero(self.links.lag)
        out[self.links.before[here]] += self.links.lag[here] ** 2 * share[here]
        return np.asarray(out * self.weight)

    def one(self, i: int, rows: int) -> Array:
        """Column i, (rows,)."""
        column = np.zeros(rows)
        share = 1 / np.sqrt(1 - self.links.lag**2)
        column[i] = share[i]
        for j in np.flatnonzero((self.links.before == i) & (self.links.lag != 0)):
            column[j] = -self.links.lag[j] * share[j]
        return np.asarray(column * np.sqrt(self.weight[i]))


@dataclass
class Path:
    """Columns picked one after another at one rung, the best first.

    Attributes
    ----------
    view, at : where
    g, q : products c'P d and c'P c of the columns of readings, what was picked taken out
    far, wide : the same of the cells
    energy, common : what is left of d'P d, and the noise's variance as most readings show it
        (by their median, at least a stated one), before and after every pick
    picks : (row of a reading or -1 for a source, squared distance in whitened units)
    unsure : (number of picks before, row) where a source explained a row about as well
    """

    view: View
    at: int
    g: Array
    q: Array
    far: Array
    wide: Array
    energy: list[float]
    common: list[float]
    basis: list[Array] = field(default_factory=list)
    picks: list[tuple[int, float]] = field(default_factory=list)
    unsure: list[tuple[int, int]] = field(default_factory=list)


def _score(
    volume: float | Array, energy: float | Array, nu: int, k: int | Rows, stated: bool
) -> tuple[Array, Array]:
    """Log restricted likelihood after k picks, and the noise's variance."""
    if stated:
        return np.asarray(volume - 0.5 * (energy + k)), np.ones(np.shape(energy))
    s2 = np.maximum(energy / np.maximum(nu - k, 1), np.finfo(float).tiny)
    return volume - 0.5 * (energy / s2 + nu * np.log(s2) + k), s2


def _larger(v: View, stated: bool) -> Array:
    """Log restricted likelihood (t,) without outliers, under a noise no smaller than stated."""
    s2 = np.maximum(v.energy / v.fr.nu, 1.0 if stated else np.finfo(float).tiny)
    return np.asarray(v.volume - 0.5 * (v.energy / s2 + v.fr.nu * np.log(s2)))


def _cost(n: int, nu: int, most: int, stated: bool) -> Array:
    """What each pick must gain (most,): as much as one that lies at the bound of `gross`."""
    k = np.arange(1, most + 1)
    c2 = np.array([gross(n, None if stated else nu - int(j)) ** 2 for j in k])
    if stated:
        return np.asarray(0.5 * (c2 - 1) - 0.5 * np.log(c2))
    return np.asarray(0.5 * nu * np.log((nu - k + c2) / (nu - k + 1)) - 0.5 * np.log(c2))


def propose(problem: Problem, links: Links, sign: int = 0) -> tuple[Array, Rows]:
    """Squared distance of each row that is suspected (0 of all others), and the unsure rows.

    `sign`: 1 or -1 where the source is known to have no other; then none is to blame for a
    misfit that would take the other. Distances are in units of the noise's variance.

    Every rung of every family is asked; the best explanation of all rows wins.
    """
    n = len(problem.d) - problem.pseudo
    columns = Columns(links, np.ones(n))
    squares, nothing = columns.squares, (np.zeros(n), np.zeros(0, dtype=np.intp))
    found = views(problem)
    fr = found[0].fr
    most = min(int(PART * n), fr.nu - 3)
    if most < 1:
        return nothing
    costs = np.append(0.0, np.cumsum(_cost(n, fr.nu, most, problem.stated)))
    # the rivals of all suspicion: no outlier, or, as unlikely as one, a noise larger than stated
    best = max(
        float(np.maximum(
            _score(v.volume, v.energy, fr.nu, 0, problem.stated)[0],
            _larger(v, problem.stated) - costs[1],
        ).max())
        for v in found
    )  # fmt: skip
    U, chosen = columns.seen(fr.U), None
    for v in found:
        g = columns.seen(v.residual)
        q = v.sizes(U, columns.seen(v.Z), squares)
        hopes = _hopes(v, g**2 / q, costs, problem.stated)
        for at in np.argsort(-hopes):
            if hopes[at] <= best:
                break
            path = _pursue(problem, columns, v, int(at), g[:, at], q[:, at], costs, sign)
            scores, s2 = _scores(path, fr.nu, costs, problem.stated)
            k = int(np.argmax(np.where(_gross(path, gross(n) ** 2), scores, -np.inf)))
            if k and scores[k] > best:
                best, chosen = float(scores[k]), (path, k, float(s2[k]))
    if chosen is None:
        return nothing
    path, k, one = chosen
    distance = np.zeros(n)
    for row, t2 in path.picks[:k]:
        if row >= 0:
            distance[row] = t2 / one
    return distance, np.array([row for pick, row in path.unsure if pick < k], dtype=np.intp)


def _scores(path: Path, nu: int, costs: Array, stated: bool) -> tuple[Array, Array]:
    """Score after each number of picks, and the noise's variance."""
    k = np.arange(len(path.energy))
    scores, s2 = _score(path.view.volume[path.at], np.array(path.energy), nu, k, stated)
    logs = np.concatenate([[0.0], np.cumsum([np.log(max(t2, 1e-300)) for _, t2 in path.picks])])
    return np.asarray(scores - 0.5 * (logs - k * np.log(s2)) - costs[: len(k)]), s2


def _gross(path: Path, bound: float) -> Mask:
    """For each number of picks whether all of them are gross beside what most readings show."""
    least = np.minimum.accumulate([np.inf, *(t2 for _, t2 in path.picks)])
    return np.asarray(least > bound * np.array(path.common))


def _hopes(v: View, t2: Array, costs: Array, stated: bool) -> Array:
    """Best score (t,) that the farthest readings could reach, were they independent.

    Neighbouring rungs tell much the same: all but every third are -inf.
    """
    most = len(costs) - 1
    top = -np.sort(-t2, axis=0)[:most]
    k = np.arange(most + 1)[:, None]
    none = np.zeros((1, t2.shape[1]))
    left = v.energy - np.concatenate([none, np.cumsum(top, axis=0)])
    left = np.maximum(left, 1e-12 * v.energy)
    scores, s2 = _score(v.volume, left, v.fr.nu, k, stated)
    logs = np.concatenate([none, np.cumsum(np.log(np.maximum(top, 1e-300)), axis=0)])
    scores = scores - 0.5 * (logs - k * np.log(s2)) - costs[:, None]
    third = np.arange(t2.shape[1]) % 3 == 0
    return np.asarray(np.where(third, scores[1:].max(axis=0), -np.inf))


def _pursue(
    problem: Problem, columns: Columns, v: View, at: int, g: Array, q: Array, costs: Array,
    sign: int,
) -> Path:  # fmt: skip
    """Pick columns of readings and of narrow sources at one rung until nothing is gained."""
    n, rows = len(g), len(problem.d)
    A = problem.A[:, problem.grid.unknown]
    norms = np.linalg.norm(A, axis=0)
    # without a cell that any row sees, one column of zeros that is never picked
    A = A[:, norms > 0] / norms[norms > 0] if norms.any() else np.zeros((rows, 1))
    wide = v.sizes(A.T @ v.fr.U, A.T @ v.Z, (A**2).sum(axis=0), at)
    floor = 1.0 if problem.stated else 0.0
    path = Path(
        v, at, g.copy(), q.copy(), A.T @ v.residual[:, at], wide, [float(v.energy[at])],
        [_common(g, q, floor)],
    )  # fmt: skip
    bound = gross(n) ** 2
    while len(path.picks) < len(costs) - 1:
        t2, s2 = path.g**2 / path.q, path.far**2 / path.wide
        s2[sign * path.far < 0] = 0.0
        i, j = int(np.argmax(t2)), int(np.argmax(s2))
        best = max(float(t2[i]), float(s2[j]))
        if best <= bound * floor or path.energy[-1] <= 1e-9 * path.energy[0]:
            break
        one = 1.0 if problem.stated else path.common[-1]
        near, gone = best - 2 * MARGIN * one, bound * one
        if t2[i] >= best:
            lifted = _lifted(path, columns.one(i, rows))
            rivals = _after(path.far, path.wide, A.T @ lifted, path.g[i], path.q[i])
            same = np.flatnonzero((s2 >= near) & (rivals <= gone))
            if len(same):
                j = int(same[np.argmax(s2[same])])
            else:
                _take(path, columns, A, lifted, i, float(path.g[i]), float(path.q[i]))
        if t2[i] < best or len(same):
            lifted = _lifted(path, A[:, j])
            rivals = _after(path.g, path.q, columns.seen(lifted), path.far[j], path.wide[j])
            row = int(np.argmax(np.where(rivals <= gone, t2, 0.0)))
            if t2[row] >= near:
                path.unsure.append((len(path.picks), row))
            _take(path, columns, A, lifted, -1, float(path.far[j]), float(path.wide[j]))
        path.common.append(_common(path.g, path.q, floor))
        scores = _scores(path, v.fr.nu, costs, problem.stated)[0]
        if len(scores) - 1 - int(np.argmax(scores)) >= VAIN:
            break
    return path


def _common(g: Array, q: Array, floor: float) -> float:
    """Variance of the noise by the median of the readings' squared distances."""
    left = np.isfinite(q)
    return max(float(np.median(g[left] ** 2 / q[left])) / CHI, floor) if left.any() else floor


def _lifted(path: Path, column: Array) -> Array:
    """P c with all that was picked before taken out."""
    out = path.view.times(column, path.at)
    if path.basis:
        basis = np.array(path.basis)
        out = out - (basis @ column) @ basis
    return out


def _after(g: Array, q: Array, cross: Array, g0: float, q0: float) -> Array:
    """Squared distances of columns once another one, with products `cross`, is taken out."""
    left = q - cross**2 / q0
    safe = left > 1e-6 * q
    return np.asarray(np.where(safe, (g - cross * g0 / q0) ** 2 / np.where(safe, left, 1.0), 0.0))


def _take(
    path: Path, columns: Columns, A: Array, lifted: Array, row: int, g: float, q: float
) -> None:
    """Take one column out of all the products."""
    b = lifted / np.sqrt(q)
    share = g / np.sqrt(q)
    on_readings, on_cells = columns.seen(b), A.T @ b
    path.g -= on_readings * share
    path.far -= on_cells * share
    path.q = _less(path.q, on_readings)
    path.wide = _less(path.wide, on_cells)
    path.basis.append(b)
    path.energy.append(max(path.energy[-1] - g**2 / q, 0.0))
    path.picks.append((row, g**2 / q))


def _less(q: Array, cross: Array) -> Array:
    """Squared sizes less what was taken out; inf where nothing is left."""
    left = q - cross**2
    return np.asarray(np.where(left > 1e-6 * q, left, np.inf))
