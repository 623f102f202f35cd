"""Units of model files: time to seconds, channels into their stated units, everything else refused.

One physical model, written in the coherent numbers of different unit systems, must load as the same response.
"""

import math

import h5py
import numpy as np
import pytest

from modesieve import io
from modesieve.reduce.errors import UnitError
from modesieve.reduce.model import Rayleigh, UnitSystem

N = 4
RNG = np.random.default_rng(3)
OMEGA = np.array([0.3, 1.0, 2.7])

K_SI = 5e4 * (2 * np.eye(N) - np.eye(N, k=1) - np.eye(N, k=-1))
M_SI = np.diag([3.0, 2.0, 4.0, 1.0])
D_SI = 10.0 * np.diag([1.0, 0.0, 2.0, 0.5])
LOSS_SI = 0.02 * K_SI
DU_SI = np.array([[0.0], [0.0], [0.25]])  # of the acceleration, (m/s^2)/N


def pick(*rows):
    C = np.zeros((3, N))
    for row, unknown in rows:
        C[row, unknown] = 1.0
    return C


CQ, CV, CA = pick((0, 1)), pick((1, 2)), pick((2, 3))
F = np.eye(N)[:, :1]


def response(model, omega=OMEGA):
    """G(j w) by a dense solve; the loss factor needs no sign for w > 0."""
    beta = model.damping.base.beta if isinstance(model.damping.base, Rayleigh) else 0.0
    alpha = model.damping.base.alpha if isinstance(model.damping.base, Rayleigh) else 0.0
    K, M, D = (m.toarray() for m in (model.K, model.M, model.damping.viscous))
    D = D + alpha * M + beta * K
    Z = [K + 1j * model.damping.stiffness_loss.toarray() + 1j * w * D - w**2 * M for w in omega]
    return np.array(
        [model.output_at(w) @ np.linalg.solve(z, model.F) + model.Du for w, z in zip(omega, Z, strict=True)]
    )


def expected(omega=OMEGA):
    alpha, beta = 0.1, 1e-3
    out = []
    for w in omega:
        Z = K_SI + 1j * LOSS_SI + 1j * w * (D_SI + alpha * M_SI + beta * K_SI) - w**2 * M_SI
        out.append((CQ + 1j * w * CV - w**2 * CA) @ np.linalg.solve(Z, F) + DU_SI)
    return np.array(out)


def write(path, units, length, force, time, channels=None):
    """The model in the coherent numbers of a system with the given sizes in SI."""
    mass = force * time**2 / length
    numbers = {
        "stiffness": K_SI * length / force,
        "mass": M_SI / mass,
        "damping": D_SI * length / time / force,
        "stiffness_loss": LOSS_SI * length / force,
        "load": F,
        "displacement_output": CQ,
        "velocity_output": CV,
        "acceleration_output": CA,
        "feedthrough": DU_SI * force * time**2 / length,
    }
    with h5py.File(path, "w") as file:
        file.attrs.update({"kind": "structure", "rayleigh": [0.1 * time, 1e-3 / time]} | units)
        for name, value in numbers.items():
            file[name] = value
        for name, value in (channels or {}).items():
            file[name] = value
    return path


SI_CHANNELS = {"inputs/unit": ["N"], "outputs/unit": ["m", "m/s", "m/s^2"]}
POUND = 4.4482216152605
SYSTEMS = {
    "m kg s": ({"unit_length": "m", "unit_mass": "kg", "unit_time": "s"}, 1.0, 1.0, 1.0),
    "mm t s": ({"unit_length": "mm", "unit_mass": "t", "unit_time": "s"}, 1e-3, 1.0, 1.0),
    "mm kg ms": ({"unit_length": "mm", "unit_mass": "kg", "unit_time": "ms"}, 1e-3, 1e3, 1e-3),
    "mm N ms": ({"unit_length": "mm", "unit_force": "N", "unit_time": "ms"}, 1e-3, 1.0, 1e-3),
    "cm kN min": ({"unit_length": "cm", "unit_force": "kN", "unit_time": "min"}, 1e-2, 1e3, 60.0),
    "in lbf s": ({"unit_length": "in", "unit_force": "lbf"}, 0.0254, POUND, 1.0),
    "um kg s": ({"unit_length": "µm", "unit_mass": "kg"}, 1e-6, 1e-6, 1.0),
}


@pytest.fixture
def path(tmp_path):
    return tmp_path / "m.h5"


