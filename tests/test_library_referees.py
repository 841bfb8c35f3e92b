"""Two well-known libraries as referees on random members: sympy's beams, scikit-fem's elements.

sympy solves beams exactly, in fractions (constant bending stiffness, any supports and loads);
scikit-fem assembles its own elements for stepped coefficients, springs and foundations.
"""

import itertools

import numpy as np
import pytest
import skfem
from skfem.helpers import d, dd, ddot, dot, grad
from sympy import Rational, symbols
from sympy.physics.continuum_mechanics.beam import Beam

import srcfit

# --- sympy ---------------------------------------------------------------------------------------

SUPPORTS = {"pinned": (True, False), "clamped": (True, True), "free": (False, False),
            "guided": (False, True)}  # fmt: skip
ENDS = [("pinned", "pinned"), ("clamped", "free"), ("clamped", "pinned"), ("clamped", "clamped"),
        ("pinned", "clamped"), ("free", "clamped")]  # fmt: skip


def fraction(rng, low, high, parts=20):
    return Rational(int(rng.integers(int(low * parts), int(high * parts))), parts)


def random_case(seed):
    """Ends, inner supports, an even stretch, a force and a couple, all in fractions."""
    rng = np.random.default_rng(seed)
    length = fraction(rng, 4, 12)
    left, right = ENDS[seed % len(ENDS)]
    places = sorted(rng.choice(range(3, 18), seed % 3, replace=False))
    inner = [length * Rational(int(n), 20) for n in places]
    a, b = sorted(int(v) for v in rng.choice(range(1, 20), 2, replace=False))
    stretch = (length * Rational(a, 20), length * Rational(b, 20), fraction(rng, -9, 9))
    force = (length * fraction(rng, 0.1, 0.9, 200), fraction(rng, 1, 30))
    couple = (length * fraction(rng, 0.1, 0.9, 200), fraction(rng, -30, 30))
    return length, left, right, inner, stretch, force, couple, fraction(rng, 50, 500)


def by_sympy(case):
    """Beam of sympy: y is up, shear and bending moment have the other sign."""
    length, left, right, inner, (a, b, q), force, couple, EI = case
    found = Beam(length, 1, EI)
    names, deflection, slope = [], [], []

    def hold(at, fixed, turned, word):
        if fixed:
            names.append(symbols(f"R_{word}"))
            found.apply_load(names[-1], at, -1)
            deflection.append((at, 0))
        if turned:
            names.append(symbols(f"M_{word}"))
            found.apply_load(names[-1], at, -2)
            slope.append((at, 0))

    hold(0, *SUPPORTS[left], "left")
    for i, at in enumerate(inner):
        hold(at, True, False, f"{i}")
    hold(length, *SUPPORTS[right], "right")
    found.apply_load(-q, a, 0, end=b)
    found.apply_load(-force[1], force[0], -1)
    found.apply_load(couple[1], couple[0], -2)
    found.bc_deflection, found.bc_slope = deflection, slope
    found.solve_for_reaction_loads(*names)
    return found


@pytest.mark.parametrize("seed", range(8))
def test_sympy_beams(seed):
    case = random_case(seed)
    length, left, right, inner, (a, b, q), force, couple, EI = case
    exact = by_sympy(case)
    member = srcfit.make_member({
        "kind": "beam", "length": f"{float(length)!r} m", "left": left, "right": right,
        "bending_stiffness": f"{float(EI)!r} N*m^2",
        "support": [{"at": f"{float(p)!r} m", "kind": "pinned"} for p in inner],
    })  # fmt: skip
    shares = [Rational(n, 37) for n in (1, 6, 11, 17, 22, 29, 36)]
    x = [length * t for t in shares]
    y = exact.variable

    def density(s):
        return float(q) * ((s > float(a)) & (s < float(b)))

    lumped = [(float(force[0]), float(force[1])), (float(couple[0]), float(couple[1]), "couple")]
    curves = {
        "response": -exact.deflection(), "slope": -exact.slope(),
        "moment": exact.bending_moment(), "shear": -exact.shear_force(),
    }  # fmt: skip
    for name, curve in curves.items():
        wanted = np.array([float(curve.subs(y, v)) for v in x])
        if name == "moment":
            wanted = -wanted  # sympy's bending moment is hogging positive
        found = srcfit.respond(member, [float(v) for v in x], density, lumped, name)
        assert np.abs(found - wanted).max() <= 1e-9 * np.abs(wanted).max(), name
    held = [float(v) for v, _ in exact.bc_deflection]
    wanted = [float(v) for k, v in exact.reaction_loads.items() if str(k).startswith("R_")]
    found = srcfit.respond(member, held, density, lumped, "reaction")
    assert np.abs(found - wanted).max() <= 1e-9 * np.abs(wanted).max()


# --- scikit-fem ----------------------------------------------------------------------------------


def steps(rng, length, low, high):
    """Three pieces of a coefficient."""
    cuts = np.round(length * np.array([0.0, rng.uniform(0.2, 0.4), rng.uniform(0.5, 0.8), 1]), 3)
    values = np.exp(rng.uniform(np.log(low), np.log(high), 3)).round(4)
    pairs = itertools.pairwise(cuts.tolist())
    return [(a, b, v) for (a, b), v in zip(pairs, values.tolist(), strict=True)]


def look_up(pieces, x):
    out = np.zeros_like(x)
    for a, b, v in pieces:
        out[(x >= a) & (x < b)] = v
    return out


