"""The guarantee in the flow: from a model through its modes to a reduced model that knows how wrong it is."""

from dataclasses import replace

import numpy as np
import pytest
from brute_force import membrane

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal import find_modes
from modesieve.reduce.model import Damping, Input, ModalRatio, Output, Rayleigh, Structure, Thermal
from modesieve.reduce.response.full import full_response
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation import Count, Keep, Tolerance, truncate
from modesieve.reduce.truncation.certified import certified, guaranteed


def plate(kind, seed=1, n=100, base=None, free=False):
    """A random membrane of two inputs and two outputs, one pair collocated, with weights."""
    rng = np.random.default_rng(seed)
    K, M = membrane(rng, n, free)
    M, n = np.diag(np.diag(M)), len(K)
    F, C = np.zeros((n, 2)), np.zeros((2, n))
    F[3, 0], F[n - 5, 1], C[0, 3], C[1, n // 2] = 1, 1, 1, 1
    channels = {
        "inputs": (Input(name="shaker", unit="N", amplitude=2.0), Input(name="fan", unit="N")),
        "outputs": (Output(name="tip", unit="m"), Output(name="hub", unit="m")),
    }
    if kind == "thermal":
        return Thermal(K=K, E=M, F=F, C=C, **channels)
    return Structure(K=K, M=M, F=F, Cq=C, damping=Damping(base=base or Rayleigh(alpha=0.01, beta=0.02)), **channels)


@pytest.mark.parametrize("kind", ["structure", "thermal"])
@pytest.mark.parametrize("statics", ["none", "feedthrough", "vectors"])
def test_certified_flow(kind, statics):
    """truncate then certify: the figure is guaranteed, above the measured one, and spot checks were solved."""
    model = plate(kind)
    modes = find_modes(model, count=12)
    band = (0.0, modes.certificate.below_omega / 1.5)
    small = truncate(modes, Keep(numbers=tuple(range(1, 9))), statics=statics, band=band)
    sure = certified(small)
    assert sure.guarantee.holds, sure.guarantee.reason
    assert sure.error.certainty == "guaranteed"
    assert sure.error.relative_to == "local"
    assert sure.error.value >= small.error.value * (1 - 1e-9)
    assert sure.error.value <= small.error.value * 1.1 + 1e-9
    assert sure.error.pair in {(i.name, o.name) for i in model.inputs for o in model.outputs}
    assert len(sure.guarantee.spot_checks) >= 3
    assert sure.guarantee.absolute[0].unit == "m"
    assert sure.guarantee.modes_below == modes.certificate.expected


@pytest.mark.parametrize("base", [Rayleigh(alpha=0.01, beta=0.02), ModalRatio(ratio=0.02)])
def test_two_per_cent_in_one_call(base):
    """A tolerance and a band give the smallest model; an independent fine sweep of the full model agrees."""
    model = plate("structure", base=base)
    modes = find_modes(model, count=20)
    band = (0.0, modes.certificate.below_omega / 2)
    small = guaranteed(modes, Tolerance(value=0.02, of="local"), band)
    assert small.guarantee.holds
    assert small.error.value <= 0.02
    assert small.guarantee.threshold == small.error.threshold
    full = full_response(model, np.linspace(1e-3, 1, 300) * band[1], modes=modes)
    size = largest_singular_value(model.weigh(full.G))
    error = largest_singular_value(model.weigh(full.G - small.response(full.omega)))
    assert np.max(error / np.maximum(size, small.guarantee.threshold)) <= 0.02
    assert any("half the tolerance" in note for note in small.notes)


def test_free_body():
    """Rigid-body modes: finite guaranteed figures, elastic peak, all rigid modes kept."""
    model = plate("structure", free=True)
    modes = find_modes(model, count=15)
    assert any(modes.always_kept)
    band = (0.0, modes.certificate.below_omega / 1.6)
    small = certified(truncate(modes, Count(modes=10), statics="vectors", levels=2, band=band))
    assert small.guarantee.holds, small.guarantee.reason
    assert np.isfinite(small.error.value)
    assert np.isfinite(small.guarantee.peak.value)


def test_a_wrong_list_loses_the_guarantee_and_says_where():
    """A coupling that is off by 1 % in the list: measured error stays, guarantee withdrawn, frequency named."""
    model = plate("structure")
    modes = find_modes(model, count=12)
    b = modes.system.b.copy()
    b[0] *= 1.01
    wrong = replace(modes, system=replace(modes.system, b=b))
    band = (0.0, modes.certificate.below_omega / 1.5)
    small = certified(truncate(wrong, Keep(numbers=tuple(range(1, 13))), statics="none", band=band))
    assert not small.guarantee.holds
    assert small.error.certainty == "measured"
    assert any("spot check at" in note for note in small.notes)


def test_no_guarantee_keeps_the_measured_error():
    """Local dampers have no bound yet: the error stays measured, the note gives the reason."""
    base = plate("structure", n=30)
    dashpot = np.zeros((base.n, base.n))
    dashpot[4, 4] = 0.5
    model = replace(base, damping=Damping(base=Rayleigh(alpha=0.01, beta=0.02), viscous=dashpot))
    modes = find_modes(model, count=8)
    band = (0.0, float(modes.omega[4]))
    small = certified(truncate(modes, Count(modes=6), band=band))
    assert not small.guarantee.holds
    assert small.error is None or small.error.certainty == "measured"
    assert any("no guarantee" in note for note in small.notes)
    with pytest.raises(ChoiceError):
        guaranteed(modes, Tolerance(value=0.02), band)
