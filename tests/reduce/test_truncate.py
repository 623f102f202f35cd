"""Choosing, cutting, statics and measured errors."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.modal.records import Certificate, Modes, Ranking
from modesieve.reduce.model import (
    Damping,
    Input,
    LossFactor,
    ModalRatio,
    Origin,
    Output,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
)
from modesieve.reduce.response.full import full_response
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal
from modesieve.reduce.truncation import Above, Band, Count, Keep, Tolerance, describe_choice, truncate
from modesieve.reduce.truncation.choice import groups, resolve, sequence


def chain(n: int = 16, *, free: bool = False, base: Any = None, seed: int = 0, **change: Any) -> Structure:
    """Unit masses and springs, one end or none fixed; two loads, three displacement outputs."""
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tolil()
    K[n - 1, n - 1] = 1.0
    if free:
        K[0, 0] = 1.0
    rng = np.random.default_rng(seed)
    F, C = np.zeros((n, 2)), np.zeros((3, n))
    F[rng.choice(n, 2, replace=False), [0, 1]] = 1.0
    C[[0, 1, 2], rng.choice(n, 3, replace=False)] = 1.0
    values: dict[str, Any] = {"K": K, "M": sp.eye_array(n), "F": F, "Cq": C}
    values["damping"] = Damping(base=ModalRatio(ratio=0.02) if base is None else base)
    return Structure(**(values | change))


def beam(elements: int = 40, zeta: float = 0.01) -> Structure:
    """Simply supported Euler-Bernoulli beam, EI = rho A = L = 1, force and deflection at mid-span."""
    h = 1 / elements
    k = np.array([[12, 6 * h, -12, 6 * h], [6 * h, 4 * h * h, -6 * h, 2 * h * h],
                  [-12, -6 * h, 12, -6 * h], [6 * h, 2 * h * h, -6 * h, 4 * h * h]]) / h**3  # fmt: skip
    m = np.array([[156, 22 * h, 54, -13 * h], [22 * h, 4 * h * h, 13 * h, -3 * h * h],
                  [54, 13 * h, 156, -22 * h], [-13 * h, -3 * h * h, -22 * h, 4 * h * h]]) * h / 420  # fmt: skip
    n = 2 * (elements + 1)
    K, M = np.zeros((n, n)), np.zeros((n, n))
    for e in range(elements):
        at = slice(2 * e, 2 * e + 4)
        K[at, at] += k
        M[at, at] += m
    free = np.setdiff1d(np.arange(n), [0, n - 2])
    port = np.zeros((n, 1))
    port[elements] = 1.0  # deflection of the middle node (elements is even)
    K, M, port = K[np.ix_(free, free)], M[np.ix_(free, free)], port[free]
    return Structure(K=K, M=M, F=port, Cq=port.T, damping=Damping(base=ModalRatio(ratio=zeta)))


def ladder(n: int = 20, **change: Any) -> Thermal:
    """RC ladder, driven at one end, read at both."""
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tolil()
    K[n - 1, n - 1] = 1.0
    F, C = np.zeros((n, 1)), np.zeros((2, n))
    F[0, 0] = C[0, n - 1] = C[1, 0] = 1.0
    return Thermal(**({"K": K, "E": sp.eye_array(n), "F": F, "C": C} | change))


def square(side: int = 5) -> Structure:
    """Membrane of side x side unit masses with fixed edges: most modes come in pairs. One load off the diagonals."""
    line = 2 * np.eye(side) - np.eye(side, k=1) - np.eye(side, k=-1)
    K = np.kron(line, np.eye(side)) + np.kron(np.eye(side), line)
    F = np.zeros((side**2, 2))
    F[1, 0] = F[side + 2, 1] = 1.0
    return Structure(
        K=K, M=np.eye(side**2), F=F, Cq=np.eye(side**2)[[1, 7]], damping=Damping(base=ModalRatio(ratio=0.01))
    )


def by_hand(
    omega: list[float],
    *,
    b: Any = None,
    cluster: dict[int, tuple[int, ...]] | None = None,
    held: dict[int, str] | None = None,
) -> Modes:
    """Modes of a structure with one channel each way, written down rather than computed."""
    w, k = np.array(omega), len(omega)
    zero = np.zeros((1, k))
    system = SecondOrderModal(
        x=w**2, d=0.02 * w, eta=np.zeros(k), b=np.ones((k, 1)) if b is None else np.array(b)[:, None],
        cq=np.ones((1, k)), cv=zero, ca=zero, D=[[0.0]], X=[[0.0]],
    )  # fmt: skip
    return Modes(
        origin=Origin(kind="structure", n=99, fingerprint="", inputs=(Input(name="u1"),), outputs=(Output(name="y1"),)),
        system=system,
        eigenvalue=(-0.01 + 1j * np.sqrt(1 - 1e-4)) * w,
        term=np.arange(k),
        residual=np.zeros(k),
        condition=np.ones(k),
        cluster=tuple((cluster or {}).get(i + 1, ()) for i in range(k)),
        always_kept=tuple((held or {}).get(i + 1, "") for i in range(k)),
        certificate=Certificate(complete="counted", below_omega=1.1 * max(omega)),
    )


def ranked(modes: Modes, scores: list[float]) -> Ranking:
    held = np.array([bool(reason) for reason in modes.always_kept])
    order = np.lexsort((modes.omega, -np.array(scores), ~held)) + 1
    return Ranking(modes=modes, by="coupling", measures={"coupling": np.array(scores)}, undefined={}, order=order)


def blocks_by_hand() -> Modes:
    """A real pole, a defective block of three eigenvalues, a pair: five modes in three terms."""
    J = np.array([[-3.0, 1.0, 0.0], [0.0, -3.0, 1.0], [0.0, 0.0, -3.0]])
    system = FirstOrderModal(
        blocks=(np.array([[-1.0]]), J, np.array([[-0.5, 6.0], [-6.0, -0.5]])),
        B=np.ones((6, 1)), C=np.ones((1, 6)), D=[[0.0]],
    )  # fmt: skip
    lam = np.array([-1.0, -3.0, -3.0, -3.0, -0.5 + 6j])
    group = (2, 3, 4)
    channels: dict[str, Any] = {"inputs": (Input(name="u1"),), "outputs": (Output(name="y1"),)}
    return Modes(
        origin=Origin(kind="state space", n=6, fingerprint="", **channels),
        system=system, eigenvalue=lam, term=np.array([0, 1, 1, 1, 2]), residual=np.zeros(5), condition=np.ones(5),
        cluster=((), group, group, group, ()), always_kept=("",) * 5, certificate=Certificate(complete="all"),
        static=np.array([[1.0]]),
    )  # fmt: skip


def worst_local(model: Any, small: Any, full: Any, threshold: float) -> float:
    """The local error recomputed from its definition."""
    G = model.weigh(full.G)
    E = G - model.weigh(small.response(full.omega))
    return float((largest_singular_value(E) / np.maximum(largest_singular_value(G), threshold)).max())


# ---- choices -------------------------------------------------------------------------------------------------------


def test_count_takes_the_first_of_the_ranking() -> None:
    """The N best by the measure, whatever their numbers, in ascending order."""
    modes = by_hand([1.0, 2.0, 3.0, 4.0])
    assert resolve(Count(modes=2), modes, ranked(modes, [0.1, 5.0, 0.2, 3.0])).numbers == (2, 4)


def test_always_kept_modes_count_and_are_never_dropped() -> None:
    """Two rigid-body modes and a count of three leave room for one; a count of one is refused."""
    modes = by_hand([0.0, 0.0, 3.0, 4.0], held={1: "rigid body", 2: "rigid body"})
    table = ranked(modes, [0.0, 0.0, 1.0, 2.0])
    assert resolve(Count(modes=3), modes, table).numbers == (1, 2, 4)
    with pytest.raises(ChoiceError, match="at least 2"):
        resolve(Count(modes=1), modes, table)
    kept = resolve(Keep(numbers=(3,)), modes, None)
    assert kept.numbers == (1, 2, 3)
    assert kept.notes == ("modes 1, 2 are always kept",)


def test_count_does_not_split_coupled_members_of_a_cluster() -> None:
    """It takes fewer modes and says so; members without coupling may go."""
    cluster = {2: (2, 3, 4), 3: (2, 3, 4), 4: (2, 3, 4)}
    modes = by_hand([1.0, 2.0, 2.0, 2.0, 5.0], b=[1.0, 1.0, 0.8, 0.0, 1.0], cluster=cluster)
    table = ranked(modes, [9.0, 8.0, 4.0, 0.0, 7.0])
    kept = resolve(Count(modes=2), modes, table)
    assert kept.numbers == (1,)
    assert kept.notes == ("kept 1 mode, not 2: modes 2, 3 belong together and would have been split",)
    assert resolve(Count(modes=3), modes, table).numbers == (1, 2, 3)
    assert resolve(Count(modes=4), modes, table).numbers == (1, 2, 3, 5)
    assert sorted(groups(modes)) == [(1,), (2, 3), (4,), (5,)]


def test_a_cluster_that_ranks_first_cannot_be_split_either() -> None:
    """Count 1 with a pair in front: refused, with the number that would do."""
    modes = by_hand([2.0, 2.0, 5.0], cluster={1: (1, 2), 2: (1, 2)})
    with pytest.raises(ChoiceError, match="keep 2 or more"):
        resolve(Count(modes=1), modes, ranked(modes, [3.0, 3.0, 1.0]))


def test_non_normal_blocks_are_kept_or_dropped_whole() -> None:
    """The three modes of a defective block share a term: one drags in the others, a count cannot split them."""
    modes = blocks_by_hand()
    kept = resolve(Keep(numbers=(3, 5)), modes, None)
    assert kept.numbers == (2, 3, 4, 5)
    assert kept.notes == ("modes 2, 4 belong to one block with kept modes",)
    table = ranked(modes, [5.0, 4.0, 4.0, 4.0, 1.0])
    assert resolve(Count(modes=3), modes, table).numbers == (1,)
    assert sequence(modes, table).cuts.tolist() == [0, 1, 4, 5]
    small = truncate(modes, Keep(numbers=(2,)), statics="none")
    assert small.states == 3


def test_band_keeps_every_mode_in_it() -> None:
    """Both ends count as inside; a band without a mode is refused."""
    modes = by_hand([1.0, 2.0, 3.0, 4.0])
    assert resolve(Band(low=2.0, high=3.0), modes, None).numbers == (2, 3)
    with pytest.raises(ChoiceError, match="no mode lies in the band"):
        resolve(Band(low=2.1, high=2.9), modes, None)


def test_above_passes_on_any_threshold() -> None:
    """Shares of the largest; decay is a time in seconds; a mode passing any of them stays."""
    modes = by_hand([1.0, 2.0, 3.0, 4.0])
    table = replace(
        ranked(modes, [1.0, 10.0, 4.9, 5.0]),
        measures={"coupling": np.array([1.0, 10.0, 4.9, 5.0]), "decay": np.array([np.inf, 3.0, 2.0, 1.0])},
    )
    assert resolve((Above(measure="coupling", share=0.5),), modes, table).numbers == (2, 4)
    assert resolve((Above(measure="decay", share=3.0),), modes, table).numbers == (1, 2)
    both = (Above(measure="coupling", share=0.5), Above(measure="decay", share=3.0))
    assert resolve(both, modes, table).numbers == (1, 2, 4)


@pytest.mark.parametrize(
    ("choice", "message"),
    [
        (Count(modes=0), "0 modes cannot be kept"),
        (Count(modes=9), "compute more modes"),
        (Keep(numbers=(2, 7)), "got:      7"),
        (Keep(numbers=()), "keep list is empty"),
        (Band(low=4.0, high=1.0), "band is not one"),
        ((Above(measure="band-shar", share=0.1),), "unknown measure"),
        ((Above(measure="couplin", share=0.1),), "did you mean coupling?"),
        ((Above(measure="coupling", share=-1.0),), "a number, 0 or larger"),
        ((Above(measure="coupling", share=2.0),), "no mode passes"),
        ((), "none that is known"),
        ("all", "none that is known"),
    ],
)
def test_choices_that_cannot_be_met(choice: Any, message: str) -> None:
    """Each refusal says what was asked and what there is."""
    modes = by_hand([1.0, 2.0, 3.0, 4.0])
    with pytest.raises(ChoiceError, match=message):
        resolve(choice, modes, ranked(modes, [4.0, 3.0, 2.0, 1.0]))


def test_choices_in_words() -> None:
    """The report says how the modes were chosen."""
    assert describe_choice(Count(modes=4)) == "count 4"
    assert describe_choice(Band(low=0.0, high=2 * np.pi * 300)) == "band 0 Hz to 300 Hz"
    assert describe_choice(Tolerance(value=0.5, of="absolute", unit="K")) == "tolerance 0.5 K"
    assert describe_choice((Above(measure="coupling", share=0.1), Above(measure="decay", share=3.0))) == (
        "above coupling 0.1 or decay 3 s"
    )


def test_a_symmetric_square_is_not_cut_inside_a_pair() -> None:
    """Every legal count of a membrane keeps both coupled members of each pair."""
    modes = find_modes(square(), (0.0, 2.5))
    table = rank(modes, band=(0.5, 2.5))
    full = full_response(square(), np.linspace(0.5, 2.5, 9), modes=modes)
    for count in range(1, len(modes) + 1):
        try:
            small = truncate(table, Count(modes=count), full=full)
        except ChoiceError:
            continue
        for group in groups(modes):
            assert len(set(group) & set(small.kept)) in (0, len(group))


# ---- cutting and statics -------------------------------------------------------------------------------------------


@settings(max_examples=12, deadline=None, derandomize=True)
@given(seed=st.integers(0, 1000), count=st.integers(1, 12), free=st.booleans(), statics=st.sampled_from([None, "none"]))
def test_kept_eigenvalues_are_the_poles_of_the_small_model(
    seed: int, count: int, free: bool, statics: str | None
) -> None:
    """The reduced model has the kept eigenvalues and no other."""
    model = chain(12, seed=seed, free=free)
    modes = find_modes(model)
    small = truncate(rank(modes, band=(0.05, 2.0)), Count(modes=count), statics=statics)
    kept = modes.eigenvalue[np.array(small.kept) - 1]
    poles = small.system.poles
    for lam in kept:
        assert np.abs(poles - lam).min() < 1e-9 * max(abs(lam), 1e-3)
    assert small.states == len(poles) == 2 * len(small.kept)


@pytest.mark.parametrize(
    "model",
    [
        chain(14), chain(14, free=True), chain(14, base=Rayleigh(alpha=0.01, beta=0.02)),
        chain(14, base=LossFactor(eta=0.03)), ladder(14), square(4),
    ],
    ids=["modal", "free", "rayleigh", "loss factor", "thermal", "square"],
)  # fmt: skip
@pytest.mark.parametrize("statics", ["none", "feedthrough"])
def test_all_modes_reproduce_the_full_response(model: Any, statics: Any) -> None:
    """Keeping everything leaves rounding, with and without the (then vanishing) static remainder."""
    modes = find_modes(model, count=model.n)
    small = truncate(modes, Keep(numbers=tuple(range(1, model.n + 1))), statics=statics, band=(0.02, 3.0))
    assert small.error is not None
    assert small.error.certainty == "measured"
    assert small.error.value < 1e-8  # local: the full response falls to 1e-3 of its peak, solves to 1e-12 of norm(Z)


def test_feedthrough_makes_the_static_response_exact() -> None:
    """At 0 Hz the kept modes and the remainder add up to C K^-1 F; none does not."""
    for model in (chain(16), ladder(16)):
        C = model.Cq if isinstance(model, Structure) else model.C
        static = C @ np.linalg.solve(model.K.toarray(), model.F)
        modes = find_modes(model, count=6)
        exact = truncate(modes, Keep(numbers=(2,)), statics="feedthrough").response(np.zeros(1))[0]
        np.testing.assert_allclose(exact, static, atol=1e-10 * np.abs(static).max())
        plain = truncate(modes, Keep(numbers=(2,)), statics="none").response(np.zeros(1))[0]
        assert np.abs(plain - static).max() > 0.1 * np.abs(static).max()


def test_the_static_remainder_carries_the_loss_factor() -> None:
    """With K (1 + j eta) the remainder is X/(1 + j eta): the low-frequency limit is C K^-1 F/(1 + j eta)."""
    model = chain(16, base=LossFactor(eta=0.2))
    modes = find_modes(model, count=6)
    small = truncate(modes, Keep(numbers=(1, 2)), statics="feedthrough")
    static = model.Cq @ np.linalg.solve(model.K.toarray(), model.F) / (1 + 0.2j)
    low = small.response(np.array([1e-6]))[0]
    np.testing.assert_allclose(low, static, atol=1e-8 * np.abs(static).max())


def test_feedthrough_of_a_free_body_is_the_elastic_remainder() -> None:
    """Rigid-body terms stay out of the static part: near 0 Hz the error is small against the elastic response."""
    model = chain(16, free=True)
    modes = find_modes(model, count=6)
    small = truncate(modes, Keep(numbers=(1, 2, 3)), statics="feedthrough")
    omega = np.array([0.01])
    full = full_response(model, omega, modes=modes).G
    rigid = modes.system.select(np.array([0])).response(omega)
    error = np.abs(full - small.response(omega)).max()
    assert error < 1e-4 * np.abs(full - rigid).max()


def test_state_space_remainder() -> None:
    """D - C A^-1 B is what a cut state-space model answers statically."""
    rng = np.random.default_rng(3)
    A = rng.normal(size=(9, 9)) - 6 * np.eye(9)
    model = StateSpace(A=A, B=rng.normal(size=(9, 2)), C=rng.normal(size=(2, 9)), D=rng.normal(size=(2, 2)))
    modes = find_modes(model)
    static = model.D - model.C @ np.linalg.solve(A, model.B)
    small = truncate(modes, Keep(numbers=(1,)), statics="feedthrough", band=(0.1, 20.0))
    np.testing.assert_allclose(small.response(np.zeros(1))[0], static, atol=1e-10 * np.abs(static).max())
    every = truncate(modes, Keep(numbers=tuple(range(1, len(modes) + 1))), band=(0.1, 20.0))
    assert every.error is not None
    assert every.error.value < 1e-9


def test_acceleration_outputs_carry_their_direct_part_and_refuse_feedthrough() -> None:
    """A kept mode answers at once with c_a b^T; a static remainder would be improper and is refused with the reason."""
    model = chain(12)
    rates = Structure(K=model.K, M=model.M, F=model.F, Ca=model.Cq, damping=model.damping)
    modes = find_modes(rates, count=6)
    small = truncate(modes, Keep(numbers=(1, 2, 3)), band=(0.05, 0.6))
    assert small.statics == "none"
    assert any("acceleration outputs is improper" in note for note in small.notes)
    phi = modes.vectors[:, :3]
    direct = (rates.Ca @ phi) @ (phi.T @ rates.F)
    high = small.response(np.array([1e7]))[0]
    np.testing.assert_allclose(high, direct, atol=1e-6 * np.abs(direct).max())
    np.testing.assert_allclose(small.system.state_space()[3], direct, atol=1e-12)
    with pytest.raises(ChoiceError, match="would grow with the frequency"):
        truncate(modes, Keep(numbers=(1,)), statics="feedthrough")


def test_unknown_statics_say_what_there_is() -> None:
    """A word that is no statics is refused with the ones that are."""
    modes = find_modes(chain(8), (0.0, 0.5))
    with pytest.raises(ChoiceError, match="none, feedthrough or vectors"):
        truncate(modes, Keep(numbers=(1,)), statics="mixed")  # type: ignore[arg-type]


# ---- errors and tolerances -----------------------------------------------------------------------------------------


def test_the_error_figure_is_the_local_error_at_its_samples() -> None:
    """Value, threshold, frequency and pair agree with a computation from the definition."""
    model = chain(16)
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2, 4)), band=(0.01, 0.7))
    figure, samples = small.error, small.samples
    assert figure is not None
    assert samples is not None
    assert figure.threshold == pytest.approx(1e-3 * largest_singular_value(samples.G).max())
    assert figure.value == pytest.approx(worst_local(model, small, samples, figure.threshold), rel=1e-12)
    i = int(np.flatnonzero(samples.omega == figure.at_omega)[0])
    E = np.abs(samples.G - small.response(samples.omega))[i]
    k, l = np.unravel_index(np.argmax(E), E.shape)
    assert figure.pair == (model.inputs[l].name, model.outputs[k].name)


def test_resolutions_set_the_threshold() -> None:
    """With resolutions the local reference counts from 1 (one resolution) upwards, whatever the peak."""
    model = chain(16, outputs=tuple(Output(name=f"y{i}", unit="m", resolution=50.0) for i in range(3)))
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2)), band=(0.01, 0.7))
    assert small.error is not None
    assert small.error.threshold == 1.0
    assert small.error.value == pytest.approx(worst_local(model, small, small.samples, 1.0), rel=1e-12)


def test_a_damped_beam_keeps_every_mode_in_the_band_that_couples() -> None:
    """1 % damping, 2 % of local, mid-span to mid-span: all odd modes of the band are kept, no even one.

    The n-th frequency of the beam is (n pi)^2 (Blevins, Formulas for Natural Frequency and Mode Shape, 1979,
    Table 8-1, from memory); the band ends between the ninth and the tenth.
    """
    band = (0.0, 9.5**2 * np.pi**2)
    modes = find_modes(beam(), count=14)
    small = truncate(rank(modes, band=band), Tolerance(value=0.02))
    assert {1, 3, 5, 7, 9} <= set(small.kept)
    assert {2, 4, 6, 8}.isdisjoint(small.kept)
    assert small.error is not None
    assert small.error.value <= 0.02
    assert small.error.relative_to == "local"
    # Of the peak, two modes already pass: what a peak reference hides.
    easy = truncate(rank(modes, band=band), Tolerance(value=0.02, of="peak"))
    assert len(easy.kept) < len(small.kept)


@pytest.mark.parametrize("of", ["peak", "local", "absolute"])
@pytest.mark.parametrize("statics", ["none", "feedthrough"])
def test_a_tolerance_takes_the_smallest_count_that_passes(of: Any, statics: Any) -> None:
    """Its error passes on its own samples, and no smaller legal count does."""
    model = chain(40, base=Rayleigh(alpha=0.004, beta=0.004), seed=1)
    band = (0.01, 0.35)
    modes = find_modes(model, count=14)
    table = rank(modes, band=band)
    value = {"peak": 0.03, "local": 0.35, "absolute": 2.0}[of]
    small = truncate(table, Tolerance(value=value, of=of), statics=statics)
    assert small.error is not None
    assert small.error.value <= value
    assert small.error.relative_to == of
    cuts = [int(c) for c in sequence(modes, table).cuts if 0 < c < len(small.kept)]
    assert cuts
    for count in cuts:
        fewer = truncate(table, Count(modes=count), statics=statics)
        R = fewer.response(small.samples.omega)  # type: ignore[union-attr]
        E = np.abs(small.samples.G - R)  # type: ignore[union-attr]
        if of == "absolute":
            assert E.sum(axis=2).max() > value
        elif of == "peak":
            sigma = largest_singular_value(small.samples.G - R)  # type: ignore[union-attr]
            assert sigma.max() > value * largest_singular_value(small.samples.G).max()  # type: ignore[union-attr]
        else:
            assert worst_local(model, fewer, small.samples, small.error.threshold or 0.0) > value


def test_the_samples_are_refined_where_the_error_peaks_between_them() -> None:
    """The error on a grid ten times denser is not above the reported one by more than a few per cent."""
    model = chain(40, base=Rayleigh(alpha=0.002, beta=0.002), seed=1)
    band = (0.01, 0.35)
    modes = find_modes(model, count=14)
    small = truncate(rank(modes, band=band), Count(modes=4), statics="none")
    dense = full_response(model, np.linspace(*band, 2000), modes=modes)
    assert small.error is not None
    assert worst_local(model, small, dense, small.error.threshold or 0.0) < 1.05 * small.error.value


def test_an_absolute_tolerance_is_per_output_with_all_inputs_at_their_amplitudes() -> None:
    """0.5 K: the worst output's sum over the sources, each at its amplitude."""
    F = np.zeros((20, 2))
    F[0, 0] = F[9, 1] = 1.0
    model = ladder(20, F=F, inputs=(Input(name="chip", unit="W", amplitude=3.0), Input(name="fan", unit="W")),
                   outputs=(Output(name="far", unit="K"), Output(name="near", unit="K")))  # fmt: skip
    modes = find_modes(model, count=20)
    small = truncate(rank(modes, band=(1e-4, 1.0)), Tolerance(value=0.5, of="absolute", unit="K"))
    figure = small.error
    assert figure is not None
    assert (figure.unit, figure.relative_to) == ("K", "absolute")
    E = np.abs(small.samples.G - small.response(small.samples.omega)) * np.array([3.0, 1.0])  # type: ignore[union-attr]
    assert figure.value == pytest.approx(E.sum(axis=2).max(), rel=1e-9)
    assert figure.value <= 0.5
    assert str(figure).startswith(f"{figure.value:.3g} K, measured (")


