"""Everything that touches the outside: files, units, figures, the command line."""

from modesieve.io.files import load, save
from modesieve.io.matrices import Place
from modesieve.io.model_file import load_model

__all__ = [
    "Place",
    "load",
    "load_model",
    "save",
]
