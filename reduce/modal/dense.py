"""Modes of a dense state space: ``A w = lambda E w``, ``v^H A = lambda v^H E``, ``v^H E w = 1``."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import DENSE_LIMIT, Complex, Ints, Real
from modesieve.reduce.errors import SolveError
from modesieve.reduce.fingerprint import origin_of
from modesieve.reduce.modal.blockform import BlockForm, block_form
from modesieve.reduce.modal.descriptor import Plain, plain
from modesieve.reduce.modal.records import Certificate, Modes
from modesieve.reduce.modal.request import request, too_many
from modesieve.reduce.model import StateSpace
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.small import FirstOrderModal

#: An eigenvalue within so many roundings of the axis is not called unstable.
_ROUNDINGS = 100.0


def state_space_modes(
    model: StateSpace, band: tuple[float, float] | None, *, count: int | None, progress: Listener
) -> Modes:
    """All modes of ``E x' = A x + B u``; with ``count`` the lowest so many, blocks and clusters whole.

    Raises SolveError above `DENSE_LIMIT` states, ModelError for a singular pencil or an index above 1, ChoiceError for
    more modes than exist.
    """
    began = time.perf_counter()
    request(band, count, model.n)
    A, E, warnings = _dense_matrices(model)
    tell(progress, "modes", message=f"{model.n} states, dense")
    dynamic = plain(A, E, np.asarray(model.B))
    B, C = dynamic.left @ model.B, model.C @ dynamic.right
    form = block_form(dynamic.A, B * model.amplitudes, C / model.resolutions[:, None])
    table = listing(form)
    keep = cut_at(table, count)
    return Modes(
        origin=origin_of(model),
        system=system_of(form, B, C, model.D + model.C @ dynamic.direct).select(np.arange(keep.terms)),
        eigenvalue=table.value[: keep.modes],
        term=table.term[: keep.modes],
        residual=_residuals(A, E, form, dynamic, table)[: keep.modes],
        condition=table.condition[: keep.modes],
        cluster=table.cluster[: keep.modes],
        always_kept=table.reasons[: keep.modes],
        certificate=certificate_of(table, keep, len(dynamic.A)),
        model=model,
        vectors=(dynamic.right @ form.right)[:, : keep.states],
        left=(form.left @ dynamic.left).T[:, : keep.states],
        static=static_of(form, B, C, table),
        warnings=(*warnings, *block_warnings(table)),
        solver="LAPACK, dense",
        seconds=time.perf_counter() - began,
    )


def _dense_matrices(model: StateSpace) -> tuple[Real, Real | None, list[str]]:
    sparse = [name for name, X in (("A", model.A), ("E", model.E)) if sp.issparse(X)]
    if model.n > DENSE_LIMIT:
        raise SolveError(
            f"{model.n} states are too many for the dense solver",
            expected=f"at most {DENSE_LIMIT} states",
            got=f"{model.n}",
            remedy="store a symmetric model as a structure or as a thermal model, which stay sparse",
        )
    warnings = [f"{' and '.join(sparse)} made dense: {model.n} by {model.n}"] if sparse else []
    A, E = (X.toarray() if sp.issparse(X) else X for X in (model.A, model.E))
    return np.asarray(A), None if E is None else np.asarray(E), warnings


# ---- the list of modes ---------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True, eq=False)
class Listing:
    """Modes in ascending abs(eigenvalue): value, term, condition (k,); terms in the order of their first mode."""

    value: Complex
    term: Ints
    condition: Real
    cluster: tuple[tuple[int, ...], ...]
    reasons: tuple[str, ...]
    sizes: Ints  # states per term


def listing(form: BlockForm, zero_name: str = "integrating") -> Listing:
    """The modes of a block form; terms keep the form's order, which ascends."""
    term = np.concatenate([np.full(len(t.eigenvalues), i) for i, t in enumerate(form.terms)])
    value = np.concatenate([t.eigenvalues for t in form.terms])
    condition = np.concatenate([t.condition for t in form.terms])
    rounding = np.concatenate([t.rounding for t in form.terms])
    group = np.concatenate([_group_of(i, t.group, len(t.eigenvalues)) for i, t in enumerate(form.terms)])
    order = np.lexsort((term, np.abs(value)))
    group = group[order]
    members = {g: tuple(int(i) + 1 for i in np.flatnonzero(group == g)) for g in np.unique(group)}
    return Listing(
        value=value[order],
        term=term[order].astype(np.int64),
        condition=condition[order],
        cluster=tuple(members[g] if len(members[g]) > 1 else () for g in group),
        reasons=tuple(_reason(value[i], rounding[i], zero_name) for i in order),
        sizes=np.array([len(t.block) for t in form.terms], dtype=np.int64),
    )


def _group_of(term: int, group: int, modes: int) -> Ints:
    """A label that members share: blocks by their term, repeated eigenvalues by their group."""
    return np.full(modes, 2 * term if group < 0 else 2 * group + 1, dtype=np.int64)