def test_absolute_tolerance_with_outputs_in_several_units() -> None:
    """The tolerance speaks for outputs in its own unit only, and says whom it leaves out; other units are refused."""
    outputs = (Output(name="T", unit="K"), Output(name="q", unit="W"))
    modes = find_modes(ladder(12, outputs=outputs), count=12)
    table = rank(modes, band=(1e-3, 1.0))
    small = truncate(table, Tolerance(value=0.2, of="absolute", unit="K"))
    assert "the tolerance in K says nothing about q" in small.notes
    with pytest.raises(ChoiceError, match="several units"):
        truncate(table, Tolerance(value=0.2, of="absolute", unit="m"))


def test_undamped_models_refuse_relative_tolerances_inside_their_band() -> None:
    """The response is infinite at an undamped mode; an absolute tolerance or another band still works."""
    model = chain(12, damping=Damping())
    modes = find_modes(model, count=8)
    with pytest.raises(ChoiceError, match="undamped mode"):
        truncate(rank(modes, band=(0.0, 0.6)), Tolerance(value=0.02))
    small = truncate(rank(modes, band=(0.0, 0.6)), Count(modes=3))
    assert small.error is None
    assert any("no relative error" in note for note in small.notes)
    below = (0.0, 0.8 * float(modes.omega[0]))
    assert truncate(rank(modes, band=below), Tolerance(value=0.02)).error.value <= 0.02  # type: ignore[union-attr]


