"""Laws that every member must keep, on random members of every kind (Hypothesis).

Reciprocity between unlike sensors (Maxwell, Betti), positivity, equilibrium, superposition, and
that more stiffness never gives way more. 200 members in a normal run, 2,000 with `-m long`.
"""

import numpy as np
import pytest
from any_member import KINDS, members
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from pairs import none

import srcfit
from srcfit.holds import restrained
from srcfit.influence import bases, influence
from srcfit.quantities import functionals
from srcfit.state import chain, inner_edges, operator, special_places

RUN = settings(
    max_examples=200, deadline=None, derandomize=True, database=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much],
)  # fmt: skip
LONG = settings(RUN, max_examples=2000)
SHARES = np.linspace(0.0107, 0.9893, 7)
QUANTITIES = {
    2: ("response", "slope", "flux"),
    4: ("response", "slope", "rotation", "curvature", "moment", "shear"),
}


def made(drawn):
    """The member, the same held where something of it moves freely, and a factor on tolerances.

    What all but nothing holds (a little bedding beside a pin) amplifies rounding: its kernel is as
    many times larger than its own stiffness makes it as the states of the two ends nearly meet.
    """
    member = srcfit.make_member(drawn.given)
    held, free = restrained(member)
    both = bases(chain(held))
    W, Y = np.linalg.qr(both.W)[0], np.linalg.qr(both.Y)[0]
    meet = np.linalg.svd(np.concatenate([W, Y], axis=2), compute_uv=False)[:, -1]
    assume(meet.min() > 1e-9)
    return member, held, free > 0, max(1.0, 1e-4 / meet.min())


def reciprocity(member, held, drawn, slack):
    """What sensor i reads under the line of sensor j is what j reads under that of i."""
    kinds = QUANTITIES[member.kind.order]
    # each sensor at its own places, so that no two of them share a node
    shift = 0.77e-3 * member.length
    at = [np.array(drawn.places(SHARES)) + i * shift for i in range(len(kinds))]
    line = chain(held, np.concatenate(at))
    terms = [t for q, x in zip(kinds, at, strict=True) for t in functionals(line, q, x)]
    lines = influence(line, terms)
    node = np.array([t[0].node for t in terms])
    rows = np.array([t[0].row for t in terms]) * line.scale
    states = lines.after(node)  # (sensor read, sensor whose line it is, state)
    R = np.einsum("jik,jk->ij", states, rows)
    # sizes of what is summed up: some products vanish, as moments of statically determinate beams
    size = np.abs(lines.after(np.arange(len(line.x)))).max(axis=(0, 2))
    terms_of = size[:, None] * np.abs(rows).max(axis=1)
    apart = node[:, None] != node
    n = len(SHARES)
    for a in range(len(kinds)):
        for b in range(len(kinds)):
            block = np.s_[a * n : (a + 1) * n, b * n : (b + 1) * n]
            off = np.abs(R - R.T)[block][apart[block]].max()
            bound = max(terms_of[block].max(), terms_of.T[block].max())
            assert off <= 1e-12 * slack * bound, (kinds[a], kinds[b], off / bound)


def symmetry_and_sign(member, drawn, singular, slack):
    """Symmetric, positive semidefinite; of order 2 nowhere negative unless singular."""
    x = drawn.places(SHARES)
    G = srcfit.kernel(member, x, x)
    largest = np.abs(G).max()
    assert np.abs(G - G.T).max() <= 1e-12 * slack * largest
    assert np.linalg.eigvalsh((G + G.T) / 2).min() >= -1e-11 * slack * largest
    if member.kind.order == 2 and not singular:
        assert G.min() >= -1e-12 * slack * largest
    if member.kind.order == 4:
        # a unit couple at s turns x as a unit load at x turns s
        turned = np.array([
            srcfit.respond(member, [x[i]], none, [(x[j], 1.0, "couple")])[0]
            for i, j in ((1, 4), (5, 2))
        ]) if not singular else None  # fmt: skip
        if turned is not None:
            rotation = srcfit.kernel(member, x, x, "rotation")
            expected = np.array([rotation[4, 1], rotation[2, 5]])
            # a section that is soft in shear hardly turns while it sinks
            size = max(np.abs(rotation).max(), 1e-3 * largest / member.length)
            assert turned == pytest.approx(expected, abs=1e-11 * slack * size)
    return G


