"""Everything that touches the outside: files, units, figures, the command line."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
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

#: Name to module. Imported when first used: `modesieve --help` must not wait for h5py and SciPy.
_HOME = {
    "Place": "matrices",
    "load": "files",
    "load_model": "model_file",
    "load_modes": "modes_file",
    "load_reduced": "reduced_file",
    "save": "files",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"modesieve.io.{_HOME[name]}"), name)
    globals()[name] = value
    return value
