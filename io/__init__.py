"""Everything that touches the outside: files, units, figures, the command line."""

from modesieve.io.files import load, save
from modesieve.io.matrices import Place
from modesieve.io.model_file import load_model
from modesieve.io.modes_file import load_modes
from modesieve.io.reduced_file import load_reduced

__all__ = [
    "Place",
    "load",
    "load_model",
    "load_modes",
    "load_reduced",
    "save",
]