def test_a_tolerance_that_no_count_meets_tells_the_best() -> None:
    """The message says what all computed modes reach and what to do."""
    modes = find_modes(chain(40), count=9)
    with pytest.raises(ChoiceError, match=r"at best .* % with \d+ modes") as caught:
        truncate(rank(modes, band=(0.0, 0.3)), Tolerance(value=1e-9), statics="none")
    assert "compute more modes" in str(caught.value)


def test_tolerances_need_a_band_and_a_positive_value() -> None:
    """Without a band a tolerance has nothing to hold in; zero and nan are no tolerances."""
    modes = find_modes(chain(12), (0.0, 1.0))
    table = rank(modes)
    if table.band is None:
        with pytest.raises(ChoiceError, match="needs a band"):
            truncate(table, Tolerance(value=0.1))
    for value in (0.0, -1.0, np.nan):
        with pytest.raises(ChoiceError, match="a number above 0"):
            truncate(table, Tolerance(value=value), band=(0.0, 0.5))


def test_without_a_band_the_error_is_measured_over_the_counted_range() -> None:
    """From 0 to the counting point over 1.5."""
    modes = find_modes(chain(16), count=6)
    small = truncate(modes, Keep(numbers=(1, 2)))
    top = modes.certificate.below_omega or modes.omega.max()
    assert small.band == (0.0, pytest.approx(top / 1.5))
    assert small.error is not None


