"""Eigenvalues against published ones, closed forms, 50-digit determinants, finite elements.

Whole-line problems cannot be members (a member has two ends); those rows of the reference table
are the exceptions listed in `WHOLE_LINE`. Everything else in the table must come out.
"""

import csv
import functools
import itertools
from pathlib import Path

import mpmath as mp
import numpy as np
import pytest
from eigenproblems import BEAM, COUNT, PI, PROBLEMS, bessel_zeros, general, off, sheared, unit_beam
from pairs import RIGID, member_of_order_2, merged, random_beam, steps
from referees import digits
from scipy import special
from scipy.linalg import eigh
from scipy.optimize import brentq

import srcfit
from srcfit.eigencount import number_below

WHOLE_LINE = {"-y''+x2 y=lam y on R": "the whole line has no ends"}
RIGID_MOTIONS = {"free-free": 2, "free-pinned": 1}


@functools.cache
def reference():
    """(problem, boundary) -> values by number."""
    path = Path(__file__).parent.parent / "datasets" / "eigen_reference.csv"
    lines = [s for s in path.read_text(encoding="utf-8").splitlines() if not s.startswith("#")]
    found = {}
    for row in csv.DictReader(lines):
        for boundary in row["boundary"].split(" or "):
            found.setdefault((row["problem"], boundary), {})[int(row["k"])] = float(row["value"])
    return found


@functools.cache
def first(key):
    """The first modes of a member of the table."""
    return srcfit.modes(PROBLEMS[key][0], COUNT)


def test_every_row_of_the_table_is_used():
    assert set(reference()) == {*PROBLEMS} | {key for key in reference() if key[0] in WHOLE_LINE}


@pytest.mark.parametrize("key", PROBLEMS, ids=" ".join)
def test_reference(key):
    skipped = RIGID_MOTIONS.get(key[1], 0)
    found = first(key).eigenvalues
    for k, value in reference()[key].items():
        expected = PROBLEMS[key][1](value)
        assert off(found[skipped + k - 1], expected) < 1e-12, (k, found[skipped + k - 1], expected)
    assert (np.abs(found[:skipped]) < 1e-20).all()


@pytest.mark.parametrize("key", PROBLEMS, ids=" ".join)
def test_count_between_eigenvalues(key):
    # the count works with transfer matrices, the eigenvalues come from elements
    member, value = PROBLEMS[key][0], first(key).eigenvalues
    for k in (1, 2, 3, 4, 9, 24, 49):
        if value[k] - value[k - 1] > 1e-12:
            assert number_below(member, float(value[k - 1 : k + 1].mean())) == k
    gap = 1e-9 * max(abs(value[5]), 1)
    assert number_below(member, value[5] - gap) == 5
    assert number_below(member, value[5] + gap) == 6


def beam_roots(sign):
    """Roots of cos z cosh z = sign, or (0) of tan z = tanh z, beyond the table's ten."""
    k = np.arange(11, COUNT + 1)
    if sign == 0:
        return (k + 0.25) * PI
    return (k + 0.5) * PI if sign == 1 else (k - 0.5) * PI


N = np.arange(COUNT)
ALL = {  # number of the first mode compared -> all the others up to fifty, in closed form
    (BEAM, "clamped-clamped"): (10, beam_roots(1) ** 4),
    (BEAM, "free-free"): (12, beam_roots(1)[:-2] ** 4),
    (BEAM, "clamped-free"): (10, beam_roots(-1) ** 4),
    (BEAM, "clamped-pinned"): (10, beam_roots(0) ** 4),
    (BEAM, "free-pinned"): (11, beam_roots(0)[:-1] ** 4),
    (BEAM, "pinned-pinned"): (0, ((N + 1) * PI) ** 4),
    (BEAM, "pinned-guided"): (0, ((N + 0.5) * PI) ** 4),
    ("-(x y')'=lam x y on (0,1)", "y regular at 0, y(1)=0"): (0, bessel_zeros(0, COUNT) ** 2),
    ("-(x y')'=lam x y on (0,1)", "y regular at 0, y'(1)=0"): (1, bessel_zeros(1, 49) ** 2),
    ("-((1-x2)y')'=lam y on (-1,1)", "bounded"): (0, N * (N + 1.0)),
    ("-y''=lam y on (0,pi)", "Neumann"): (0, N**2.0),
    ("-y''+2q cos2x y=lam y on (0,pi), q=5", "Neumann: a_m"): (0, special.mathieu_a(N, 5)),
    ("-y''+2q cos2x y=lam y on (0,pi), q=5", "Dirichlet: b_m"): (0, special.mathieu_b(N + 1, 5)),
}