def mesh_of(length, places, size):
    stops = np.unique(np.concatenate([[0.0, length], places]))
    parts = [np.linspace(a, b, int(np.ceil((b - a) / size)) + 1)[:-1]
             for a, b in itertools.pairwise(stops)]  # fmt: skip
    return skfem.MeshLine(np.append(np.concatenate(parts), length)[None])


def table(pieces, unit):
    return [[f"{a!r} m", f"{b!r} m", f"{v!r} {unit}"] for a, b, v in pieces]


@pytest.mark.parametrize("seed", range(6))
def test_elements_of_order_2(seed):
    """A stepped fin with transfer at the right end and a spring inside; degree 8 elements."""
    rng = np.random.default_rng(40 + seed)
    length = round(float(rng.uniform(1, 6)), 2)
    p, q = steps(rng, length, 0.3, 3), steps(rng, length, 0.1, 10)
    transfer, inside, at = float(rng.uniform(0.1, 2)), 0.7, round(0.45 * length, 3)
    member = srcfit.make_member({
        "kind": "conductor", "length": f"{length!r} m", "conductance": table(p, "W*m/K"),
        "loss": table(q, "W/(m*K)"), "ambient": "0 degC", "left": "fixed",
        "right": {"transfer": f"{transfer!r} W/K", "ambient": "0 degC"},
        "support": [{"at": f"{at!r} m", "kind": "spring", "stiffness": f"{inside!r} W/K"}],
    })  # fmt: skip
    x = (length * np.array([0.11, 0.35, 0.62, 0.87, 1.0])).round(3)
    edges = [e for a, b, _ in p + q for e in (a, b)]
    mesh = mesh_of(length, np.concatenate([x, edges, [at]]), length / 8)
    basis = skfem.Basis(mesh, skfem.ElementLinePp(8), intorder=20)

    @skfem.BilinearForm
    def stiffness(u, v, w):
        here = w.x[0]
        return look_up(p, here) * dot(grad(u), grad(v)) + look_up(q, here) * u * v

    @skfem.LinearForm
    def heat(v, w):
        return np.exp(-w.x[0]) * np.sin(3 * w.x[0]) * v

    K, F = stiffness.assemble(basis).tolil(), heat.assemble(basis)

    def node(place):
        return int(np.argmin(np.abs(mesh.p[0] - place)))  # nodal unknowns come first

    K[node(at), node(at)] += inside
    K[node(length), node(length)] += transfer
    u = skfem.solve(*skfem.condense(K.tocsr(), F, D=np.array([node(0.0)])))
    wanted = u[[node(v) for v in x]]
    found = srcfit.respond(member, x, lambda s: np.exp(-s) * np.sin(3 * s)) - 273.15
    assert np.abs(found - wanted).max() <= 1e-9 * np.abs(wanted).max()


@pytest.mark.parametrize("seed", range(6))
def test_elements_of_beams(seed):
    """A stepped, bedded, stretched beam with an inner support; cubic Hermite elements."""
    rng = np.random.default_rng(60 + seed)
    length = round(float(rng.uniform(3, 9)), 2)
    EI, k = steps(rng, length, 1e3, 1e4), steps(rng, length, 10, 300)
    T = round(float(rng.uniform(-100, 400)), 1)
    at = round(0.55 * length, 3)
    left, right = ENDS[seed % len(ENDS)]
    member = srcfit.make_member({
        "kind": "beam", "length": f"{length!r} m", "bending_stiffness": table(EI, "N*m^2"),
        "foundation": table(k, "N/m^2"), "tension": f"{T!r} N", "left": left, "right": right,
        "support": [{"at": f"{at!r} m", "kind": "pinned"}],
    })  # fmt: skip
    x = (length * np.array([0.11, 0.35, 0.62, 0.87])).round(3)
    edges = [e for a, b, _ in EI + k for e in (a, b)]
    values = []
    for size in (length / 80, length / 160):
        mesh = mesh_of(length, np.concatenate([x, edges, [at]]), size)
        basis = skfem.Basis(mesh, skfem.ElementLineHermite(), intorder=8)

        @skfem.BilinearForm
        def energy(u, v, w):
            here = w.x[0]
            bend = look_up(EI, here) * ddot(dd(u), dd(v))
            return bend + T * dot(d(u), d(v)) + look_up(k, here) * u * v

        @skfem.LinearForm
        def load(v, w):
            return (1 + np.cos(w.x[0])) * v

        K, F = energy.assemble(basis), load.assemble(basis)
        nodal = basis.nodal_dofs  # row 0 deflections, row 1 slopes

        def node(place, mesh=mesh):
            return int(np.argmin(np.abs(mesh.p[0] - place)))

        held = [nodal[0, node(at)]]
        for word, place in ((left, 0.0), (right, length)):
            held += [nodal[i, node(place)] for i in (0, 1) if SUPPORTS[word][i]]
        u = skfem.solve(*skfem.condense(K, F, D=np.array(held)))
        values.append(np.array([u[nodal[0, node(v)]] for v in x]))
    # nodal values converge with the fourth power of the element: one step of extrapolation
    wanted = values[1] + (values[1] - values[0]) / 15
    found = srcfit.respond(member, x, lambda s: 1 + np.cos(s))
    # 160 elements are ill-conditioned by some 160**4: the referee's own rounding is up to 1e-7
    assert np.abs(found - wanted).max() <= 2e-7 * np.abs(wanted).max()