def test_modes_without_their_model_give_an_estimate() -> None:
    """From a file without the model the error is estimated with all computed modes and says so; a tolerance refuses."""
    modes = replace(find_modes(chain(16), count=8), model=None, vectors=None)
    small = truncate(modes, Keep(numbers=(1, 2)), band=(0.01, 0.5))
    assert small.error is not None
    assert small.error.certainty == "estimated"
    with pytest.raises(ChoiceError, match="full model is not at hand"):
        truncate(rank(modes, band=(0.01, 0.5)), Tolerance(value=0.1))


def test_a_given_response_is_used() -> None:
    """No solve where the full response is given; it must have frequencies in the band."""
    model = chain(16)
    modes = find_modes(model, count=8)
    full = full_response(model, np.linspace(0.02, 0.5, 40), modes=modes)
    small = truncate(replace(modes, model=None), Keep(numbers=(1, 2)), band=(0.02, 0.5), full=full)
    assert small.samples is full
    assert small.error is not None
    assert small.error.certainty == "measured"
    with pytest.raises(ChoiceError, match="no frequency in the band"):
        truncate(modes, Keep(numbers=(1,)), band=(5.0, 6.0), full=full)


@settings(max_examples=5, deadline=None, derandomize=True)
@given(seed=st.integers(0, 1000))
def test_order_and_scale_of_channels_and_unknowns_change_nothing(seed: int) -> None:
    """Permuted unknowns, inputs and outputs, and channels in other units: the same modes, the same error."""
    rng = np.random.default_rng(seed)
    a, r = 10 ** rng.uniform(-3, 3, 2), 10 ** rng.uniform(-3, 3, 3)
    one = chain(14, seed=seed, inputs=tuple(Input(name=f"u{i}", amplitude=1.0) for i in (0, 1)),
                outputs=tuple(Output(name=f"y{i}", resolution=1.0) for i in (0, 1, 2)))  # fmt: skip
    rows, ins, outs = rng.permutation(14), rng.permutation(2), rng.permutation(3)
    K = one.K.toarray()[np.ix_(rows, rows)]
    other = Structure(
        K=K, M=one.M, F=(one.F / a)[rows][:, ins], Cq=(one.Cq * r[:, None])[outs][:, rows], damping=one.damping,
        inputs=tuple(Input(name=f"u{i}", amplitude=a[i]) for i in ins),
        outputs=tuple(Output(name=f"y{i}", resolution=r[i]) for i in outs),
    )  # fmt: skip
    kept, errors = [], []
    for model in (one, other):
        modes = find_modes(model, count=8)
        small = truncate(rank(modes, band=(0.02, 0.5)), Count(modes=3))
        kept.append(small.kept)
        errors.append(small.error)
    assert kept[0] == kept[1]
    assert errors[0].value == pytest.approx(errors[1].value, rel=1e-6)
    assert errors[0].pair == errors[1].pair


