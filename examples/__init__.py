"""The gallery: models whose answers are known exactly, and two demos. Tests and benchmarks share them."""

from modesieve.examples.demos import Demo, cold_plate, mast
from modesieve.examples.fields import flow_plate, grid_plate, grid_plate_rates, solid
from modesieve.examples.frames import Section, frame, straight_beam, structure_of, tube
from modesieve.examples.lines import chain, chain_omega, ladder, ladder_rates, random_state_space, rod

__all__ = [
    "Demo",
    "Section",
    "chain",
    "chain_omega",
    "cold_plate",
    "flow_plate",
    "frame",
    "grid_plate",
    "grid_plate_rates",
    "ladder",
    "ladder_rates",
    "mast",
    "random_state_space",
    "rod",
    "solid",
    "straight_beam",
    "structure_of",
    "tube",
]
