"""Members that are hard on the numbers: many spans, contrasts of a million, 500 decay lengths.

Referee: products of exact transfer matrices with 50 and more digits (`referees.digits`).
"""

import itertools

import numpy as np
import pytest
from pairs import RIGID, beam, member_of_order_2, merged
from referees import digits

import srcfit

ROWS = {
    "response": [1, 0, 0, 0], "rotation": [0, 1, 0, 0], "moment": [0, 0, 1, 0],
    "shear": [0, 0, 0, 1],
}  # fmt: skip


def table(pieces, unit):
    return [[f"{a!r} m", f"{b!r} m", f"{v!r} {unit}"] for a, b, v in pieces]


def stepped_beam(EI, k, ends, points=(), T=0.0):
    """The beam as the package and as the referee take it; free ends are (0, 0)."""
    words = {(0.0, 0.0): "free", (RIGID, 0.0): "pinned", (RIGID, RIGID): "clamped"}
    length = EI[-1][1]
    member = beam(
        length=f"{length!r} m", tension=f"{T!r} N", left=words[ends[0]], right=words[ends[1]],
        bending_stiffness=table(EI, "N*m^2"), foundation=table(k, "N/m^2"),
        support=[{"at": f"{p[0]!r} m", "kind": "pinned"} for p in points if p[1] == "held"],
        hinge=[{"at": f"{p[0]!r} m"} for p in points if p[1] == "hinge"],
    )  # fmt: skip
    pieces = tuple((x, y, {"p2": e, "p1": T, "p0": f}) for x, y, (e, f) in merged(EI, k))
    return member, digits.Stepped(4, pieces, ends[0], ends[1], tuple(points))


def off(found, exact):
    """Largest difference as a part of the largest value that one source makes."""
    exact = np.array(exact, dtype=float)
    return (np.abs(found - exact) / np.abs(exact).max(axis=0)).max()


def ten_spans():
    rng = np.random.default_rng(10)
    spans = rng.uniform(18, 42, 10).round(1)
    at = np.concatenate([[0], np.cumsum(spans)]).round(6)
    # haunches: every span is stiffer over its first and last sixth
    cuts, EI = [0.0], []
    for a, b in itertools.pairwise(at):
        for share, value in ((1 / 6, 9e9), (5 / 6, 2e9 * rng.uniform(0.5, 2)), (1.0, 9e9)):
            end = float((a + share * (b - a)).round(6)) if share < 1 else float(b)
            EI.append((cuts[-1], end, float(value)))
            cuts.append(end)
    length = float(at[-1])
    # ground under spans 3, 4 and 8 only
    k = [(0.0, float(at[2]), 0.0), (float(at[2]), float(at[4]), 8e6),
         (float(at[4]), float(at[7]), 0.0), (float(at[7]), float(at[8]), 2.5e7),
         (float(at[8]), length, 0.0)]  # fmt: skip
    points = tuple((float(p), "held", 0.0) for p in at[1:-1])
    return stepped_beam(EI, k, ((RIGID, 0.0), (RIGID, 0.0)), points), length


def test_ten_spans_with_stepped_stiffness_on_partial_foundation():
    (member, stepped), length = ten_spans()
    x = [float(v) for v in (length * np.linspace(0.013, 0.989, 17)).round(3)]
    s = [float(v) for v in (length * np.array([0.047, 0.31, 0.552, 0.93])).round(3)]
    for name, row in ROWS.items():
        exact = digits.kernel(stepped, x, s, read=row)
        assert off(srcfit.kernel(member, x, s, name), exact) < 1e-9
    grid = np.linspace(0, length, 90)
    G = srcfit.kernel(member, grid, grid)
    assert np.abs(G - G.T).max() <= 1e-12 * np.abs(G).max()