def test_the_report_of_a_small_model() -> None:
    """The printed record says what was kept, how, and how wrong it is."""
    modes = find_modes(chain(16, title="test chain"), count=8)
    small = truncate(rank(modes, band=(0.01, 0.5)), Count(modes=3))
    lines = repr(small).splitlines()
    assert lines[0] == "Reduced model of test chain (structure, 16 unknowns)"
    assert lines[1] == f"  kept       3 of {len(modes)} computed modes (1-3), 6 states"
    assert lines[2] == "  chosen     count 3"
    assert lines[4] == "  statics    feedthrough"
    assert lines[5] == "  band       1.59 mHz to 79.6 mHz"
    assert lines[6] == f"  error      {small.error}"
    assert "of local, measured (u" in lines[6]


# ---- tail vectors --------------------------------------------------------------------------------------------------


def test_vectors_are_exact_statics_for_every_kind_of_output() -> None:
    """Statics vectors adds pseudo-modes: the static response is exact, accelerations are allowed, and it is better."""
    model = chain(60, seed=2, base=Rayleigh(alpha=0.002, beta=0.01))
    mixed = Structure(
        K=model.K, M=model.M, F=model.F, Cq=model.Cq * [[1.0], [0.0], [0.0]], Ca=model.Cq * [[0.0], [1.0], [1.0]],
        damping=model.damping,
    )  # fmt: skip
    modes = find_modes(mixed, count=10)
    band, keep = (0.01, 0.3), Keep(numbers=tuple(range(1, 9)))
    none, one, two = (
        truncate(modes, keep, statics=statics, levels=levels, band=band)
        for statics, levels in (("none", 0), ("vectors", 1), ("vectors", 2))  # type: ignore[misc]
    )
    static = mixed.Cq @ np.linalg.solve(mixed.K.toarray(), mixed.F)
    np.testing.assert_allclose(two.response(np.zeros(1))[0], static, atol=1e-9 * np.abs(static).max())
    assert two.kept == keep.numbers
    assert two.states > 2 * len(two.kept)
    assert any("pseudo-modes in 2 tail levels" in note for note in two.notes)
    errors = [small.error.value for small in (none, one, two)]  # type: ignore[union-attr]
    assert errors[1] < 0.1 * errors[0]
    assert errors[2] < 0.5 * errors[1]


