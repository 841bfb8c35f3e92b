"""Solvers: a problem in, a ladder out. A new solver is one function and its line here."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from srcfit.solvers.cuts import eigenbasis, svd_cut
from srcfit.solvers.ladder import Ladder
from srcfit.solvers.tikhonov import tikhonov

Solver = Callable[..., Ladder]

SOLVERS: Mapping[str, Solver] = {
    "tikhonov": tikhonov,
    "eigenbasis": eigenbasis,
    "svd-cut": svd_cut,
}
