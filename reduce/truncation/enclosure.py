"""What a small transfer function can do between two frequencies, proved by Taylor's formula.

``f(w) = P(w) + L diag(h_i(w)) Q(w)`` with scalar resonances ``h_i = 1/(x_i (1 + j eta_i) + j w d_i - w^2)`` (or
``1/(x_i + j w)``) and polynomials P, Q in w. About the middle of an interval of half width s, with exact Taylor
coefficients F_j and the remainder bounded by suprema over the interval,

    norm(f) <= max(norm(F_0 - s F_1), norm(F_0 + s F_1)) + sum_(2 <= j < J) s^j norm(F_j) + s^J remainder.

The coefficients keep every cancellation between terms; only the remainder adds magnitudes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import comb
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.response.norms import frobenius, largest_singular_value
from modesieve.reduce.truncation.diagonal import Diagonal

_ORDER = 6
_PIECE = 1 << 22


@dataclass(frozen=True, kw_only=True, eq=False)
class Rational:
    """``f(w) = sum_e P_e w^e + L diag(h(w)) sum_e Q_e w^e``.

    poles: the terms whose x, d, eta and order make the h_i; L (r, k); Q (e, k, q) and P (e, r, q) complex coefficients
    of ascending powers.
    """

    poles: Diagonal
    L: Complex
    Q: Complex
    P: Complex

    def at(self, omega: Real) -> Complex:
        """``f(w)``, (w, r, q)."""
        w = np.asarray(omega, dtype=float)
        return np.asarray(_taylor(self, w, 1)[0])


@dataclass(frozen=True, kw_only=True, eq=False)
class Enclosure:
    """Bounds over intervals: middle (w,) value of the norm in the middle; upper (w,) no larger value anywhere inside;
    lower (w,) no smaller value anywhere inside (0 where nothing is known)."""

    middle: Real
    upper: Real
    lower: Real


def transposed(terms: Diagonal, rows: Real, columns: Real) -> Rational:
    """The transposed transfer function of ``terms``, weighted: rows (p,) divide outputs, columns (m,) multiply inputs.

    Valid for w > 0. Transposed because only the outputs depend on the frequency.
    """
    C = np.stack([terms.cq, 1j * terms.cv, -terms.ca]) / rows[None, :, None]
    through = (terms.D + terms.X / (1 + 1j * terms.eta_X)) * (columns[None, :] / rows[:, None])
    Q = np.swapaxes(C, 1, 2).astype(complex)
    return Rational(
        poles=terms, L=(terms.b * columns).T.astype(complex), Q=_trimmed(Q), P=through.T[None].astype(complex)
    )


def difference(one: Diagonal, other: Diagonal) -> Diagonal:
    """``one - other`` as a list of terms; terms that agree in every number cancel. Needs one common order.

    Terms without coupling, or with a coupling at rounding level of the largest, are left out: an undamped mode that
    nothing excites has no resonance.
    """
    mine, theirs = _rows(one), _rows(other)
    lookup = {key: i for i, key in enumerate(theirs)}
    gone = {i: lookup.pop(key) for i, key in enumerate(mine) if key in lookup}
    left = one.select(np.array([i for i in range(one.terms) if i not in gone], dtype=int))
    taken = set(gone.values())
    right = other.select(np.array([i for i in range(other.terms) if i not in taken], dtype=int))
    static: Any = one.X / (1 + 1j * one.eta_X) - other.X / (1 + 1j * other.eta_X)
    minus = replace(right, cq=-right.cq, cv=-right.cv, ca=-right.ca, D=-right.D, X=-right.X)
    joined = left.join(minus)
    # Two remainders with different loss factors have no common one: their difference goes over as one complex number.
    return replace(joined.select(_coupled(joined, one)), D=one.D - other.D, X=static, eta_X=0.0)


def _coupled(terms: Diagonal, model: Diagonal) -> Ints:
    def strength(part: Diagonal) -> Real:
        w = np.sqrt(np.abs(part.x)) if part.order == 2 else np.abs(part.x)
        c = np.abs(part.cq) + w * np.abs(part.cv) + w**2 * np.abs(part.ca)
        return np.linalg.norm(c, axis=0) * np.linalg.norm(part.b, axis=1)

    return np.flatnonzero(strength(terms) > 1e-14 * strength(model).max(initial=0.0))


def _rows(terms: Diagonal) -> list[bytes]:
    parts = (terms.x[:, None], terms.d[:, None], terms.eta[:, None], terms.b, terms.cq.T, terms.cv.T, terms.ca.T)
    return [row.tobytes() for row in np.ascontiguousarray(np.hstack(parts) + 0.0)]


def enclose(f: Rational, left: Real, right: Real) -> Enclosure:
    """Bounds of the largest singular value of f over every interval [left, right], 0 < left <= right."""
    step = max(1, _PIECE // max(1, _ORDER * f.Q.shape[1] * f.Q.shape[2]))
    parts = [_enclose(f, left[i : i + step], right[i : i + step]) for i in range(0, len(left), step)]
    return Enclosure(**{n: np.concatenate([getattr(e, n) for e in parts]) for n in ("middle", "upper", "lower")})


@dataclass(frozen=True, kw_only=True, eq=False)
class Expansion:
    """Taylor coefficients about the middles, J of (w, r, q), and bounds of everything after: ``remainder`` of the norm
    (w,) and ``columns`` of the norm of every column (w, q), both already times s^J; s (w,): half widths."""

    coefficients: list[Complex]
    remainder: Real
    columns: Real
    s: Real


@np.errstate(invalid="ignore", over="ignore", divide="ignore")
def expand(f: Rational, left: Real, right: Real) -> Expansion:
    """f over intervals as a polynomial with a proved remainder; for a few hundred intervals."""
    s = (right - left) / 2
    rest = _remainder(f, np.abs(f.Q), left, right)
    columns = s[:, None] ** _ORDER * np.einsum("k,wkq->wq", np.linalg.norm(f.L, axis=0), rest)
    size = np.linalg.norm(f.L, axis=0) * np.linalg.norm(f.Q, axis=2)
    whole = s**_ORDER * _remainder(f, size[:, :, None], left, right)[:, :, 0].sum(axis=1)
    return Expansion(coefficients=_taylor(f, (left + right) / 2, _ORDER), remainder=whole, columns=columns, s=s)


@np.errstate(invalid="ignore", over="ignore")
def product_norm(one: Expansion, other: Expansion) -> tuple[Real, Real]:
    """No smaller than ``norm(f^T g)``, (w,), and than every entry's absolute value, (w, p, m), in each interval."""
    s, J = one.s, len(one.coefficients)
    terms = [_convolved(one.coefficients, other.coefficients, k) for k in range(2 * J - 1)]
    wide = s[:, None, None]
    ends = (terms[0] - wide * terms[1], terms[0] + wide * terms[1])
    norm = np.maximum(largest_singular_value(ends[0]), largest_singular_value(ends[1]))
    entry = np.maximum(np.abs(ends[0]), np.abs(ends[1]))
    for k in range(2, 2 * J - 1):
        norm = norm + s**k * frobenius(terms[k])
        entry = entry + wide**k * np.abs(terms[k])
    sizes = [_sizes(part) for part in (one, other)]
    (f, f_columns), (g, g_columns) = sizes
    norm = norm + one.remainder * (g + other.remainder) + other.remainder * f
    a, b = one.columns[:, :, None], other.columns[:, None, :]
    entry = entry + a * (g_columns[:, None, :] + b) + b * f_columns[:, :, None]
    return _inf(norm), _inf(entry)


