"""Eigenvalues and modes of L0 phi = lambda r phi for any member at rest, and what follows.

Modes come from elements of high degree (`eigenform`), refined until no mode has anything left in
the highest polynomials. The eigenvalues are then Rayleigh quotients of the modes, energies taken
from the strains: sums of positive terms, so that null modes come out as 0 and low modes to full
relative accuracy beside high ones. That none is missed is proven by the count of `eigencount`,
which knows nothing of elements.

Source: Babuska & Osborn, Math. Comp. 52 (1989) 275 (accuracy of Rayleigh quotients).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre

from srcfit.eigencount import bare, number_below
from srcfit.eigenform import Form, Group, shapes_at
from srcfit.eigenshapes import SPARE, Index, coefficients, compression
from srcfit.eigensolve import characteristic, solve
from srcfit.errors import MemberError
from srcfit.member import Array, Member
from srcfit.state import operator

APART = 1e-7  # relative gap above which neighbours are counted apart
SAME = 1e-9  # relative distance from an eigenvalue that counts as on it


@dataclass(frozen=True)
class Modes:
    """Eigenvalues and modes of a member, L0 phi = lambda r phi.

    Attributes
    ----------
    eigenvalues : (count,) ascending, null modes included [SI: source / (response r)]
    form : Form
        The member on its elements.
    amounts : (unknowns, count)
        The modes as coefficients of the shapes of `form`.
    """

    eigenvalues: Array
    form: Form
    amounts: Array

    def functions(self, x: Array) -> Array:
        """Modes at places x [m], (len(x), count): orthonormal with weight r (times area).

        The first value from the left that is not 0 is positive. At an interface the right limit.
        """
        return _values(self.form, self.amounts, x)

    def states(self, x: Array) -> Array:
        """States of the modes at x, (len(x), n, count): (u, F) or (u, psi, M, V) as in `state`."""
        return _states(self.form, self.amounts, x)


def modes(member: Member, count: int) -> Modes:
    """The first `count` eigenvalues and modes of L0 phi = lambda r phi.

    r is the member's mass (inertia, heat capacity, porosity, storage), 1 where none is given,
    times the area weight of radial kinds. Frequency, damping, lambda, settlements and ambient are
    ignored; springs, supports, hinges and interfaces count.

    Parameters
    ----------
    member : Member
    count : int, at least 1

    Returns
    -------
    Modes

    Raises
    ------
    MemberError
        When `count` is not a positive whole number, a coefficient cannot be used, or the count of
        eigenvalues shows that some are missing and refinement does not find them.

    Examples
    --------
    A taut string: the eigenvalues are T (n pi / L)^2, the modes sqrt(2 / L) sin(n pi x / L).

    >>> import numpy as np
    >>> from srcfit import make_member, modes
    >>> string = make_member({"kind": "cable", "length": "2 m", "tension": "50 N",
    ...                       "left": "fixed", "right": "fixed"})
    >>> found = modes(string, 3)
    >>> (found.eigenvalues / (50 * (np.pi / 2) ** 2)).round(9)
    array([1., 4., 9.])
    >>> np.abs(found.functions([0.5, 1.0])[:, 1]).round(9)
    array([1., 0.])
    """
    if count != int(count) or count < 1:
        raise MemberError(
            f"{count!r} modes were asked for", "count", "ask for a whole number from 1 upwards"
        )
    member, count = bare(member), int(count)
    floor = SAME * characteristic(member, coefficients)
    more, finer = 4 + count // 10, 1.0
    for _ in range(5):
        form, value, amounts = solve(member, count + more, coefficients, finer)
        size = np.maximum(np.maximum(np.abs(value[count:]), np.abs(value[count - 1 : -1])), floor)
        apart = np.flatnonzero(np.diff(value[count - 1 :]) > APART * size)
        if len(apart) == 0:  # an eigenvalue more multiple than the spare ones
            more *= 4
            continue
        below = count + int(apart[0])
        if number_below(member, float(value[below - 1 : below + 1].mean())) == below:
            return Modes(value[:count], form, amounts[:, :count])
        finer *= 2
    raise MemberError(
        f"the first {count} modes could not be found for certain", "member",
        "give the jumps of its coefficients as steps, or ask for fewer modes",
    )  # fmt: skip


def null_modes(member: Member, mu: float = 0.0) -> Modes:
    """Modes of L0 - mu r that it does not resist: those whose eigenvalue is `mu`.

    Parameters
    ----------
    member : Member
        As in `modes`; for an undamped member driven by inertia give mu = omega**2.
    mu : float

    Returns
    -------
    Modes
        None of them for a regular operator. An eigenvalue within 1e-9 of `mu`, relative to it or
        to the member's first eigenvalues, counts as equal.

    Raises
    ------
    MemberError
        As `modes`.
    """
    member = bare(member)
    reach = SAME * max(abs(mu), characteristic(member, coefficients))
    low, high = (number_below(member, mu + side * reach) for side in (-1, 1))
    found = modes(member, max(high, 1))
    kept = slice(low, high)
    return Modes(found.eigenvalues[kept], found.form, found.amounts[:, kept])


def critical_compression(member: Member) -> float | None:
    """Largest compression [N] at which the member buckles, its distribution kept.

    All negative parts of p1 are scaled by one factor until L0 is no longer positive; tension
    stays as it is.

    Parameters
    ----------
    member : Member
        Order 4. Frequency, damping and lambda are ignored.

    Returns
    -------
    float or None
        The critical factor times the largest compression: the member is stable when its own
        largest compression is less. None without compression, 0 when it moves freely under any.

    Raises
    ------
    MemberError
        When a coefficient cannot be used.
    """
    member, largest = bare(member), largest_compression(member)
    if largest == 0:
        return None
    _, factor, _ = solve(member, 1, compression, 1.0)
    first = float(factor[0])
    return max(first, 0.0) * largest if first > SAME * characteristic(member, compression) else 0.0


def largest_compression(member: Member) -> float:
    """Largest compression [N] along a member of order 4, 0 without any."""
    profile = member.profiles.get("p1") if member.kind.order == 4 else None
    if profile is None:
        return 0.0
    edges = np.array(profile.edges)
    x = (edges[:-1, None] + np.diff(edges)[:, None] * np.linspace(1e-9, 1 - 1e-9, 65)).ravel()
    return max(float(np.max(-profile(x))), 0.0)


def refuse_buckled(member: Member) -> None:
    """Refuse a beam whose compression is critical or beyond; `general` may be indefinite.

    Raises
    ------
    MemberError
        Naming the critical compression.
    """
    largest = largest_compression(member)
    if largest == 0 or member.kind.name == "general":
        return
    still = bare(member)
    if number_below(still, SAME * characteristic(still, coefficients)) == 0:
        return  # every mode resists; finding the critical load would take far longer
    critical = critical_compression(still) or 0.0
    if largest < critical * (1 - SAME):
        return
    at_most = f"the critical compression is {_newtons(critical)}"
    if not critical:
        at_most = "as it is held, it buckles under any compression"
    raise MemberError(
        f"the beam buckles under its compression of {_newtons(largest)}: {at_most}",
        "member.tension",
        "lower the compression, or hold the beam more firmly",
    )


def _newtons(force: float) -> str:
    return f"{force / 1e3:.6g} kN" if force >= 1e3 else f"{force:.6g} N"


def _values(form: Form, amounts: Array, x: Array) -> Array:
    """Modes at places (len(x), count)."""
    x = np.atleast_1d(np.asarray(x, dtype=float))
    found = np.zeros((len(x), amounts.shape[1]))
    for here, group, k, t in _elements_at(form, x):
        own = shapes_at(form, group, k, t)["u"][0]
        found[here] = own @ _amounts_of(amounts, group, k)
    return found


def _states(form: Form, amounts: Array, x: Array) -> Array:
    """States (u, F) or (u, psi, M, V) of modes at places, (len(x), n, count); right limits."""
    x = np.atleast_1d(np.asarray(x, dtype=float))
    member = form.member
    found = np.zeros((len(x), member.kind.order, amounts.shape[1]))
    for here, group, k, t in _elements_at(form, x):
        table, own = shapes_at(form, group, k, t), _amounts_of(amounts, group, k)
        a, b = form.mesh.edges[group.elements[k] : group.elements[k] + 2]
        inside = np.clip(x[here], a + 1e-12 * (b - a), b - 1e-12 * (b - a))
        part = {name: values[0] @ own for name, values in table.items()}
        c = {name: v[:, None] for name, v in operator(member, inside).items()}
        if member.kind.order == 2:
            found[here] = np.stack([part["u"], c["p"] * part["slope"]], axis=1)
            continue
        shear = part.get("shear")
        psi = part["slope"] - (0.0 if shear is None else shear)
        more = c["shear"] * shear if shear is not None else _moment_slope(form, group, k, t, own)
        force = more + c["p1"] * part["slope"]
        found[here] = np.stack([part["u"], psi, -c["p2"] * part["bend"], force], axis=1)
    return found


def _moment_slope(form: Form, group: Group, k: int, t: Array, own: Array) -> Array:
    """M' at the places t of an element: that of the polynomial through M at the Gauss places."""
    a, b = form.mesh.edges[group.elements[k] : group.elements[k] + 2]
    gauss = (2 * group.places[k] - a - b) / (b - a)
    moment = -operator(form.member, group.places[k])["p2"][:, None] * (
        group.tables["bend"][k] @ own
    )
    # the degree of the shapes: beyond it there is rounding only, unless p2 varies
    degree = len(gauss) - SPARE - (2 if form.member.profiles["p2"].stepped else -4)
    series = legendre.legfit(gauss, moment, degree)
    found: Array = legendre.legval(t, legendre.legder(series)).T * 2 / (b - a)
    return found


def _elements_at(form: Form, x: Array) -> list[tuple[Index, Group, int, Array]]:
    """Per element that holds places: their numbers, its group, its row there, their t."""
    edges, slack = form.mesh.edges, 1e-9 * form.member.length
    off = ~((x >= edges[0] - slack) & (x <= edges[-1] + slack))
    if off.any():
        raise MemberError(
            f"x = {x[off][0]:g} m is not on the member",
            "x",
            f"keep it between {edges[0]:g} and {edges[-1]:g} m",
        )
    element = np.clip(np.searchsorted(edges, x, side="right") - 1, 0, len(edges) - 2)
    found = []
    for group in form.groups:
        for k, e in enumerate(group.elements):
            here = np.flatnonzero(element == e)
            if len(here):
                t = (2 * x[here] - edges[e] - edges[e + 1]) / (edges[e + 1] - edges[e])
                found.append((here, group, k, np.clip(t, -1.0, 1.0)))
    return found


def _amounts_of(amounts: Array, group: Group, k: int) -> Array:
    """Amounts of one element's unknowns, 0 where they are held."""
    unknowns = group.unknowns[k]
    found: Array = np.where(unknowns[:, None] >= 0, amounts[unknowns], 0.0)
    return found