@pytest.mark.parametrize("system", SYSTEMS)
def test_every_system_gives_the_same_response(path, system):
    """Whatever the unit system of the matrices, channels in SI units see the same response."""
    units, *sizes = SYSTEMS[system]
    model = io.load(write(path, units, *sizes, SI_CHANNELS))
    assert np.allclose(response(model), expected(), rtol=1e-11, atol=0)
    assert model.units.time == "s"


@pytest.mark.parametrize("system", SYSTEMS)
def test_default_units_name_what_the_numbers_are(path, system):
    """Without stated units the channels get the system's own, and the numbers belong to them."""
    from modesieve.io.units import unit

    units, *sizes = SYSTEMS[system]
    model = io.load(write(path, units, *sizes))
    sizes_in = np.array([unit(c.unit).factor for c in model.inputs])
    sizes_out = np.array([unit(c.unit).factor for c in model.outputs])
    assert np.allclose(response(model) * sizes_out[:, None] / sizes_in, expected(), rtol=1e-11, atol=0)


@pytest.mark.parametrize(
    ("system", "inputs", "outputs"),
    [
        ("m kg s", ["N"], ["m", "m/s", "m/s^2"]),
        ("mm t s", ["N"], ["mm", "mm/s", "mm/s^2"]),
        ("mm kg ms", ["mN"], ["mm", "mm/s", "mm/s^2"]),  # time is in seconds after loading: kg mm/s^2
        ("in lbf s", ["lbf"], ["in", "in/s", "in/s^2"]),
        ("um kg s", ["uN"], ["µm", "µm/s", "µm/s^2"]),
    ],
)
def test_default_unit_names(path, system, inputs, outputs):
    """Default units are named as an engineer would."""
    units, *sizes = SYSTEMS[system]
    model = io.load(write(path, units, *sizes))
    assert [c.unit for c in model.inputs] == inputs
    assert [c.unit for c in model.outputs] == outputs


def test_output_in_metres_of_a_millimetre_model(path):
    """An output in metres of a mm-t-s model is converted by exactly 0.001; nothing else changes."""
    units, *sizes = SYSTEMS["mm t s"]
    own = io.load(write(path, units, *sizes))
    metres = io.load(write(path, units, *sizes, {"outputs/unit": ["m", "mm/s", "mm/s^2"]}))
    assert np.array_equal(metres.Cq[0], own.Cq[0] * 1e-3)
    assert np.array_equal(metres.Cv[1], own.Cv[1])
    assert np.array_equal(metres.F, own.F)


def test_mass_stays_in_its_unit(path):
    """With a mass unit stated, the mass matrix keeps it when time becomes seconds; else the stiffness keeps its own."""
    units, *sizes = SYSTEMS["mm kg ms"]
    assert np.allclose(io.load(write(path, units, *sizes)).M.diagonal(), M_SI.diagonal())
    units, *sizes = SYSTEMS["mm N ms"]
    assert np.allclose(io.load(write(path, units, *sizes)).K.toarray(), K_SI * 1e-3)


def test_saved_models_are_not_converted_twice(path, tmp_path):
    """A converted model that is saved and loaded again stays the same to the last bit."""
    units, *sizes = SYSTEMS["mm kg ms"]
    model = io.load(write(path, units, *sizes, SI_CHANNELS))
    io.save(tmp_path / "again.h5", model)
    again = io.load(tmp_path / "again.h5")
    for name in ("F", "Cq", "Cv", "Ca", "Du"):
        assert np.array_equal(getattr(again, name), getattr(model, name))
    assert (again.inputs, again.outputs, again.units) == (model.inputs, model.outputs, model.units)


# ---- rotations, stresses, bases ------------------------------------------------------------------------------------


def labelled(directions):
    return {"unknowns/direction": list(directions)}


def test_directions_give_angles_and_moments(path):
    """Where direction labels say rotation, angles and moments are the default."""
    units, *sizes = SYSTEMS["mm t s"]
    model = io.load(write(path, units, *sizes, labelled(["rx", "ry", "rotz", "x"])))
    assert [c.unit for c in model.inputs] == ["N mm"]
    assert [c.unit for c in model.outputs] == ["rad", "rad/s", "mm/s^2"]


def test_angle_of_a_translation_is_refused(path):
    """With labels, an angle on a translation is refused."""
    units, *sizes = SYSTEMS["mm t s"]
    given = labelled("xyzx") | {"outputs/unit": ["deg", "mm/s", "mm/s^2"]}
    with pytest.raises(UnitError) as caught:
        io.load(write(path, units, *sizes, given))
    assert caught.value.expected == "a length: its output row only picks unknowns"