def _reason(value: complex, rounding: float, zero_name: str) -> str:
    if value == 0:
        return zero_name
    return "unstable" if value.real > _ROUNDINGS * rounding else ""


@dataclass(frozen=True, kw_only=True)
class Cut:
    """How many modes, terms and states are listed; above: abs(eigenvalue) of the next mode, None if all are."""

    modes: int
    terms: int
    states: int
    above: float | None = None


def cut_at(table: Listing, count: int | None) -> Cut:
    """The lowest ``count`` modes and what belongs to them; all for None."""
    k = len(table.value)
    if count is not None and count > k:
        raise too_many(count, k)
    end = k if count is None else count
    while end < k and not _splits_nothing(table, end):
        end += 1
    terms = int(table.term[:end].max()) + 1
    return Cut(
        modes=end,
        terms=terms,
        states=int(table.sizes[:terms].sum()),
        above=float(abs(table.value[end])) if end < k else None,
    )


def _splits_nothing(table: Listing, end: int) -> bool:
    listed = set(table.term[:end].tolist())
    whole = listed.isdisjoint(table.term[end:].tolist()) and max(listed) + 1 == len(listed)
    apart = all(max(c, default=0) <= end for c in table.cluster[:end])
    return whole and apart and abs(table.value[end]) > abs(table.value[end - 1]) * (1 + 1e-9)


def certificate_of(table: Listing, keep: Cut, states: int) -> Certificate:
    """All eigenvalues of a dense matrix are known: as many states as the blocks have."""
    found = int(table.sizes.sum())
    if found != states:
        reason = f"the blocks have {found} states, the model {states}"
        return Certificate(complete="no", expected=states, found=found, solver="LAPACK", reason=reason)
    if keep.above is None:
        reason = f"all {states} dynamic states, by dense LAPACK"
        return Certificate(complete="all", expected=keep.modes, found=keep.modes, solver="LAPACK", reason=reason)
    last = float(abs(table.value[keep.modes - 1]))
    middle = np.sqrt(last * keep.above) if last > 0 else keep.above / 2
    return Certificate(
        complete="counted",
        below_omega=float(middle),
        expected=keep.modes,
        found=keep.modes,
        solver="LAPACK",
        reason=f"all {states} dynamic states were computed, the lowest are listed",
    )


# ---- the small system ----------------------------------------------------------------------------------------------


def system_of(form: BlockForm, B: Real, C: Real, D: Real) -> FirstOrderModal:
    """All terms in block modal coordinates."""
    blocks = tuple(t.block for t in form.terms)
    return FirstOrderModal(blocks=blocks, B=form.left @ B, C=C @ form.right, D=D)


def static_of(form: BlockForm, B: Real, C: Real, table: Listing) -> Real:
    """``-sum C_i A_i^-1 B_i`` over everything that is not integrating, (p, m)."""
    system = system_of(form, B, C, np.zeros((C.shape[0], B.shape[1])))
    moving = {int(table.term[i]) for i, reason in enumerate(table.reasons) if reason in ("integrating", "rigid body")}
    out = np.zeros((C.shape[0], B.shape[1]))
    for i, block in enumerate(system.blocks):
        if i not in moving:
            rows = system.states_of(i)
            out -= system.C[:, rows] @ np.linalg.solve(block, system.B[rows])
    return out


def _residuals(A: Real, E: Real | None, form: BlockForm, dynamic: Plain, table: Listing) -> Real:
    """``norm(A X - E X A_i)/(norm(A X) + norm(E X A_i))`` per term, as values per mode."""
    X = dynamic.right @ form.right
    AX, EX = A @ X, X if E is None else E @ X
    rounding = np.abs(A) @ np.abs(X)
    out, at = np.zeros(len(form.terms)), 0
    for i, term in enumerate(form.terms):
        rows = slice(at, at + len(term.block))
        at = rows.stop
        right = EX[:, rows] @ term.block
        size = _size(AX[:, rows], right, rounding[:, rows])
        out[i] = np.linalg.norm(AX[:, rows] - right) / size
    return np.asarray(out[table.term])


def _size(left: Real, right: Real, rounding: Real) -> float:
    """What a residual is relative to; for an eigenvalue 0, where both sides vanish, the size of the sums' terms."""
    size, spread = float(np.linalg.norm(left) + np.linalg.norm(right)), float(np.linalg.norm(rounding))
    return size if size > 1e4 * np.finfo(float).eps * spread else max(spread, 1e-300)


def block_warnings(table: Listing) -> list[str]:
    out: list[Any] = []
    for term in np.flatnonzero(table.sizes > 2):
        size = int(table.sizes[term])
        numbers = ", ".join(str(i + 1) for i in np.flatnonzero(table.term == term)[:8])
        more = " ..." if np.count_nonzero(table.term == term) > 8 else ""
        out.append(f"modes {numbers}{more} only make sense together: a block of {size} states")
    if len(out) > 3:
        out = [*out[:3], f"and {len(out) - 3} more blocks"]
    return out
