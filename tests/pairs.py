"""Members as the package takes them, beside the same members as the referees take them."""

import itertools

import numpy as np
from referees import beams, digits

import srcfit

RIGID = float("inf")


def none(x):
    return np.zeros(np.shape(x))


def close(found, expected, of_largest):
    """Largest difference as a part of the largest expected size."""
    found, expected = np.asarray(found), np.asarray(expected)
    assert found.shape == expected.shape, f"{found.shape} instead of {expected.shape}"
    off = np.abs(found - expected).max() / np.abs(expected).max()
    assert off <= of_largest, f"off by {off:.2g} of the largest: {found} instead of {expected}"


def beam(**given):
    return srcfit.make_member({"kind": "beam", "left": "free", "right": "free", **given})


def member_of_order_2(p, q, length, left, right, points=(), kind="conductor"):
    """A stepped conductor (or rod) from pieces, springs and points as the referees take them."""
    stiff, loss, spring, unit = {
        "conductor": ("conductance", "loss", "transfer", ("W*m/K", "W/(m*K)", "W/K", "K/W")),
        "rod": ("axial_stiffness", "foundation", "spring", ("N", "N/m^2", "N/m", "m/N")),
    }[kind]

    def end(k):
        if k == RIGID:
            return "fixed"
        more = {"ambient": "0 degC"} if kind == "conductor" else {}
        return "free" if k == 0 else {spring: f"{k!r} {unit[2]}", **more}

    def table(pieces, unit):
        return [[f"{a!r} m", f"{b!r} m", f"{v!r} {unit}"] for a, b, v in pieces]

    given = {
        "kind": kind, "length": f"{length!r} m", stiff: table(p, unit[0]),
        loss: table(q, unit[1]), "left": end(left), "right": end(right),
        "support": [
            {"at": f"{at!r} m", "kind": "fixed"} if what == "held"
            else {"at": f"{at!r} m", "kind": "spring", "stiffness": f"{k!r} {unit[2]}"}
            for at, what, k in points if what in ("held", "spring")
        ],
        "interface": [
            {"at": f"{at!r} m", "resistance": f"{k!r} {unit[3]}"}
            for at, what, k in points if what == "interface"
        ],
    }  # fmt: skip
    if kind == "conductor":
        given["ambient"] = "0 degC"
    return srcfit.make_member(given)


def merged(*tables):
    """Pieces on which every one of several step tables is constant."""
    edges = sorted({e for t in tables for a, b, _ in t for e in (a, b)})
    for a, b in itertools.pairwise(edges):
        middle = (a + b) / 2
        yield a, b, [next(v for lo, hi, v in t if lo <= middle <= hi) for t in tables]


def steps(rng, length, count, low, high):
    """A random step table."""
    edges = np.sort(rng.uniform(0.05, 0.95, count - 1)) * length
    edges = [0.0, *edges.tolist(), length]
    values = np.exp(rng.uniform(np.log(low), np.log(high), count)).tolist()
    return list(zip(edges[:-1], edges[1:], values, strict=True))


def random_beam(seed):
    """A stepped beam on a stepped foundation, as the package and as the two referees take it."""
    rng = np.random.default_rng(seed)
    length = float(rng.uniform(5, 40))
    EI = steps(rng, length, 3, 1e8, 1e9)
    k = steps(rng, length, 2, 1e5, 3e7)
    T = float(rng.uniform(-2e6, 2e7))
    ends = [
        {"free": (0.0, 0.0), "pinned": (RIGID, 0.0), "clamped": (RIGID, RIGID),
         "guided": (0.0, RIGID), "elastic": (float(rng.uniform(1e5, 1e8)), 4e7)}[word]
        for word in rng.choice(["free", "pinned", "clamped", "guided", "elastic"], 2)
    ]  # fmt: skip
    a, b, c = (length * np.array([0.31, 0.52, 0.77])).tolist()
    points = ((a, "held", 0.0), (b, "hinge", float(rng.choice([0.0, 3e7]))), (c, "spring", 5e6))

    def end(springs):
        def word(v, unit):
            return "rigid" if v == RIGID else f"{v!r} {unit}"

        return {
            "deflection_spring": word(springs[0], "N/m"),
            "rotation_spring": word(springs[1], "N*m"),
        }

    member = beam(
        length=f"{length!r} m", tension=f"{T!r} N", left=end(ends[0]), right=end(ends[1]),
        bending_stiffness=[[f"{x!r} m", f"{y!r} m", f"{v!r} N*m^2"] for x, y, v in EI],
        foundation=[[f"{x!r} m", f"{y!r} m", f"{v!r} N/m^2"] for x, y, v in k],
        support=[
            {"at": f"{a!r} m", "kind": "pinned"},
            {"at": f"{c!r} m", "kind": "spring", "stiffness": "5 MN/m"},
        ],
        hinge=[{"at": f"{b!r} m", "spring": f"{points[1][2]!r} N*m"}],
    )  # fmt: skip
    pieces = tuple(
        (x, y, {"p2": e, "p1": T, "p0": f}) for x, y, (e, f) in merged(EI, k)
    )  # fmt: skip
    stepped = digits.Stepped(4, pieces, ends[0], ends[1], points)
    solid = beams.Beam(
        length, EI, k, T, beams.End(*ends[0]), beams.End(*ends[1]),
        ((a, RIGID, 0.0), (c, 5e6, 0.0)), ((b, points[1][2]),),
    )  # fmt: skip
    x = (length * np.array([0.0, 0.17, 0.45, 0.66, 0.9, 1.0])).tolist()
    s = (length * np.array([0.05, 0.4, 0.71])).tolist()
    return member, stepped, solid, x, s