def test_a_tolerance_with_vectors_needs_fewer_modes() -> None:
    """The same tolerance, met with pseudo-modes, keeps no more modes than with a constant remainder."""
    model = chain(60, seed=2, base=Rayleigh(alpha=0.002, beta=0.01))
    modes, band = find_modes(model, count=14), (0.01, 0.3)
    table = rank(modes, band=band)
    plain, tailed = (truncate(table, Tolerance(value=0.05), statics=s) for s in ("feedthrough", "vectors"))  # type: ignore[arg-type]
    assert len(tailed.kept) <= len(plain.kept)
    assert tailed.error is not None
    assert tailed.error.value <= 0.05


def test_vectors_need_real_uncoupled_modes() -> None:
    """A state-space model has no tail vectors: the refusal says what would."""
    with pytest.raises(ChoiceError, match="full model and the mode shapes"):
        truncate(blocks_by_hand(), Keep(numbers=(1,)), statics="vectors")


def test_a_tolerance_needs_ports() -> None:
    """Without inputs and outputs there is no response that could be wrong."""
    model = chain(10)
    bare = Structure(K=model.K, M=model.M, damping=model.damping)
    modes = find_modes(bare, count=5)
    with pytest.raises(ChoiceError, match="0 inputs and 0 outputs"):
        truncate(rank(modes, by="decay", band=(0.1, 0.5)), Tolerance(value=0.1))
    small = truncate(modes, Band(low=0.0, high=0.6))
    assert small.error is None


