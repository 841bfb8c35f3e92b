"""Features that the readings themselves demand: blocks and bumps at places nobody drew.

A smooth family bends to a hot joint or a stacked load by growing rough everywhere. So each of many
blocks, bumps and steps is tried as one more term of unknown size beside every family and strength;
where the readings make it likely that one of them acts, taking into account how many were tried,
its shape joins the drawn edges among the steps of the families, which weigh it afresh. Then the
next one is looked for.

Source: Kass & Raftery (1995), J. Am. Stat. Assoc. 90, 773, for what Bayes factors are worth; one
more term by the matrix determinant lemma and the formula of Sherman and Morrison.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from srcfit.bands import FEWEST, Ground, level_of, weighed
from srcfit.priors import estimate_families, natural
from srcfit.problem import Array, Grid, Problem
from srcfit.solvers.frame import Frame, frame
from srcfit.solvers.spectrum import Spectrum, spectrum

# log of the odds beyond which a feature is worth having: twenty to one
ODDS = 3.0
MOST = 4
# widths grow by this factor between these parts of the member, places by half a width
GROWTH, WIDEST, NARROWEST = 1.5, 0.45, 0.015
# every how many rungs a feature is tried at
STRIDE = 3
# sizes that are thought of, over the mean level of the source
SIZES = (2.0, 10.0)
# ends that are tried once a stretch is found, over half its width, and how often at the most
NEAR: Array = np.linspace(-1.0, 1.0, 11)
CLOSER = 6
# how many ways of differing are kept, and how large a part of the feature they must be
WAYS, FAINTEST = 3, 0.05
# a feature's column is scaled to the size it seems to have, within these
FAINT, LOUD = 1.0, 10.0


def featured(problem: Problem) -> Problem:
    """The problem with the features that its readings demand in its grid, maybe none.

    Looked for beside the evidence-averaged families; not in complex amplitudes.
    """
    fr = frame(problem)
    if not len(fr.free) or fr.nu < FEWEST or problem.grid.parts > 1:
        return problem
    ground = weighed(fr)
    found = _demanded(fr, ground, level_of(fr, ground))
    return replace(problem, grid=replace(problem.grid, features=found))


def _demanded(fr: Frame, ground: Ground, size: float) -> Array:
    """Columns (m', k) of the features, for a source of mean level `size`."""
    found: Array = np.zeros((len(fr.free), 0))
    count = 0
    if size <= 0:
        return found
    x, step = _along(fr.problem.grid)
    a, b = _stretches(step)
    drawn = ground.drawn
    tried = np.hstack([drawn, shapes(x, a, b)])
    seen = fr.QA @ tried
    spectra = [w.spectrum for w in ground.averaged]
    sigma = ground.sigma[::STRIDE]
    while count < MOST:
        likely, amounts, plain = _tried(spectra, sigma, seen, size)
        if np.logaddexp.reduce(likely) - np.log(len(likely)) - plain < ODDS:
            break
        best = int(np.argmax(likely))
        columns = amounts[best] * tried[:, best, None]
        if best >= drawn.shape[1]:
            which = (best - drawn.shape[1]) % len(a)
            stretch = float(a[which]), float(b[which])
            for _ in range(CLOSER):
                first, last = _around(*stretch, step)
                near = shapes(x, first, last)
                likely, amounts, _ = _tried(spectra, sigma, fr.QA @ near, size)
                which = int(np.argmax(likely)) % len(first)
                before, stretch = stretch, (float(first[which]), float(last[which]))
                if max(abs(p - q) for p, q in zip(before, stretch, strict=True)) < step / 2:
                    break
            columns = _open(near * amounts, np.exp(likely - np.logaddexp.reduce(likely)))
        found, count = np.hstack([found, columns]), count + 1
        steps = np.hstack([drawn, found])
        families = estimate_families(steps)
        spectra = [spectrum(fr, f, ground.products, steps) for f in families]
    return found


def _open(near: Array, share: Array) -> Array:
    """Mean of shapes (m', J) by their shares, then the main ways in which they differ from it.

    The latter change sign and carry what is open about the feature's place and width.
    """
    mean = near @ share
    U, s, _ = np.linalg.svd((near - mean[:, None]) * np.sqrt(share), full_matrices=False)
    kept = s[:WAYS] > FAINTEST * np.linalg.norm(mean)
    return np.column_stack([mean, (U * s)[:, :WAYS][:, kept]])


def shapes(x: Array, a: Array, b: Array) -> Array:
    """Blocks from a to b, then bumps, at places x along the free cells, (m', 2 J)."""
    part = (x[:, None] - a) / (b - a)
    inside = (part > 0) & (part < 1)
    return np.hstack([inside.astype(float), np.where(inside, np.sin(np.pi * part) ** 2, 0.0)])


def _along(grid: Grid) -> tuple[Array, float]:
    """Middles of the free cells as parts of their whole length, and the widest cell."""
    widths = grid.widths[grid.free]
    return (np.cumsum(widths) - widths / 2) / widths.sum(), float(widths.max() / widths.sum())


def _stretches(step: float) -> tuple[Array, Array]:
    """Starts and ends of the stretches that are tried; steps start before the member."""
    starts, ends = [], []
    width = max(2 * step, NARROWEST)
    for at in np.arange(width, 1.0, width):
        starts.append(-1.0)
        ends.append(float(at))
    while width < WIDEST:
        places = np.arange(0.0, 1.0 - width + 1e-9, width / 2)
        starts += list(places)
        ends += list(places + width)
        width *= GROWTH
    return np.array(starts), np.array(ends)


def _around(a: float, b: float, step: float) -> tuple[Array, Array]:
    """Starts and ends near those of one stretch."""
    reach = max((b - a) / 2 if a >= 0 else NARROWEST, 2 * step)
    first, second = np.meshgrid(a + reach * NEAR if a >= 0 else [a], b + reach * NEAR)
    kept = second - first >= step
    return first[kept], second[kept]


def _tried(
    spectra: Sequence[Spectrum], sigma: Array, seen: Array, size: float
) -> tuple[Array, Array, float]:
    """Log evidence with each feature (J,), its size in steps of its family, and that without."""
    without, with_one, amounts = [], [], []
    power = (seen**2).sum(axis=0)
    for sp in spectra:
        fr = sp.frame
        own = sigma * natural(sp.family.base, fr.problem.grid)
        shrink = 1 / (1 + sp.lam[:, None] * own**2)
        part = sp.V.T @ seen
        beyond = np.maximum(power - (part**2).sum(axis=0), 0.0)[:, None]
        told = (part**2).T @ shrink + beyond
        match = (part * sp.y[:, None]).T @ shrink
        energy = sp.y**2 @ shrink + float(sp.rest @ sp.rest)
        volume = 0.5 * np.log(shrink).sum(axis=0)
        noise = 1.0 if fr.problem.stated else energy / fr.nu
        tries = []
        for times in SIZES:
            spread = (times * size) ** 2 / noise
            gain = spread * match**2 / (1 + spread * told)
            tries.append(-0.5 * np.log1p(spread * told) + _evidence(fr, energy - gain, volume))
        without.append(_evidence(fr, energy, volume))
        with_one.append(np.logaddexp(*tries) - np.log(len(SIZES)))
        amounts.append(np.abs(match) / np.maximum(told, np.finfo(float).tiny) / (2 * sigma))
    one, amount = np.concatenate(with_one, axis=1), np.concatenate(amounts, axis=1)
    best = np.take_along_axis(amount, np.argmax(one, axis=1)[:, None], axis=1)[:, 0]
    likely = np.logaddexp.reduce(one, axis=1)
    plain = float(np.logaddexp.reduce(np.concatenate(without)))
    return likely, np.clip(best, FAINT, LOUD), plain


def _evidence(fr: Frame, energy: Array, volume: Array) -> Array:
    if fr.problem.stated:
        return np.asarray(volume - 0.5 * energy)
    least = np.finfo(float).tiny
    return np.asarray(volume - 0.5 * fr.nu * np.log(np.maximum(energy, least)))