def test_reactions_of_ten_spans_balance():
    (member, _), length = ten_spans()
    at = [0.0, *(s.at for s in member.supports), length]
    s = np.linspace(0.01, 0.99, 23) * length
    out = srcfit.kernel(member, at, s, "reaction").sum(axis=0)
    edges = np.unique([*np.linspace(0, length, 301), *at, *s,
                       *(e for p in member.profiles.values() for e in p.edges)])  # fmt: skip
    t, w = np.polynomial.legendre.leggauss(8)
    h = np.diff(edges)
    x = (edges[:-1, None] + h[:, None] * (1 + t) / 2).ravel()
    k = member.profiles["p0"](x)
    ground = ((h[:, None] * w / 2).ravel() * k) @ srcfit.kernel(member, x, s)
    np.testing.assert_allclose(out + ground, 1.0, rtol=1e-9)


CLAMPED, PINNED, FREE = (RIGID, RIGID), (RIGID, 0.0), (0.0, 0.0)


@pytest.mark.parametrize("ends", [(CLAMPED, FREE), (PINNED, PINNED), (CLAMPED, CLAMPED)])
@pytest.mark.parametrize("first", [1e3, 1e9])
def test_contrasts_of_a_million_beam(ends, first):
    other = 1e12 / first
    EI = [(0.0, 1.7, first), (1.7, 2.0, other), (2.0, 4.4, first), (4.4, 5.1, other),
          (5.1, 7.0, first)]  # fmt: skip
    member, stepped = stepped_beam(EI, [(0.0, 7.0, 0.0)], ends)
    x, s = [0.2, 1.1, 1.8, 2.9, 4.7, 5.2, 6.9], [0.6, 1.9, 3.3, 6.1]
    for name, row in ROWS.items():
        exact = digits.kernel(stepped, x, s, read=row)
        assert off(srcfit.kernel(member, x, s, name), exact) < 1e-8
    G = srcfit.kernel(member, x, x)
    assert np.abs(G - G.T).max() <= 1e-12 * np.abs(G).max()


@pytest.mark.parametrize("softer", [1e2, 1e8])
def test_contrasts_of_a_million_foundation(softer):
    """Free beam: hard and soft ground side by side, or ground beside none."""
    other = 1e10 / softer
    EI = [(0.0, 9.0, 1e6)]
    k = [(0.0, 3.0, softer), (3.0, 5.0, other), (5.0, 6.0, 0.0), (6.0, 9.0, softer)]
    member, stepped = stepped_beam(EI, k, (FREE, FREE))
    x, s = [0.0, 0.4, 2.9, 3.1, 5.5, 8.8], [1.0, 3.5, 5.2, 8.0]
    for name, row in ROWS.items():
        exact = digits.kernel(stepped, x, s, read=row)
        assert off(srcfit.kernel(member, x, s, name), exact) < 1e-8


@pytest.mark.parametrize("ends", [(RIGID, 0.0), (0.0, 0.0), (RIGID, RIGID)])
def test_contrasts_of_a_million_order_2(ends):
    p = [(0.0, 0.5, 1e-3), (0.5, 0.9, 1e3), (0.9, 1.4, 1e-3), (1.4, 2.0, 1.0)]
    q = [(0.0, 0.7, 1e-3), (0.7, 1.2, 1e3), (1.2, 2.0, 0.1)]
    points = ((0.3, "interface", 50.0), (1.7, "spring", 1e-2))
    member = member_of_order_2(p, q, 2.0, *ends, points)
    pieces = tuple((x, y, {"p": e, "q": f}) for x, y, (e, f) in merged(p, q))
    stepped = digits.Stepped(2, pieces, ends[:1], ends[1:], points)
    x, s = [0.1, 0.29, 0.6, 0.8, 1.3, 1.9], [0.2, 0.55, 1.0, 1.5]
    assert off(srcfit.kernel(member, x, s), digits.kernel(stepped, x, s)) < 1e-8
    flux = -np.array(digits.kernel(stepped, x, s, read=[0, 1]), dtype=float)
    assert off(srcfit.kernel(member, x, s, "flux"), flux) < 1e-8