# ---- local damping -------------------------------------------------------------------------------------------------


def damper(n: int, at: int, value: float) -> Any:
    return sp.csr_array(([value], ([at], [at])), shape=(n, n))


@pytest.mark.parametrize("kind", ["Cq", "Cv", "Ca"])
def test_local_damping_keeps_eigenvalues_and_drops_what_a_mode_answers_at_once(kind: str) -> None:
    """A dashpot makes complex pairs: kept eigenvalues are exact, all of them give the full model, and a cut model of
    accelerations is as good as that of the same structure without the dashpot.

    An acceleration answers a load at once with ``Ca M^-1 F``, mostly by modes far above the band. Kept whole while
    those modes are dropped, that constant alone would be 20 % of the band's peak.
    """
    n, band = 40, (0.01, 0.4)
    base = chain(n, seed=3, base=Rayleigh(alpha=0.002, beta=0.005))
    outputs: dict[str, Any] = {kind: base.Cq}
    peaks = []
    for viscous in (None, damper(n, 10, 0.3)):
        damping = Damping(base=Rayleigh(alpha=0.002, beta=0.005), viscous=viscous)
        model = Structure(K=base.K, M=base.M, F=base.F, damping=damping, **outputs)
        modes = find_modes(model)
        small = truncate(modes, Keep(numbers=tuple(range(1, 11))), statics="none", band=band)
        poles = small.system.poles
        assert all(np.abs(poles - lam).min() < 1e-9 * abs(lam) for lam in modes.eigenvalue[:10])
        G = small.samples.G  # type: ignore[union-attr]
        error = largest_singular_value(G - small.response(small.samples.omega))  # type: ignore[union-attr]
        peaks.append(error.max() / largest_singular_value(G).max())
    every = truncate(modes, Keep(numbers=tuple(range(1, n + 1))), statics="none", band=band)
    assert every.error is not None
    assert every.error.value < 1e-8
    assert peaks[1] < 2 * peaks[0] + 0.01