@pytest.mark.parametrize("key", ALL, ids=" ".join)
def test_none_of_fifty_is_missed(key):
    start, expected = ALL[key]
    assert len(expected) == COUNT - start
    # beyond ten the roots of the beams differ from these by less than exp(-2 * 10 pi) = 1e-27
    assert off(first(key).eigenvalues[start:], expected).max() < 2e-12


# ---------------------------------------------------------------- 50-digit determinants


def carried(n, k, length):
    """Transfer matrix of a piece."""
    if n == 4:
        return digits._step(4, tuple(sorted(k.items())), length, mp.mp.dps)[:4, :4]
    wave = mp.sqrt(mp.mpc(-k["q"] / mp.mpf(k["p"])))
    c, s = mp.re(mp.cos(wave * length)), mp.re(mp.sinc(wave * length)) * length
    return mp.matrix([[c, s / k["p"]], [k["q"] * s, c]])


def determinant(stepped, mu):
    """Determinant of all conditions of a stepped member at lambda = mu, with its own sign."""
    jumps = [p for p in stepped.points if p[1] in ("held", "hinge")]
    n, half = stepped.order, stepped.order // 2
    count = half + len(jumps)
    z = mp.zeros(n, count)
    digits._begin(z, stepped.left, n)
    conditions, number = [], half
    stops = sorted({e for a, b, _ in stepped.pieces for e in (a, b)} | {p[0] for p in jumps}
                   | {p[0] for p in stepped.points})  # fmt: skip
    for i, place in enumerate(stops):
        for at, what, amount in stepped.points:
            if at != place:
                continue
            if what == "spring":
                z[n - 1, :] += mp.mpf(amount) * z[0, :]
            elif what == "interface":
                z[0, :] += mp.mpf(amount) * z[1, :]
            else:
                row = z[0 if what == "held" else 2, :].copy()
                if what == "hinge":
                    row[0, number] += mp.mpf(amount)
                conditions.append(row)
                z[n - 1 if what == "held" else 1, number] += 1
                number += 1
        if i + 1 < len(stops):
            middle = (place + stops[i + 1]) / 2
            k = dict(next(k for lo, hi, k in stepped.pieces if lo <= middle <= hi))
            r = k.pop("r", 1)
            k["q" if n == 2 else "p0"] -= mp.mpf(mu) * r
            z = carried(n, k, mp.mpf(stops[i + 1]) - mp.mpf(place)) * z
    conditions += digits._finish(z, stepped.right, n)
    return mp.det(mp.matrix([[row[0, j] for j in range(count)] for row in conditions]))


def changes_sign(stepped, value, width=1e-11):
    """Whether an odd number of eigenvalues lies within a relative width of a value."""
    with mp.workdps(40):
        low, high = (determinant(stepped, mp.mpf(value) * (1 + s * width)) for s in (-1, 1))
        return low * high < 0


@pytest.mark.parametrize("seed", range(3))
def test_random_beam_against_determinant(seed):
    member, stepped, *_ = random_beam(seed)
    found = srcfit.modes(member, 16).eigenvalues
    assert all(changes_sign(stepped, found[k]) for k in (0, 1, 15))