def test_angles_convert(path):
    """An angle in degrees is converted from radians."""
    units, *sizes = SYSTEMS["mm t s"]
    given = labelled(["rx"] * N) | {"outputs/unit": ["deg", "rpm", "rad/s^2"]}
    model = io.load(write(path, units, *sizes, given))
    assert model.Cq[0, 1] == pytest.approx(180 / math.pi, rel=1e-13)
    assert model.Cv[1, 2] == pytest.approx(60 / (2 * math.pi), rel=1e-13)


def test_recovered_quantities_convert_coherently(path):
    """A row that does more than pick may be a stress: N/mm^2 is what mm, t, s makes of it."""
    units = {"unit_length": "mm", "unit_mass": "t", "kind": "structure"}
    with h5py.File(path, "w") as file:
        file.attrs.update(units)
        file["stiffness"], file["mass"] = np.eye(2), np.eye(2)
        file["displacement_output"] = [[210.5, -3.0], [210.5, -3.0]]
        file["outputs/unit"] = ["MPa", "Pa"]
    model = io.load(path)
    assert np.array_equal(model.Cq[1], 1e6 * model.Cq[0])
    assert model.Cq[0, 0] == 210.5


def test_rows_of_mixed_kinds_have_no_default(path):
    """A row that adds displacement and velocity has no clear unit: none is invented."""
    with h5py.File(path, "w") as file:
        file.attrs.update({"kind": "structure", "unit_length": "mm", "unit_mass": "t"})
        file["stiffness"], file["mass"] = np.eye(2), np.eye(2)
        file["displacement_output"] = file["velocity_output"] = np.eye(2)
    assert [c.unit for c in io.load(path).outputs] == ["", ""]


# ---- thermal and state space ---------------------------------------------------------------------------------------


def thermal(path, attributes=None, scale=1.0, **extra):
    with h5py.File(path, "w") as file:
        file.attrs.update({"kind": "thermal"} | (attributes or {}))
        file["conductance"], file["capacity"] = 2 * np.eye(2), 300 * np.eye(2) * scale
        file["load"], file["output"] = [[1.0], [0.0]], [[0.0, 1.0]]
        for name, value in extra.items():
            file[name] = value
    return path


def test_thermal_time_in_minutes(path):
    """Capacities in W min/K become J/K; conductance, heat and temperature stay."""
    model = io.load(thermal(path, {"unit_time": "min", "unit_temperature": "K"}, 1 / 60, **{"inputs/unit": ["W"]}))
    assert np.allclose(model.E.diagonal(), 300.0)
    assert np.array_equal(model.K.diagonal(), [2.0, 2.0])
    assert np.array_equal(model.F, [[1.0], [0.0]])
    assert [c.unit for c in (*model.inputs, *model.outputs)] == ["W", "K"]


def test_thermal_millimetres(path):
    """In mm, t, s heat flows are milliwatts: an input in watts is converted."""
    units = {"unit_length": "mm", "unit_mass": "t", "unit_temperature": "degC"}
    assert [c.unit for c in io.load(thermal(path, units)).inputs] == ["mW"]
    model = io.load(thermal(path, units, **{"inputs/unit": ["W"], "outputs/unit": ["K"]}))
    assert model.F[0, 0] == 1000.0
    assert model.C[0, 1] == 1.0


def test_fahrenheit_is_a_difference(path):
    """Outputs in another degree convert by its size, not by its zero."""
    model = io.load(thermal(path, {"unit_temperature": "K"}, **{"outputs/unit": ["degF"]}))
    assert model.C[0, 1] == pytest.approx(1.8, rel=1e-13)


def test_power_in_a_system_with_hours_is_refused(path):
    """Kilogram, metre and hour beside watts: no factor of 5e10 is guessed."""
    units = {"unit_length": "m", "unit_mass": "kg", "unit_time": "h"}
    with pytest.raises(UnitError) as caught:
        io.load(thermal(path, units, **{"inputs/unit": ["W"]}))
    assert str(caught.value) == (
        "channel u1: the unit of power is not clear\n"
        "  expected: time in seconds, or a system without mass and force\n"
        "  got:      unit_time h beside unit_mass\n"
        f"  where:    {path}\n"
        "  remedy:   leave unit_mass and unit_force out if the matrices hold watts"
    )


