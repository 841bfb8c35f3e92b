"""Members with known eigenvalues, and what the tests of eigenvalues and modes share."""

import functools

import numpy as np
from pairs import RIGID, beam
from referees import digits
from scipy import special
from scipy.optimize import brentq

import srcfit

PI = np.pi
COUNT = 50
BEAM = "EI w4=rhoA om2 w"


def general(start, end, left, right, p=1, q=0, **more):
    return srcfit.make_member({
        "kind": "general", "order": 2, "start": start, "end": end, "p": p, "q": q,
        "left": left, "right": right, **more,
    })  # fmt: skip


def unit_beam(left, right, **more):
    return beam(length="1 m", bending_stiffness="1 N*m^2", left=left, right=right, **more)


def transfer(bi):
    return {"a": bi, "b": 1}


# problem, boundary -> (members, from the table's value to the eigenvalue)
SAME, SQUARE = (lambda z: z), (lambda z: z**2)
BESSEL = functools.partial(general, 0, 1, "regular", p="x", r="x")
COFFEY = ("-2*20*cos(2*x) + 400*sin(2*x)**2", -PI / 2, PI / 2)
PROBLEMS = {
    ("-(x y')'=lam x y on (0,1)", "y regular at 0, y(1)=0"): (BESSEL("fixed"), SQUARE),
    ("-(x y')'=lam x y on (0,1)", "y regular at 0, y'(1)=0"): (BESSEL("free"), SQUARE),
    ("-((1-x2)y')'=lam y on (-1,1)", "bounded"): (
        general(-1, 1, "regular", "regular", p="1 - x**2"), SAME),
    ("-y''=lam y on (0,pi)", "Dirichlet"): (general(0, PI, "fixed", "fixed"), SAME),
    ("-y''=lam y on (0,pi)", "Neumann"): (general(0, PI, "free", "free"), SAME),
    ("-y''=lam y on (0,pi)", "y(0)=0,y'(pi)=0"): (general(0, PI, "fixed", "free"), SAME),
    ("-y''+exp(x) y=lam y on (0,pi)",
     "Dirichlet (Paine, de Hoog & Anderssen 1981, problem 1)"): (
        general(0, PI, "fixed", "fixed", q="exp(x)"), SAME),
    ("-y''+(-2b cos2x+b^2 sin^2 2x)y=lam y on (-pi/2,pi/2), b=20",
     "Dirichlet (Coffey-Evans; Pryce 1993 test set)"): (
        general(COFFEY[1], COFFEY[2], "fixed", "fixed", q=COFFEY[0]), SAME),
    ("-y''+2q cos2x y=lam y on (0,pi), q=5", "Neumann: a_m"): (
        general(0, PI, "free", "free", q="10*cos(2*x)"), SAME),
    ("-y''+2q cos2x y=lam y on (0,pi), q=5", "Dirichlet: b_m"): (
        general(0, PI, "fixed", "fixed", q="10*cos(2*x)"), SAME),
} | {
    ("-y''=lam y on (0,1)", f"{at_0}, y'(1)+{bi:g} y(1)=0"): (
        general(0, 1, word, transfer(bi)), SQUARE)
    for bi in (0.1, 1.0) for at_0, word in (("y'(0)=0", "free"), ("y(0)=0", "fixed"))
} | {
    (BEAM, pair): (unit_beam(*pair.split("-")), lambda z: z**4)
    for pair in ("clamped-clamped", "free-free", "clamped-free", "clamped-pinned", "free-pinned",
                 "pinned-pinned", "pinned-guided")
}  # fmt: skip


def off(found, expected):
    return np.abs(found - expected) / np.maximum(np.abs(expected), 1)


def bessel_zeros(order, count):
    # from the function itself, so that nothing hangs on how exact scipy's table of zeros is
    guess = special.jn_zeros(order, count)
    return np.array([brentq(lambda z: special.jv(order, z), z - 0.1, z + 0.1, xtol=1e-14)
                     for z in guess])  # fmt: skip


def sheared(shear, tension=0.0, **more):
    member = beam(
        length="4 m", left="clamped", right="free", bending_stiffness="9 kN*m^2",
        shear_stiffness=f"{shear!r} N", tension=f"{tension!r} N", mass="3 kg/m",
        foundation=[["0 m", "1.5 m", "0 N/m^2"], ["1.5 m", "4 m", "2 kN/m^2"]],
        hinge=[{"at": "1 m", "spring": "30 kN*m"}], support=[{"at": "2.5 m", "kind": "pinned"}],
        **more,
    )  # fmt: skip
    k = {"p2": 9e3, "p1": tension, "shear": shear, "r": 3}
    stepped = digits.Stepped(
        4, ((0.0, 1.5, {**k, "p0": 0.0}), (1.5, 4.0, {**k, "p0": 2e3})),
        (RIGID, RIGID), (0.0, 0.0), ((1.0, "hinge", 3e4), (2.5, "held", 0.0)),
    )  # fmt: skip
    return member, stepped


def quadrature(member, parts=400):
    """Places and weights for integrals over a member, fine beside its edges."""
    edges = np.unique(np.concatenate([
        np.linspace(member.start, member.end, parts + 1),
        [e for p in member.profiles.values() for e in p.edges],
        [s.at for s in (*member.supports, *member.hinges, *member.interfaces)],
    ]))  # fmt: skip
    t, w = np.polynomial.legendre.leggauss(8)
    h = np.diff(edges)[:, None] / 2
    x = (edges[:-1, None] + h * (1 + t)).ravel()
    r = member.profiles["r"](x) if "r" in member.profiles else 1.0
    return x, (h * w).ravel() * r * member.area(x)
