"""Models whose every mode is known: exact norm of the error system, and the sum bounds beside it."""

import numpy as np
import pytest
from brute_force import modes_record, random_case

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import FirstOrderModal
from modesieve.reduce.truncation.dense import error_norm, error_system, one_term, sum_bound


def random_blocks(seed, pairs=4, reals=5, ports=(2, 3)):
    """A stable system of real poles and lightly damped pairs, not symmetric."""
    rng = np.random.default_rng(seed)
    m, p = ports
    blocks = [np.array([[-v]]) for v in 10 ** rng.uniform(-1, 1, reals)]
    for w in 10 ** rng.uniform(-1, 1, pairs):
        z = 10 ** rng.uniform(-2.5, -0.5)
        blocks.append(w * np.array([[-z, np.sqrt(1 - z * z)], [-np.sqrt(1 - z * z), -z]]))
    n = reals + 2 * pairs
    return FirstOrderModal(
        blocks=tuple(blocks), B=rng.normal(size=(n, m)), C=rng.normal(size=(p, n)), D=rng.normal(size=(p, m))
    )


def fine_grid(system, points=4001):
    peaks = [abs(v.imag) + np.linspace(-8, 8, 401) * abs(v.real) for v in system.poles]
    w = np.concatenate([np.geomspace(1e-4, 1e3, points), *peaks])
    return np.unique(np.concatenate([[0.0], w[w > 0]]))


def test_error_norm_is_the_supremum_over_a_fine_grid():
    """The level-set norm of full less reduced is never below a dense sampling, and meets it at its own frequency."""
    for seed in range(8):
        full = random_blocks(seed)
        small = full.select(np.arange(0, full.terms, 2))
        value, at = error_norm(full, small)
        w = fine_grid(full)
        sampled = largest_singular_value(full.response(w) - small.response(w)).max()
        assert sampled <= value * (1 + 1e-9)
        there = largest_singular_value(full.response(np.array([at])) - small.response(np.array([at])))[0]
        assert there == pytest.approx(value, rel=1e-8)


def test_identical_terms_cancel():
    """The error system holds what differs only: kept terms leave it, even integrating ones."""
    full = random_blocks(3)
    unstable = FirstOrderModal(
        blocks=(*full.blocks, np.zeros((1, 1))),
        B=np.vstack([full.B, np.ones((1, 2))]),
        C=np.hstack([full.C, np.ones((3, 1))]),
        D=full.D,
    )
    keep = np.array([0, 5, full.terms])
    gap = error_system(unstable, unstable.select(keep))
    assert gap.terms == full.terms - 2
    assert not np.any(gap.D)
    assert np.isfinite(error_norm(unstable, unstable.select(keep))[0])


def test_sum_bounds_hold_and_say_which_norm():
    """Combined conjugates bound the H-infinity norm; apart they bound every entry's peak-to-peak gain as well."""
    for seed in range(6):
        full = random_blocks(seed)
        dropped = np.arange(1, full.terms, 2)
        bound = sum_bound(full, dropped)
        gap = error_system(full, full.select(np.setdiff1d(np.arange(full.terms), dropped)))
        value, _ = error_norm(full, full.select(np.setdiff1d(np.arange(full.terms), dropped)))
        assert value <= bound.h_infinity * (1 + 1e-9)
        A, B, C, _ = gap.state_space()
        lam, V = np.linalg.eig(A)
        t = np.linspace(0, 30 / np.min(-lam.real), 60_000)
        left = np.linalg.solve(V, B.astype(complex))
        g = np.abs(np.einsum("tk,pk,km->tpm", np.exp(np.outer(t, lam)), C @ V, left).real)
        integral = np.sum((g[1:] + g[:-1]) / 2, axis=0) * (t[1] - t[0])
        assert np.all(integral <= bound.peak_to_peak * (1 + 1e-3))


def test_structures_and_acceleration_feedthrough():
    """A dropped mode of an acceleration output takes its feedthrough with it."""
    seed = next(s for s in range(60) if random_case(s, "structure", "rayleigh").model.Ca is not None)
    case = random_case(seed, "structure", "rayleigh")
    system = case.modes.system
    part = one_term(system, len(case.modes) - 1)
    assert np.allclose(part.D, np.outer(system.ca[:, -1], system.b[-1]))
    w = np.linspace(0.01, 2, 50) * case.omega_c
    assert np.allclose(part.response(w), system.term_response(w, len(case.modes) - 1), rtol=1e-9, atol=1e-12)


def test_all_modes_of_a_symmetric_model():
    """For a collocated thermal model the error of dropping the fast modes is met at 0 exactly (ratio 1)."""
    case = random_case(2, "thermal")
    full = modes_record(case.model, case.truth, len(case.truth.x), 2 * case.truth.x[-1]).system
    one = FirstOrderModal(blocks=full.blocks, B=full.B[:, :1], C=full.B[:, :1].T, D=np.zeros((1, 1)))
    dropped = np.arange(3, one.terms)
    if one.blocks[0][0, 0] == 0:
        pytest.skip("integrating")
    value, at = error_norm(one, one.select(np.arange(3)))
    assert at == pytest.approx(0.0, abs=1e-6 * abs(one.blocks[3][0, 0]))
    assert sum_bound(one, dropped).peak_to_peak[0, 0] == pytest.approx(value, rel=1e-9)


def test_defective_blocks_have_a_bound_too():
    """A Jordan block has no partial fractions: its impulse response is bounded through a weighted energy."""
    A = np.array([[-1.0, 1, 0], [0, -1, 1], [0, 0, -1]])
    system = FirstOrderModal(blocks=(A,), B=np.eye(3)[:, 2:], C=np.eye(3)[:1], D=np.zeros((1, 1)))
    bound = sum_bound(system, np.array([0])).peak_to_peak[0, 0]
    # g(t) = t^2 e^-t / 2 is positive: its integral is the DC gain, 1.
    assert 1.0 <= bound <= 3.0


def test_unstable_terms_are_refused():
    """What does not decay has no peak-to-peak gain."""
    system = FirstOrderModal(blocks=(np.array([[0.1]]),), B=np.ones((1, 1)), C=np.ones((1, 1)), D=np.zeros((1, 1)))
    with pytest.raises(ChoiceError, match=r"left half plane|not stable"):
        sum_bound(system, np.array([0]))
