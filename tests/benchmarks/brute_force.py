"""Random models whose exact response is known from all their modes, by code that shares nothing with the bounds.

Every model is small enough for a dense eigenvalue decomposition of the inverted pencil ``M y = mu (K + tau M) y``;
its response is the sum over all modes, massless directions included.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg as sl
import scipy.sparse as sp

from modesieve.reduce.fingerprint import origin_of
from modesieve.reduce.modal.records import Certificate, Modes
from modesieve.reduce.model import (
    Damping,
    LossFactor,
    ModalRatio,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    Structure,
    Thermal,
)
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal


@dataclass
class DenseShift:
    """A dense factor of K - sigma M with the two things that the tail needs."""

    K: np.ndarray
    M: np.ndarray
    sigma: float

    def __post_init__(self):
        self.factor = sl.lu_factor(self.K - self.sigma * self.M)

    def solve(self, rhs):
        return sl.lu_solve(self.factor, rhs)


@dataclass
class Truth:
    """All modes of a pencil: x (k,), phi (n, k) M-orthonormal, and still (n, s) K-orthonormal massless directions."""

    x: np.ndarray
    phi: np.ndarray
    still: np.ndarray


def all_modes(K, M):
    """Every mode by the inverted pencil; eigenvalues below rounding become exact zeros (rigid-body modes)."""
    K, M = (A.toarray() if sp.issparse(A) else np.asarray(A) for A in (K, M))
    tau = 0.01 * np.trace(K) / max(np.trace(M), 1e-300)
    if np.linalg.eigvalsh(K)[0] > 1e-9 * np.linalg.norm(K, 2):
        tau = 0.0  # a shift would cost digits of the small eigenvalues
    mu, y = sl.eigh(M, K + tau * M)
    mu, y = mu[::-1], y[:, ::-1]
    if len(K) <= 200:
        mu, y = refined(M, K, tau, y)
    heavy = mu > 1e-12 * mu[0]
    x = (1 - tau * mu[heavy]) / mu[heavy]
    x[np.abs(x) < 1e-14 * np.max(np.abs(x))] = 0.0
    phi = y[:, heavy] / np.sqrt(mu[heavy])
    return Truth(x=x.astype(float), phi=phi.astype(float), still=y[:, ~heavy].astype(float))


def refined(M, K, tau, y):
    """Eigenpairs of ``M y = mu (K + tau M) y`` in 80-bit arithmetic from double ones, two quadratic steps.

    In double the inverted pencil knows its small mu, the high modes, to ``eps mu_1/mu`` only. Iterative refinement of
    a whole eigenvector matrix: Ogita and Aishima, Japan J. Indust. Appl. Math. 35 (2018).
    """
    M, K, y = (np.asarray(A, dtype=np.longdouble) for A in (M, K, y))
    for _ in range(2):
        R = np.eye(len(K)) - y.T @ ((K + tau * M) @ y)
        S = y.T @ (M @ y)
        mu = np.diag(S) / (1 - np.diag(R))
        gap = mu[None, :] - mu[:, None]
        near = np.abs(gap) < 1e-12 * mu[0]
        step = np.where(near, R / 2, (S + mu * R) / np.where(near, 1, gap))
        y = y + y @ step
    return mu, y


def output_parts(model):
    zero = np.zeros((model.p, model.n))
    if isinstance(model, Thermal):
        return model.C, zero, zero
    return tuple(zero if C is None else C for C in (model.Cq, model.Cv, model.Ca))


def law(model, w, x, counted, number):
    """The scalar ``1/h`` of modes with eigenvalues x at frequency w; counted: mask of the modes with modal damping."""
    if isinstance(model, Thermal):
        return x + 1j * w
    base, zeta = model.damping.base, np.zeros_like(x)
    root = np.sqrt(np.maximum(x, 0))
    if isinstance(base, ModalRatio):
        zeta = np.where(counted, base.ratio, 0.0)
    elif isinstance(base, RatioByFrequency):
        zeta = np.where(counted, np.interp(root, base.omega, base.ratio), 0.0)
    elif isinstance(base, RatioByMode):
        flexible = np.cumsum(x > 0) - 1
        zeta = np.where(counted, base.ratio[np.clip(flexible, 0, len(base.ratio) - 1)], 0.0)
    elif isinstance(base, Rayleigh):
        return x + 1j * w * (base.alpha + base.beta * x) - w**2
    elif isinstance(base, LossFactor):
        return x * (1 + 1j * base.eta * np.sign(w)) - w**2
    return x + 2j * zeta * root * w - w**2


def stiffness_law(model, w):
    """The factor on massless directions."""
    base = None if isinstance(model, Thermal) else model.damping.base
    if isinstance(base, Rayleigh):
        return 1 + 1j * w * base.beta
    if isinstance(base, LossFactor):
        return 1 + 1j * base.eta * np.sign(w)
    return 1.0 + 0j


@dataclass
class Case:
    """A model, its computed modes (a record) and its exact response."""

    model: object
    modes: Modes
    truth: Truth
    shifted: DenseShift
    label: str

    def response(self, omega, elastic=False):
        """Exact ``G(j w)`` (w, p, m): every mode (rigid-body ones left out if elastic) and every massless direction."""
        model, truth = self.model, self.truth
        q, v, a = output_parts(model)
        D = model.D if isinstance(model, Thermal) else model.Du
        counted = np.arange(len(truth.x)) < len(self.modes)
        b, s = truth.phi.T @ model.F, truth.still.T @ model.F
        b = np.where((truth.x == 0)[:, None] & elastic, 0.0, b)
        out = []
        for w in np.atleast_1d(omega):
            C = q + 1j * w * v - w**2 * a
            with np.errstate(divide="ignore", invalid="ignore"):
                h = 1 / law(model, w, truth.x, counted, None)
            with np.errstate(invalid="ignore"):
                h = np.where((truth.x == 0) & elastic, 0.0, h)
                G = (C @ truth.phi * h) @ b + C @ truth.still @ s / stiffness_law(model, w) + D
            out.append(G)
        return np.array(out)

    def exact_rest(self, omega):
        """Exact response of everything that was not computed, without feedthrough (w, p, m)."""
        k = len(self.modes)
        q, v, a = output_parts(self.model)
        b = self.truth.phi[:, k:].T @ self.model.F
        out = []
        for w in np.atleast_1d(omega):
            C = (q + 1j * w * v - w**2 * a) @ self.truth.phi[:, k:]
            out.append((C / law(self.model, w, self.truth.x[k:], np.zeros(len(b), bool), None)) @ b)
        return np.array(out)

    @property
    def omega_c(self):
        return self.modes.certificate.below_omega

    @property
    def scale(self):
        """A frequency (rad/s) about where the computed modes end."""
        return self.omega_c


def modes_record(model, truth, computed, x_c):
    """The Modes record that a modal stage would hand on, from the exact modes."""
    phi, x = truth.phi[:, :computed], truth.x[:computed]
    q, v, a = output_parts(model)
    b = phi.T @ model.F
    still = q @ truth.still @ (truth.still.T @ model.F)
    thermal = isinstance(model, Thermal)
    if thermal:
        system = FirstOrderModal(blocks=tuple(np.array([[-xi]]) for xi in x), B=b, C=q @ phi, D=model.D + still)
        value = -x.astype(complex)
    else:
        counted = np.ones(computed, dtype=bool)
        one = law(model, 1.0, x, counted, None)
        base = model.damping.base
        loss = base.eta if isinstance(base, LossFactor) else 0.0
        d = np.zeros(computed) if loss else np.imag(one)
        system = SecondOrderModal(
            x=x,
            d=d,
            eta=np.full(computed, loss),
            b=b,
            cq=q @ phi,
            cv=v @ phi,
            ca=a @ phi,
            D=model.Du,
            X=still,
            eta_X=loss,
        )
        half = (d + loss * np.sqrt(x)) / 2
        value = -half + np.sqrt((half**2 - x).astype(complex))
    below = x_c if thermal else np.sqrt(x_c)
    return Modes(
        origin=origin_of(model),
        system=system,
        eigenvalue=value,
        term=np.arange(computed),
        residual=np.zeros(computed),
        condition=np.ones(computed),
        cluster=((),) * computed,
        always_kept=tuple("rigid body" if xi == 0 else "" for xi in x),
        certificate=Certificate(
            complete="counted",
            below_omega=float(below),
            expected=int(np.sum(truth.x < x_c)),
            found=int(np.sum(x < x_c)),
            negative_pivots=int(np.sum(truth.x < x_c)),
            shift=0.0,
            solver="dense",
        ),
        model=model,
        vectors=phi,
    )


def without_mode(modes, index):
    """The list with one mode taken out; its certificate still claims it."""
    keep = np.delete(np.arange(len(modes)), index)
    return replace(
        modes,
        system=modes.system.select(keep),
        vectors=modes.vectors[:, keep],
        eigenvalue=modes.eigenvalue[keep],
        term=np.arange(len(keep)),
        residual=modes.residual[keep],
        condition=modes.condition[keep],
        cluster=tuple(modes.cluster[i] for i in keep),
        always_kept=tuple(modes.always_kept[i] for i in keep),
    )


def exact_solver(case):
    """A full solution that never fails, from all modes."""
    from modesieve.reduce.response.records import FullResponse

    def solve(omega):
        none = np.zeros(len(omega))
        G = case.response(omega)
        return FullResponse(omega=omega, G=G, backward_error=none, residual=none, method=("exact",) * len(omega))

    return solve


# ---- random models ---------------------------------------------------------------------------------------------------


def chain(rng, n, free):
    k = 10 ** rng.uniform(-1, 1, n + 1)
    if free:
        k[0] = 0
    k[-1] = 0
    K = np.diag(k[:-1] + k[1:]) - np.diag(k[1:-1], 1) - np.diag(k[1:-1], -1)
    return K, np.diag(10 ** rng.uniform(-0.7, 0.7, n))


def membrane(rng, n, free):
    nx = max(3, int(np.sqrt(n)) + rng.integers(0, 3))
    ny = max(2, n // nx)

    def line(k):
        return sp.diags([-np.ones(k - 1), np.ones(k - 1)], [0, 1], shape=(k - 1, k))

    D = sp.vstack([sp.kron(sp.identity(ny), line(nx)), sp.kron(line(ny), sp.identity(nx))]).toarray()
    K = D.T @ np.diag(10 ** rng.uniform(-0.5, 0.5, D.shape[0])) @ D
    if not free:
        K += np.diag(np.where(np.arange(nx * ny) % nx == 0, 10 ** rng.uniform(-1, 1), 0.0))
    T = np.diag(rng.uniform(0.5, 1.5, nx * ny))
    return K, T + 0.1 * (D.T @ D) if rng.random() < 0.3 else T


def pencil(rng, kind):
    n = int(rng.integers(8, 45))
    free = rng.random() < 0.25
    K, M = (chain if rng.random() < 0.5 else membrane)(rng, n, free)
    notes = ["free"] if free else []
    if rng.random() < 0.2:
        K, M = sl.block_diag(K, K), sl.block_diag(M, M)
        notes.append("cluster")
    if rng.random() < 0.2:
        light = rng.random(len(M)) < 0.25
        if np.allclose(M, np.diag(np.diag(M))) and not light.all():
            M[light, light] = 0
            notes.append("massless")
    elif kind == "structure" and rng.random() < 0.1 and len(M) > 8 and np.allclose(M, np.diag(np.diag(M))):
        # An offset mass: massless is a combination of two unknowns, not one of them.
        r = rng.uniform(0.5, 2)
        M[:2, :2] = M[0, 0] * np.array([[1, r], [r, r * r]])
        notes.append("offset mass")
    scale = 10 ** rng.uniform(-2, 4)
    return scale * K, M, notes


def ports(rng, n, width, forbidden):
    """Point and distributed ports; forbidden: mask of unknowns that may not carry one."""
    out = np.zeros((n, width))
    allowed = np.flatnonzero(~forbidden)
    for j in range(width):
        if rng.random() < 0.75:
            out[rng.choice(allowed), j] = 1
        else:
            out[allowed, j] = rng.normal(size=len(allowed))
    return out * 10 ** rng.uniform(-2, 2, width)


def damping_of(rng, x, form):
    low, high = np.sqrt(x[x > 0][0]), np.sqrt(x[x > 0][min(len(x[x > 0]) - 1, 8)])
    if form == "rayleigh":
        heavy = rng.random() < 0.3
        z = 10 ** rng.uniform(-0.5, 0.7) if heavy else 10 ** rng.uniform(-3, -1)
        return Rayleigh(alpha=z * low * rng.random(), beta=z / high)
    if form == "loss":
        return LossFactor(eta=10 ** rng.uniform(-3, -0.5))
    if form == "ratio":
        return ModalRatio(ratio=10 ** rng.uniform(-3, -0.7))
    if form == "table":
        return RatioByFrequency(omega=np.array([low, high]), ratio=10 ** rng.uniform(-3, -1, 2))
    if form == "by mode":
        return RatioByMode(ratio=10 ** rng.uniform(-3, -1, 4))
    return None


FORMS = ("none", "rayleigh", "loss", "ratio", "table", "by mode")


def random_case(seed, kind=None, form=None):
    """One random model with some of its modes computed, and its exact response."""
    rng = np.random.default_rng(seed)
    kind = kind or ("thermal" if rng.random() < 0.35 else "structure")
    form = form or str(rng.choice(FORMS))
    K, M, notes = pencil(rng, kind)
    n = len(K)
    truth = all_modes(K, M)
    m, p = (int(v) for v in rng.integers(1, 6, 2))
    light = np.diag(M) == 0
    nothing = np.zeros(n, dtype=bool)
    F = ports(rng, n, m, nothing)
    sparse = {"K": sp.csr_array(K)}
    if kind == "thermal":
        C = ports(rng, n, p, nothing).T
        if rng.random() < 0.3:
            C[0] = F[:, 0]
        model = Thermal(**sparse, E=sp.csr_array(M), F=F, C=C)
    else:
        which = rng.integers(1, 8)
        outputs = {}
        for bit, name in enumerate(("Cq", "Cv", "Ca")):
            if which >> bit & 1:
                # The velocity of a forced massless unknown is improper and refused at the door.
                bad = light | ("offset mass" in notes) if name != "Cq" else nothing
                outputs[name] = ports(rng, n, p, bad).T if not bad.all() else np.zeros((p, n))
        if "massless" in notes and len(outputs) and "Cq" not in outputs:
            F = ports(rng, n, m, light)
        if "offset mass" in notes:
            outputs = {"Cq": ports(rng, n, p, nothing).T}
        if "Cq" in outputs and rng.random() < 0.3:
            outputs["Cq"][0] = F[:, 0]
        model = Structure(
            **sparse, M=sp.csr_array(M), F=F, damping=Damping(base=damping_of(rng, truth.x, form)), **outputs
        )
    return finish(rng, model, truth, f"{kind} {form if kind == 'structure' else ''} {' '.join(notes)} seed {seed}")


def finish(rng, model, truth, label):
    """Choose how many modes are computed and where the counting point lies: in a gap, outside every cluster."""
    x = truth.x
    gaps = np.flatnonzero(np.diff(x) > 1e-6 * np.abs(x[1:])) + 1
    gaps = gaps[(x[gaps - 1] >= 0) & (gaps <= max(2, 2 * len(x) // 3))]
    gaps = gaps[gaps > np.sum(x <= 0)] if np.any(gaps > np.sum(x <= 0)) else gaps
    cut = int(rng.choice(gaps))
    x_c = x[cut - 1] + rng.uniform(0.02, 0.98) * (x[cut] - x[cut - 1])
    beyond = gaps[gaps >= cut]
    computed = int(rng.choice(beyond)) if rng.random() < 0.3 else cut
    modes = modes_record(model, truth, computed, x_c)
    free = np.any(x == 0)
    sigma = -(10 ** rng.uniform(-4, -0.3)) * x_c if free or rng.random() < 0.5 else 0.0
    shifted = DenseShift(model.K.toarray(), (model.E if isinstance(model, Thermal) else model.M).toarray(), sigma)
    return Case(model=model, modes=modes, truth=truth, shifted=shifted, label=label)


def off_grid(rng, case, count=50):
    """Frequencies (rad/s): random up to above the counting point, and close below it."""
    w_c = case.omega_c
    spread = 10 ** rng.uniform(-3, 0.3, count) if isinstance(case.model, Thermal) else rng.uniform(0, 1.3, count)
    return np.sort(np.concatenate([spread * w_c, np.array([0.9, 0.97, 0.99, 0.999]) * w_c]))


def wide_hub(modes, ports):
    """A hub of a 900-unknown membrane with so many modes, inputs and outputs, two tail levels."""
    from modesieve.reduce.truncation.build import build_hub

    rng = np.random.default_rng(7)
    K, M = membrane(rng, 900, False)
    truth = all_modes(K, M)
    F = np.zeros((len(K), ports))
    F[rng.choice(len(K), ports, replace=False), np.arange(ports)] = 1
    C = np.zeros((ports, len(K)))
    C[np.arange(ports), rng.choice(len(K), ports, replace=False)] = 1
    model = Structure(K=K, M=M, F=F, Cq=C, damping=Damping(base=Rayleigh(alpha=0.01, beta=0.01)))
    x_c = (truth.x[modes - 1] + truth.x[modes]) / 2
    record = modes_record(model, truth, modes, x_c)
    return build_hub(record, 2, shifted=DenseShift(K, M, 0.0))