def test_state_space_time(path):
    """A state matrix in 1/ms becomes one in 1/s, the input with it; a descriptor matrix takes the factor instead."""
    with h5py.File(path, "w") as file:
        file.attrs.update({"kind": "state space", "unit_time": "ms"})
        file["A"], file["B"], file["C"] = [[-2.0]], [[3.0]], [[1.0]]
    model = io.load(path)
    assert (model.A[0, 0], model.B[0, 0], model.C[0, 0]) == (-2000.0, 3000.0, 1.0)
    with h5py.File(path, "a") as file:
        file["E"] = [[1.0]]
    model = io.load(path)
    assert (model.A[0, 0], model.E[0, 0], model.B[0, 0]) == (-2.0, 1e-3, 3.0)


def test_state_space_units_are_names(path):
    """Nothing is known of the states: without a unit system the channels' units are names, whatever they say."""
    with h5py.File(path, "w") as file:
        file.attrs["kind"] = "state space"
        file["A"], file["B"] = [[-2.0]], [[3.0]]
        file["inputs/unit"] = ["counts per fortnight"]
    assert io.load(path).inputs[0].unit == "counts per fortnight"


# ---- refusals ------------------------------------------------------------------------------------------------------


def refusal(path, units, channels):
    sizes = (1.0, 1.0, 1.0)
    with pytest.raises(UnitError) as caught:
        io.load(write(path, units, *sizes, channels))
    return caught.value


def test_force_where_a_displacement_is_picked(path):
    """A force unit on a picked displacement is refused with a hint."""
    error = refusal(path, SYSTEMS["mm t s"][0], {"outputs/unit": ["N", "", ""]})
    assert str(error) == (
        "channel y1 has a unit of something else\n"
        "  expected: a length or an angle: its output row only picks unknowns\n"
        "  got:      N, a force\n"
        f"  where:    {path}\n"
        '  remedy:   correct the unit; if the matrix itself holds this unit, say channel_units = "channels"'
    )


@pytest.mark.parametrize(
    ("channels", "expected", "got"),
    [
        ({"inputs/unit": ["mm"]}, "a force or a moment: its load column only picks unknowns", "mm, a length"),
        (
            {"outputs/unit": ["", "mm", ""]},
            "a length per time or an angle per time: its output row only picks unknowns",
            "mm, a length",
        ),
        (
            {"outputs/unit": ["", "", "g"]},
            "a length per time squared or an angle per time squared: its output row only picks unknowns",
            "g, a mass",
        ),
        ({"outputs/unit": ["%", "", ""]}, "a length or an angle: its output row only picks unknowns", "%, a ratio"),
    ],
)
def test_units_of_something_else(path, channels, expected, got):
    """Loads are forces or moments, outputs lengths or angles and their rates; in every unit system, and in none."""
    for units in (SYSTEMS["mm t s"][0], {}):
        error = refusal(path, units, channels)
        assert (error.expected, error.got) == (expected, got)


def test_no_unit_system(path):
    """Without a unit system plain SI units are taken as they are; any other is refused with the remedy."""
    model = io.load(write(path, {}, 1.0, 1.0, 1.0, SI_CHANNELS))
    assert [c.unit for c in model.outputs] == ["m", "m/s", "m/s^2"]
    assert model.units == UnitSystem()
    error = refusal(path, {}, {"outputs/unit": ["mm", "", ""]})
    assert str(error) == (
        "channel y1 is in mm, but the units of the matrices are not known\n"
        "  expected: the model's unit system, or plain SI units (m, N, s, K, W)\n"
        "  got:      mm\n"
        f"  where:    {path}\n"
        "  remedy:   state unit_length of the matrices in the file"
    )


def test_channels_that_already_are_in_their_units(path):
    """A file can say that load and outputs already are in the channels' units: nothing is converted or refused."""
    model = io.load(write(path, {"channel_units": "channels"}, 1.0, 1.0, 1.0, {"outputs/unit": ["N", "g0", "%"]}))
    assert np.array_equal(model.Cq, CQ)
    assert [c.unit for c in model.outputs] == ["N", "g0", "%"]


@pytest.mark.parametrize(
    ("units", "what", "expected"),
    [
        ({"unit_length": "kg"}, "unit_length is a unit of something else", 'a unit of length such as "mm"'),
        ({"unit_time": "Hz"}, "unit_time is a unit of something else", 'a unit of time such as "s"'),
        ({"unit_mass": "tonn"}, "unknown unit 'tonn'", 'a unit of mass such as "t"'),
        (
            {"unit_length": "mm", "unit_mass": "kg", "unit_force": "N"},
            "mass and force units contradict each other",
            "force = mass * length / time^2 = 0.001 N",
        ),
    ],
)
def test_bad_unit_systems(path, units, what, expected):
    """A unit system with a wrong or contradicting entry is refused."""
    error = refusal(path, units, {})
    assert (error.what, error.expected) == (what, expected)
