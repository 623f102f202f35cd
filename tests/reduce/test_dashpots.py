"""Local dampers as closed ports: the bound against dense complex solves of the damped model."""

import numpy as np
import pytest
from brute_force import DenseShift, all_modes, membrane, modes_record

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal import find_modes
from modesieve.reduce.model import Damping, LossFactor, ModalRatio, Rayleigh, Structure
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.dashpots import damped_hub, loop_of, opened


def damped(seed, base, viscous=True, loss=False):
    """A membrane with two dashpots between neighbours and to the ground, and a lossy spring."""
    rng = np.random.default_rng(seed)
    K, M = membrane(rng, 70, False)
    M, n = np.diag(np.diag(M)), len(K)
    D, S = np.zeros((n, n)), np.zeros((n, n))
    for matrix, size in ((D, 1.0), (D, 0.3), (S, 0.2)):
        i, j = rng.choice(n, 2, replace=False)
        u = np.zeros(n)
        u[i], u[j] = 1, -1
        matrix += size * rng.uniform(0.2, 3) * np.outer(u, u)
    F, C = np.zeros((n, 2)), np.zeros((2, n))
    F[rng.integers(n), 0], F[rng.integers(n), 1], C[0, rng.integers(n)], C[1, rng.integers(n)] = 1, 1, 1, 1
    local = {"viscous": D if viscous else None, "stiffness_loss": S if loss else None}
    return Structure(K=K, M=M, F=F, Cq=C, damping=Damping(base=base, **local)), K, M, D * viscous, S * loss


def exact(K, M, D, S, base, model, w):
    a = {"alpha": 0.0, "beta": 0.0} if not isinstance(base, Rayleigh) else vars(base)
    eta = base.eta if isinstance(base, LossFactor) else 0.0
    out = []
    for v in w:
        Z = K * (1 + 1j * eta) + 1j * v * (a["alpha"] * M + a["beta"] * K + D) + 1j * S - v**2 * M
        out.append(model.Cq @ np.linalg.solve(Z, model.F.astype(complex)))
    return np.array(out)


@pytest.mark.parametrize("base", [None, Rayleigh(alpha=0.02, beta=0.01), LossFactor(eta=0.03)])
@pytest.mark.parametrize("loss", [False, True])
def test_closed_loop_bound_holds(base, loss):
    """The true response lies within the bound of the closed hub, beside resonances and up to the counting point."""
    useful = 0
    for seed in range(6):
        model, K, M, D, S = damped(seed, base, loss=loss)
        loop = loop_of(model)
        open_model = opened(model, loop)
        truth = all_modes(K, M)
        k = 20
        x_c = (truth.x[k - 1] + truth.x[k]) / 2
        modes = modes_record(open_model, truth, k, x_c)
        reference = damped_hub(model, modes, loop, shifted=DenseShift(K, M, 0.0))
        w = np.linspace(0.02, 0.97, 150) * np.sqrt(x_c)
        error = largest_singular_value(exact(K, M, D, S, base, model, w) - reference.response(w))
        bound = reference.error(w)
        assert np.all(error <= bound)
        size = largest_singular_value(reference.response(w))
        useful += np.median(bound[w < 0.6 * np.sqrt(x_c)] / size[w < 0.6 * np.sqrt(x_c)]) < 1e-2
    assert useful >= 4


def test_found_modes_serve():
    """The modal stage's own modes of the opened model make the same hub; dampers keep their strength."""
    model, K, M, D, S = damped(3, Rayleigh(alpha=0.02, beta=0.01))
    loop = loop_of(model)
    assert np.allclose(loop.L @ loop.R @ loop.L.T, D)
    modes = find_modes(opened(model, loop), count=15)
    reference = damped_hub(model, modes, loop)
    w = np.linspace(0.05, 0.6, 40) * modes.certificate.below_omega
    G = exact(K, M, D, S, model.damping.base, model, w)
    assert np.all(largest_singular_value(G - reference.response(w)) <= reference.error(w))


def test_refusals():
    """No damper, dampers everywhere, and modal ratios beside dampers are refused with the reason."""
    model, *_ = damped(1, ModalRatio(ratio=0.01))
    with pytest.raises(ChoiceError, match="modal ratios"):
        opened(model, loop_of(model))
    plain, K, M, _, _ = damped(1, None, viscous=False)
    with pytest.raises(ChoiceError, match="no local damper"):
        loop_of(plain)
    every = Structure(K=K, M=M, F=model.F, Cq=model.Cq, damping=Damping(viscous=M))
    with pytest.raises(ChoiceError, match="too many local dampers"):
        loop_of(every)