def _convolved(one: list[Complex], other: list[Complex], k: int) -> Complex:
    J = len(one)
    return sum(  # type: ignore[return-value]
        np.swapaxes(one[i], 1, 2) @ other[k - i] for i in range(max(0, k - J + 1), min(J, k + 1))
    )


def _sizes(part: Expansion) -> tuple[Real, Real]:
    """Bounds of the polynomial's norm (w,) and of its columns' norms (w, q) over the interval."""
    columns = sum(
        part.s[:, None] ** j * np.sqrt(np.sum(np.abs(F) ** 2, axis=1)) for j, F in enumerate(part.coefficients)
    )
    return np.sqrt(np.sum(np.asarray(columns) ** 2, axis=1)), np.asarray(columns)


def upper_norm(part: Expansion) -> tuple[Real, Real]:
    """No smaller than the norm, (w,), and than every column's norm, (w, q), in each interval."""
    F, s = part.coefficients, part.s
    wide = s[:, None, None]
    ends = (F[0] - wide * F[1], F[0] + wide * F[1])
    norm = np.maximum(largest_singular_value(ends[0]), largest_singular_value(ends[1]))
    columns = np.sqrt(np.maximum(np.sum(np.abs(ends[0]) ** 2, axis=1), np.sum(np.abs(ends[1]) ** 2, axis=1)))
    for j in range(2, len(F)):
        norm = norm + s**j * frobenius(F[j])
        columns = columns + s[:, None] ** j * np.sqrt(np.sum(np.abs(F[j]) ** 2, axis=1))
    return _inf(norm + part.remainder), _inf(columns + part.columns)


