"""The hand-over: small models as plain arrays, stand-alone surrogates, and runs through given inputs."""

from modesieve.io.handover.containers import container_of, read_form, write_form
from modesieve.io.handover.forms import Form, discrete_form, second_order_form, state_space_form, to_scipy
from modesieve.io.handover.histories import read_inputs, write_outputs
from modesieve.io.handover.surrogate import Surrogate, source

__all__ = [
    "Form",
    "Surrogate",
    "container_of",
    "discrete_form",
    "read_form",
    "read_inputs",
    "second_order_form",
    "source",
    "state_space_form",
    "to_scipy",
    "write_form",
    "write_outputs",
]