def test_conductor_with_everything_against_determinant():
    rng = np.random.default_rng(7)
    p, q = steps(rng, 12.0, 3, 0.1, 10), steps(rng, 12.0, 3, 0.01, 10)
    points = ((3.0, "spring", 2.5), (5.5, "interface", 0.8), (9.0, "held", 0.0))
    member = member_of_order_2(p, q, 12.0, 0.8, RIGID, points)
    pieces = tuple((x, y, {"p": e, "q": f}) for x, y, (e, f) in merged(p, q))
    stepped = digits.Stepped(2, pieces, (0.8,), (RIGID,), points)
    found = srcfit.modes(member, 20).eigenvalues
    assert all(changes_sign(stepped, value) for value in found)


@pytest.mark.parametrize(("shear", "tension"), [(2e4, 0.0), (3e3, 800.0), (1e9, -900.0)])
def test_beam_that_shears_against_determinant(shear, tension):
    member, stepped = sheared(shear, tension)
    found = srcfit.modes(member, 12).eigenvalues
    assert all(changes_sign(stepped, found[k]) for k in (0, 3, 11))


def test_many_pieces():
    rng = np.random.default_rng(5)
    edges = np.linspace(0, 3, 121)
    value = 1 + rng.random(120)
    table = [[a, b, v] for (a, b), v in zip(itertools.pairwise(edges), value, strict=True)]
    found = srcfit.modes(general(0, 3, "fixed", "free", p=table), 8).eigenvalues
    stepped = digits.Stepped(
        2, tuple((a, b, {"p": v, "q": 0.0}) for a, b, v in table), (RIGID,), (0.0,)
    )
    assert changes_sign(stepped, found[7])


# ---------------------------------------------------------------- finite elements with Richardson


def test_stepped_beam_against_cubic_elements():
    from skfem import Basis, BilinearForm, ElementLineHermite, MeshLine, condense
    from skfem.helpers import dd

    def stiffness(x):
        return np.where(x < 1.0, 2.0, np.where(x < 1.8, 0.5, 1.0))

    def run(count):
        parts = [np.linspace(a, b, count + 1) for a, b in ((0, 1.0), (1.0, 1.8), (1.8, 3.0))]
        basis = Basis(MeshLine(np.unique(np.concatenate(parts))), ElementLineHermite())
        K = BilinearForm(lambda u, v, w: stiffness(w.x[0]) * dd(u)[0, 0] * dd(v)[0, 0]
                         + np.where(w.x[0] > 1, 40.0, 0.0) * u * v)  # fmt: skip
        M = BilinearForm(lambda u, v, w: (1 + w.x[0]) * u * v)
        clamped = basis.get_dofs(lambda x: x[0] == 0)
        K, M = (condense(m.assemble(basis), D=clamped, expand=False).toarray() for m in (K, M))
        return eigh(K, M, eigvals_only=True, subset_by_index=[0, 9])

    member = srcfit.make_member({
        "kind": "general", "order": 4, "start": 0, "end": 3, "left": "clamped", "right": "free",
        "p2": [[0, 1, 2], [1, 1.8, 0.5], [1.8, 3, 1]], "p0": [[0, 1, 0], [1, 3, 40]],
        "r": "1 + x",
    })  # fmt: skip
    found = srcfit.modes(member, 10).eigenvalues
    coarse, middle, fine = (run(n) for n in (6, 12, 24))
    assert (fine > found * (1 - 1e-9)).all()  # cubic elements give upper bounds
    rate = np.log2((coarse - middle) / (middle - fine))
    assert np.abs(rate[2:6] - 4).max() < 0.2  # theory: h^4
    better = fine + (fine - middle) / 15
    assert off(better, found)[:6].max() < 2e-6
    assert np.abs(better / found - 1).max() < 2e-5


# ---------------------------------------------------------------- closed forms