def equilibrium(member, drawn, slack):
    """A unit source comes out at ends and supports, or is taken along the member."""
    at = drawn.places([0.4321])[0]
    held = [p for p, e in ((member.start, member.left), (member.end, member.right))
            if e.response.stiffness and not e.axis]  # fmt: skip
    held += [s.at for s in member.supports]
    out = sum(srcfit.kernel(member, held, [at], "reaction")[:, 0]) if held else 0.0
    stops = [member.start, *inner_edges(member), *(p for p, _, _ in special_places(member)), at]
    edges = np.unique([*stops, member.end, *np.linspace(member.start, member.end, 17)])
    t, w = np.polynomial.legendre.leggauss(12)
    h = np.diff(edges)
    x = (edges[:-1, None] + h[:, None] * (1 + t) / 2).ravel()
    weight = (h[:, None] * w / 2).ravel()
    k = operator(member, x)
    rate = k["q"] if member.kind.order == 2 else k["p0"]  # area weight included
    along = 0.0
    if rate.any():
        along = weight @ (rate * srcfit.kernel(member, x, [at])[:, 0])
    size = max(1.0, abs(along), abs(out))
    assert abs(out + along - 1) <= 1e-9 * slack * size, (out, along)


def superposition(member, drawn, slack):
    """Responses add up, and twice the source gives twice the response."""
    x = drawn.places([0.2, 0.55, 0.9])
    a, b = drawn.places([0.31, 0.74])
    value = np.array([1.0, 0.3, -0.5, 2.0])
    rest = srcfit.respond(member, x, none)
    assert rest == pytest.approx(np.zeros(3), abs=1e-300)  # nothing prescribed: no response
    one = srcfit.respond(member, x, value)
    other = srcfit.respond(member, x, none, [(a, 2.0), (b, -1.0)])
    both = srcfit.respond(member, x, 2 * value, [(a, 6.0), (b, -3.0)])
    size = max(np.abs(one).max(), np.abs(other).max(), 1e-300)
    assert np.abs(2 * one + 3 * other - both).max() <= 1e-11 * slack * size
    G = srcfit.kernel(member, x, [a, b])
    assert np.abs(G @ [2.0, -1.0] - other).max() <= 1e-11 * slack * np.abs(G).max()


def monotone(member, drawn, G, factor, slack):
    """Stiffer coefficients never give way more: G - G_stiffer is positive semidefinite."""
    stiffer = dict(drawn.given)
    for key in drawn.stiff:
        stiffer[key] = times(stiffer[key], factor)
    x = drawn.places(SHARES)
    less = G - srcfit.kernel(srcfit.make_member(stiffer), x, x)
    assert np.linalg.eigvalsh((less + less.T) / 2).min() >= -1e-11 * slack * np.abs(G).max()


def times(value, factor):
    """A coefficient of a mapping times a number."""
    if isinstance(value, list):
        return [[*row[:-1], times(row[-1], factor)] for row in value]
    if isinstance(value, str):
        number, unit = value.split(" ", 1)
        return f"{float(number) * factor!r} {unit}"
    return value * factor


def laws(drawn, factor):
    member, held, singular, slack = made(drawn)
    reciprocity(member, held, drawn, slack)
    G = symmetry_and_sign(member, drawn, singular, slack)
    if singular:
        return
    equilibrium(member, drawn, slack)
    superposition(member, drawn, slack)
    monotone(member, drawn, G, factor, slack)


@RUN
@given(members(), st.sampled_from([1.01, 1.7, 20.0]))
def test_laws_of_every_member(drawn, factor):
    laws(drawn, factor)


@pytest.mark.long
@LONG
@given(members(), st.sampled_from([1.01, 1.7, 20.0]))
def test_laws_of_very_many_members(drawn, factor):
    laws(drawn, factor)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_is_drawn(kind):
    """No kind slips through: one random member of each keeps all laws."""
    seen = []

    @settings(RUN, max_examples=2)
    @given(members(kind=kind))
    def some(drawn):
        seen.append(drawn.given["kind"])
        laws(drawn, 1.3)

    some()
    assert set(seen) == {KINDS[kind].name}