def entries(f: Rational, left: Real, right: Real) -> Real:
    """No larger absolute value of any entry anywhere in each interval, (w, r, q)."""
    step = max(1, _PIECE // max(1, _ORDER * f.Q.shape[1] * f.Q.shape[2]))
    return np.concatenate([_entries(f, left[i : i + step], right[i : i + step]) for i in range(0, len(left), step)])


@np.errstate(invalid="ignore", over="ignore", divide="ignore")
def _enclose(f: Rational, left: Real, right: Real) -> Enclosure:
    s = (right - left) / 2
    F = _taylor(f, (left + right) / 2, _ORDER)
    wide = s[:, None, None]
    middle = largest_singular_value(F[0])
    ends = np.maximum(largest_singular_value(F[0] - wide * F[1]), largest_singular_value(F[0] + wide * F[1]))
    # The Frobenius norm of the small higher coefficients spares their singular values.
    curved = sum(s**j * np.sqrt(np.sum(np.abs(F[j]) ** 2, axis=(1, 2))) for j in range(2, _ORDER))
    size = np.linalg.norm(f.L, axis=0) * np.linalg.norm(f.Q, axis=2)
    tail = curved + s**_ORDER * _remainder(f, size[:, :, None], left, right)[:, :, 0].sum(axis=1)
    upper, slope = ends + tail, s * np.sqrt(np.sum(np.abs(F[1]) ** 2, axis=(1, 2)))
    return Enclosure(middle=middle, upper=_inf(upper), lower=np.maximum(np.nan_to_num(middle - slope - tail), 0.0))


@np.errstate(invalid="ignore", over="ignore", divide="ignore")
def _entries(f: Rational, left: Real, right: Real) -> Real:
    s = ((right - left) / 2)[:, None, None]
    F = _taylor(f, (left + right) / 2, _ORDER)
    ends = np.maximum(np.abs(F[0] - s * F[1]), np.abs(F[0] + s * F[1]))
    curved = sum(s**j * np.abs(F[j]) for j in range(2, _ORDER))
    return _inf(ends + curved + s**_ORDER * (np.abs(f.L) @ _remainder(f, np.abs(f.Q), left, right)))


def _taylor(f: Rational, middle: Real, order: int) -> list[Complex]:
    """Taylor coefficients F_0 .. F_(order-1) of f about each middle, (w, r, q) each."""
    h = _resonances(f.poles, middle, order)
    Q = _shifted(f.Q, middle, order)
    P = _shifted(f.P, middle, order)
    out = []
    for j in range(order):
        inner = sum(h[a][:, :, None] * Q[j - a] for a in range(j + 1) if j - a < len(Q))
        out.append(f.L @ inner + (P[j] if j < len(P) else 0.0))
    return out


def _shifted(poly: Complex, middle: Real, order: int) -> list[Complex]:
    """Taylor coefficients of a polynomial about each middle, as many as it has (at most order)."""
    degree = len(poly) - 1
    powers = middle[:, None, None]
    return [
        sum(comb(e, j) * powers ** (e - j) * poly[e] for e in range(j, degree + 1))
        for j in range(min(order, degree + 1))
    ]


@np.errstate(divide="ignore", invalid="ignore", over="ignore")
def _resonances(poles: Diagonal, middle: Real, order: int) -> list[Complex]:
    """Taylor coefficients of every h about each middle, (w, k) each: ``p_0 t_j = -p_1 t_(j-1) - p_2 t_(j-2)``."""
    w = middle[:, None]
    p0: Any
    p1: Any
    if poles.order == 1:
        p0, p1, p2 = poles.x + 1j * w, 1j, 0.0
    else:
        p0, p1, p2 = poles.x * (1 + 1j * poles.eta) + 1j * w * poles.d - w**2, 1j * poles.d - 2 * w, -1.0
    t = [1 / p0]
    for j in range(1, order):
        t.append(-(p1 * t[j - 1] + (p2 * t[j - 2] if j > 1 else 0.0)) / p0)
    return t


def _remainder(f: Rational, size: Real, left: Real, right: Real) -> Real:
    """Supremum over each interval of the Taylor coefficient of order J of ``h Q``: (w, k, q); size = abs(Q) (e, k, q).

    Divided derivatives of h by the same recursion with the smallest abs(p_0) and the largest abs(p_1) in the interval.
    """
    h = _suprema(f.poles, left, right)
    out: Real = np.zeros((len(left), *size.shape[1:]))
    top, degree = right[:, None, None], len(size) - 1
    for b in range(min(_ORDER, degree) + 1):
        coefficient = sum(comb(e, b) * top ** (e - b) * size[e] for e in range(b, degree + 1))
        out = out + h[_ORDER - b][:, :, None] * coefficient
    return out


@np.errstate(divide="ignore", invalid="ignore", over="ignore")
def _suprema(poles: Diagonal, left: Real, right: Real) -> list[Real]:
    hi, smallest = right[:, None], nearest(poles, left, right)
    p1, p2 = (np.ones_like(hi), 0.0) if poles.order == 1 else (np.hypot(poles.d, 2 * hi), 1.0)
    t = [1 / smallest]
    for j in range(1, _ORDER + 1):
        t.append((p1 * t[j - 1] + (p2 * t[j - 2] if j > 1 else 0.0)) / smallest)
    return t


def nearest(poles: Diagonal, left: Real, right: Real) -> Real:
    """No larger than ``abs(1/h_i)`` anywhere in each interval, (w, k)."""
    lo, hi = left[:, None], right[:, None]
    if poles.order == 1:
        return np.asarray(np.hypot(poles.x, lo))
    real = np.maximum(np.maximum(poles.x - hi**2, lo**2 - poles.x), 0.0)
    return np.asarray(np.hypot(real, poles.x * poles.eta + lo * poles.d))


def _trimmed(Q: Complex) -> Complex:
    """Without the highest powers that do not occur."""
    used = [e for e in range(len(Q)) if np.any(Q[e])]
    return Q[: (used[-1] + 1 if used else 1)]


def _inf(values: Real) -> Real:
    return np.where(np.isnan(values), np.inf, values)