@pytest.mark.parametrize("shear", [0.3, 10.0, 1e4, 1e12])
def test_pinned_beam_with_shear_tension_and_foundation(shear):
    k = np.arange(1, COUNT + 1) * PI
    member = unit_beam("pinned", "pinned", shear_stiffness=f"{shear!r} N", tension="0.2 N",
                       foundation="7 N/m^2", mass="2 kg/m")  # fmt: skip
    found = srcfit.modes(member, COUNT)
    expected = (k**4 / (1 + k**2 / shear) + 0.2 * k**2 + 7) / 2
    assert off(found.eigenvalues, expected).max() < 1e-13
    x = np.linspace(0, 1, 101)
    close_to_rounding = 1e-8 if shear < 1 else 1e-10
    assert np.abs(found.functions(x) - np.sin(np.outer(x, k))).max() < close_to_rounding


def test_compression_beyond_the_critical_gives_negative_eigenvalues():
    push = PI**2 * 50.3
    k = np.arange(1, 21) * PI
    found = srcfit.modes(unit_beam("pinned", "pinned", tension=f"{-push!r} N"), 20).eigenvalues
    expected = np.sort(k**4 - push * k**2)
    assert (np.abs(found - expected) < 1e-13 * push * k.max() ** 2).all()
    assert (found < 0).sum() == 7


def test_negative_q_and_a_well():
    found = srcfit.modes(general(0, 1, "free", "free", q=-1000), 30).eigenvalues
    assert off(found, (np.arange(30) * PI) ** 2 - 1000).max() < 1e-12
    # a deep well between stretches without loss: tan-type condition, bisected
    q = [[0, 0.4, 0], [0.4, 0.6, -1e4], [0.6, 1, 0]]
    found = srcfit.modes(general(0, 1, "fixed", "fixed", q=q), 6).eigenvalues

    def even(mu):
        inner, outer = np.sqrt(mu + 1e4), np.sqrt(-mu)
        return inner * np.tan(inner * 0.1) - outer / np.tanh(outer * 0.4)

    top = ((PI / 2) / 0.1) ** 2 - 1e4
    expected = brentq(even, -1e4 + 1e-6, top - 1e-6, xtol=1e-10)
    assert off(found[0], expected) < 1e-12


def test_annulus_and_solid_bodies():
    given = {"ambient": "0 degC", "conductivity": "3 W/(m*K)", "heat_capacity": "5 J/(m^3*K)"}
    ring = srcfit.make_member({"kind": "cylinder", "inner_radius": "1 m", "outer_radius": "2.5 m",
                               "left": "fixed", "right": "free", **given})  # fmt: skip
    z = np.sqrt(srcfit.modes(ring, 12).eigenvalues * 5 / 3)

    def cross(z):
        return special.j0(z) * special.y1(2.5 * z) - special.y0(z) * special.j1(2.5 * z)

    assert all(cross(v * (1 - 1e-12)) * cross(v * (1 + 1e-12)) < 0 for v in z)
    end = {"transfer": "6 W/(m^2*K)", "ambient": "0 degC"}
    ball = srcfit.make_member(
        {"kind": "sphere", "inner_radius": "0 m", "outer_radius": "2 m", "right": end, **given}
    )
    z = 2 * np.sqrt(srcfit.modes(ball, 12).eigenvalues * 5 / 3)
    bi = 6 * 2 / 3
    roots = [brentq(lambda t: t * np.cos(t) + (bi - 1) * np.sin(t), (k - 0.5) * PI, (k + 0.5) * PI,
                    xtol=1e-14) for k in range(1, 13)]  # fmt: skip
    assert off(z, np.array(roots)).max() < 1e-12


def test_singular_end_with_a_pole_of_q():
    # Bessel functions of order 1: the bounded response is 0 at the axis
    member = general(0, 1, "regular", "fixed", p="x", q="1/x", r="x")
    found = srcfit.modes(member, 8)
    assert off(found.eigenvalues, bessel_zeros(1, 8) ** 2).max() < 1e-11
    assert np.abs(found.functions(np.zeros(1))).max() < 1e-9