def test_five_hundred_decay_lengths_beam():
    """Foundation length times length 500: exp(500) is 1e217, beyond any product of matrices."""
    EI, k, length = 4e6, 1.6e7, 500.0  # (k / 4 EI)**(1/4) = 1
    member, stepped = stepped_beam(
        [(0.0, 260.0, EI), (260.0, length, 3 * EI)], [(0.0, length, k)], (FREE, CLAMPED)
    )
    x = [0.0, 1.0, 249.0, 259.5, 261.0, 498.0]
    s = [0.5, 250.0, 260.5, 497.0]
    for name, row in ROWS.items():
        exact = np.array(digits.kernel(stepped, x, s, read=row), dtype=float)
        found = srcfit.kernel(member, x, s, name)
        assert off(found, exact) < 1e-8
        # each number by itself, too, as long as it is not lost in those beside it
        near = np.abs(np.subtract.outer(x, s)) < 20
        slack = 1e-8 * np.abs(exact) + 1e-14 * np.abs(exact).max()
        assert (np.abs(found - exact) <= slack)[near].all()


def test_five_hundred_decay_lengths_fin():
    p, q = [(0.0, 500.0, 2.0)], [(0.0, 200.0, 2.0), (200.0, 500.0, 3.0)]
    member = member_of_order_2(p, q, 500.0, RIGID, 0.0)
    pieces = tuple((x, y, {"p": e, "q": f}) for x, y, (e, f) in merged(p, q))
    stepped = digits.Stepped(2, pieces, (RIGID,), (0.0,))
    x, s = [0.2, 100.0, 199.0, 203.0, 350.0, 500.0], [0.5, 101.0, 200.5, 499.0]
    exact = np.array(digits.kernel(stepped, x, s), dtype=float)
    found = srcfit.kernel(member, x, s)
    # even what is 1e-200 of the rest is right to nine digits
    assert (np.abs(found - exact) <= 1e-9 * np.abs(exact)).all()
    assert exact.min() < 1e-100


def test_short_spans_beside_long_ones():
    """Spans of 30 cm and of 300 m on one beam."""
    EI = [(0.0, 300.0, 5e8), (300.0, 300.3, 5e8), (300.3, 420.0, 5e8)]
    points = ((150.0, "held", 0.0), (300.0, "held", 0.0), (300.3, "held", 0.0))
    member, stepped = stepped_beam(EI, [(0.0, 420.0, 0.0)], (PINNED, PINNED), points)
    x, s = [10.0, 149.0, 299.0, 300.1, 301.0, 400.0], [75.0, 300.2, 350.0]
    for name, row in ROWS.items():
        exact = digits.kernel(stepped, x, s, read=row)
        assert off(srcfit.kernel(member, x, s, name), exact) < 1e-8


@pytest.mark.parametrize("bedding", [1e3, 1.0, 1e-3, 1e-6])
def test_a_sliver_of_bedding_beside_a_pin(bedding):
    """All but free to turn: digits are lost as the response outgrows the beam's own, no faster.

    Against 50 digits. At 1e-6 N/m2 over 2 cm the beam gives way 1e11 times more than by bending.
    """
    held = ((0.0, 0.5, 0.0), (0.5, 0.52, bedding), (0.52, 1.0, 0.0))
    member = srcfit.make_member({
        "kind": "beam", "length": "1 m", "bending_stiffness": "1000 N*m^2", "left": "pinned",
        "right": "free", "foundation": [[f"{a} m", f"{b} m", f"{k!r} N/m^2"] for a, b, k in held],
    })  # fmt: skip
    pieces = tuple((a, b, {"p2": 1000.0, "p1": 0.0, "p0": k}) for a, b, k in held)
    exact = digits.Stepped(4, pieces, (digits.RIGID, 0.0), (0.0, 0.0))
    x = [0.11, 0.3, 0.47, 0.7, 0.93]
    G = srcfit.kernel(member, x, x)
    wanted = np.array(digits.kernel(exact, x, x)).astype(float)
    growth = np.abs(wanted).max() * 1000.0  # over L**3 / EI
    bound = 1e-14 + 1e-16 * growth
    assert np.abs(G - wanted).max() <= bound * np.abs(wanted).max()
    assert np.abs(G - G.T).max() <= bound * np.abs(wanted).max()
