"""Stepped members with 50 and more digits: products of exact transfer matrices.

A product of growing exponentials is harmless when enough digits are carried, which is what makes
this an independent check of any method that avoids such products.

Order 2: z = (u, p u'); order 4: z = (u, psi, M, V) with M = -EI psi', V = M' + T u',
u' = psi + M'/S where a shear stiffness S is given (else psi = u').
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import mpmath as mp

RIGID = float("inf")
DIGITS = 50


@dataclass(frozen=True)
class Stepped:
    """A stepped member: pieces (from, to, dict of its constant coefficients).

    Order 2 pieces have p, q; order 4 pieces have p2, p1, p0 and perhaps shear. `left`, `right`
    are springs per response (and per rotation), RIGID holds. `points` holds
    (at, "spring", k), (at, "held", 0), (at, "hinge", k) or (at, "interface", resistance).
    """

    order: int
    pieces: tuple
    left: tuple
    right: tuple
    points: tuple = ()


@cache
def _step(order, items, length, digits):
    """Transfer matrix over a length, with two more columns: unit and linear density."""
    k = {name: mp.mpf(value) for name, value in items}
    A = mp.zeros(order + 2)
    if order == 2:
        A[0, 1] = 1 / k["p"]
        A[1, 0] = k["q"]
    else:
        A[1, 2] = -1 / k["p2"]
        A[3, 0] = k["p0"]
        if "shear" in k:
            # M' = V - T u' and u' = psi + M'/S
            share = 1 / (1 + k["p1"] / k["shear"])
            A[0, 1], A[0, 3] = share, share / k["shear"]
        else:
            A[0, 1] = 1
        A[2, 1] = -k["p1"] * A[0, 1]
        A[2, 3] = 1 - k["p1"] * A[0, 3]
    A[order - 1, order] = -1  # the last component falls with the density ...
    A[order, order + 1] = 1  # ... which is (value, slope)
    return mp.expm(A * mp.mpf(length))


def kernel(member, x, s, read=None, cells=None):
    """Response (or a row `read` of the state) at the places x to unit lumped sources at s.

    Parameters
    ----------
    read : row on the state, default the response
    cells : give (edges, start values, slopes): one response column to a piecewise linear density

    Returns
    -------
    list of lists of mpf, [x][s] (one column with `cells`)
    """
    edges = cells[0] if cells else []
    stops = sorted(
        {e for a, b, _ in member.pieces for e in (a, b)} | set(x) | set(s) | set(edges)
        | {p[0] for p in member.points}
    )  # fmt: skip
    n, half = member.order, member.order // 2
    growth = sum((b - a) * _rate(n, k) for a, b, k in member.pieces)
    with mp.workdps(DIGITS + int(growth)):
        columns = [
            _shoot(member, stops, x, source, read, cells, n, half) for source in (s or [None])
        ]
        return [[column[i] for column in columns] for i in range(len(x))]


def _rate(order, k):
    if order == 2:
        return abs(k["q"] / k["p"]) ** 0.5
    rate = (abs(k["p0"] / k["p2"])) ** 0.25 + abs(k["p1"] / k["p2"]) ** 0.5
    return rate + (abs(k["p0"] / k["shear"]) ** 0.5 if "shear" in k else 0.0)


def _shoot(member, stops, x, source, read, cells, n, half):
    """Carry z = unknown start values and unknown jumps, then meet all conditions."""
    jumps = [p for p in member.points if p[1] != "spring" and p[1] != "interface"]
    count = half + len(jumps)
    # rows of z, columns: the unknowns, then the given part
    z = mp.zeros(n, count + 1)
    _begin(z, member.left, n)
    conditions, seen, number = [], {}, half
    for i, place in enumerate(stops):
        for at, what, amount in member.points:
            if at != place:
                continue
            if what == "spring":
                z[n - 1, :] += mp.mpf(amount) * z[0, :]
            elif what == "interface":
                z[0, :] += mp.mpf(amount) * z[1, :]
            elif what == "held":
                conditions.append(z[0, :])
                z[n - 1, number] += 1
                number += 1
            else:
                row = z[2, :].copy()
                row[0, number] += mp.mpf(amount)  # M = -spring * jump of psi
                conditions.append(row)
                z[1, number] += 1
                number += 1
        if source == place:
            z[n - 1, count] -= 1
        if place in x:
            seen[place] = z.copy()
        if i + 1 < len(stops):
            z = _carry(member, z, place, stops[i + 1], cells, n, count)
    if stops[-1] in x and source == stops[-1]:
        raise ValueError("keep reading and source apart at the right end")
    conditions += _finish(z, member.right, n)
    A = mp.matrix([[row[0, j] for j in range(count)] for row in conditions])
    b = mp.matrix([-row[0, count] for row in conditions])
    # rows differ by hundreds of decades on long members: scale them
    for i in range(count):
        size = max(abs(A[i, j]) for j in range(count))
        for j in range(count):
            A[i, j] /= size
        b[i] /= size
    unknown = [*list(mp.lu_solve(A, b)), mp.mpf(1)]
    row = read or [1] + [0] * (n - 1)
    return [
        sum(r * z[i, j] * unknown[j] for i, r in enumerate(row) if r for j in range(count + 1))
        for z in (seen[place] for place in x)
    ]


def _begin(z, end, n):
    """Free start values of the left end: what its springs leave open."""
    if n == 2:
        z[0, 0], z[1, 0] = (0, 1) if end[0] == RIGID else (1, mp.mpf(end[0]))
        return
    deflection, rotation = end
    # V = k u and M = -c psi just right of the left end
    if deflection == RIGID:
        z[3, 0] = 1
    else:
        z[0, 0], z[3, 0] = 1, mp.mpf(deflection)
    if rotation == RIGID:
        z[2, 1] = 1
    else:
        z[1, 1], z[2, 1] = 1, -mp.mpf(rotation)


def _finish(z, end, n):
    """Rows that must vanish at the right end."""
    if n == 2:
        return [z[0, :] if end[0] == RIGID else z[1, :] + mp.mpf(end[0]) * z[0, :]]
    deflection, rotation = end
    return [
        z[0, :] if deflection == RIGID else z[3, :] + mp.mpf(deflection) * z[0, :],
        z[1, :] if rotation == RIGID else z[2, :] - mp.mpf(rotation) * z[1, :],
    ]


def _carry(member, z, a, b, cells, n, count):
    k = next(k for lo, hi, k in member.pieces if lo <= (a + b) / 2 <= hi)
    T = _step(n, tuple(sorted(k.items())), mp.mpf(b) - mp.mpf(a), mp.mp.dps)
    out = T[:n, :n] * z
    if cells:
        edges, values, slopes = cells
        i = next(i for i in range(len(values)) if edges[i] <= (a + b) / 2 <= edges[i + 1])
        value = mp.mpf(values[i]) + mp.mpf(slopes[i]) * (mp.mpf(a) - mp.mpf(edges[i]))
        for j in range(n):
            out[j, count] += T[j, n] * value + T[j, n + 1] * mp.mpf(slopes[i])
    return out
