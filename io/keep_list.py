"""Keep lists: which modes stay, as a small TOML file that people and the page write."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from modesieve.io.atomic import PathLike, write_text
from modesieve.reduce.errors import FileError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.model import Model
from modesieve.reduce.truncation.records import Keep, ReducedModel

_EXPECTED = 'keep = [1, 2, 5], and at most the full model\'s hash beside it: model = "..."'


def read_keep_list(path: PathLike) -> tuple[Keep, str]:
    """The choice, and the fingerprint of the model that the list was made for ("" if it does not say).

    Raises FileError for anything but a TOML file with ``keep = [numbers]`` and, optionally, ``model = "fingerprint"``.
    """
    content = read_toml(path)
    extra = sorted(set(content) - {"keep", "model"})
    numbers, model = content.get("keep"), content.get("model", "")
    good = isinstance(numbers, list) and all(type(i) is int for i in numbers) and isinstance(model, str)
    if extra or not good:
        raise FileError("this is no keep list", expected=_EXPECTED, got=_found(extra, numbers), where=str(path))
    assert isinstance(numbers, list)
    return Keep(numbers=tuple(sorted(set(numbers)))), model


def _found(extra: list[str], numbers: Any) -> str:
    if extra:
        return "also " + ", ".join(extra)
    return "no keep" if numbers is None else f"keep = {str(numbers)[:60]}"


def keep_list_for(model: Model, path: PathLike) -> Keep:
    """The choice in a keep list. Raises FileError for a list of another model: its numbers would name other modes."""
    choice, mark = read_keep_list(path)
    own = fingerprint(model)
    if mark and mark != own:
        raise FileError(
            "the keep list belongs to another model",
            expected=f"model {own[:12]}",
            got=mark[:12],
            where=str(path),
            remedy="make the list anew, or remove its line model = ... if the mode numbers are the same",
        )
    return choice


def write_keep_list(path: PathLike, small: ReducedModel) -> None:
    """Write the kept numbers of ``small`` with the fingerprint of its full model."""
    origin = small.modes.origin
    lines = [
        "# Mode numbers as in the modes table (ascending frequency); edit and feed to:",
        "#   modesieve truncate MODEL.h5 --keep-list THIS.toml -o SMALL.h5",
        f"keep = {list(small.kept)}",
        f'model = "{origin.fingerprint}"  # hash of the full model: refused on any other',
    ]
    write_text(path, "\n".join(lines) + "\n")


def read_toml(path: PathLike) -> dict[str, Any]:
    """A TOML file as a dictionary. Raises FileError with the place of a syntax mistake."""
    try:
        return tomllib.loads(Path(path).read_bytes().decode("utf-8"))
    except OSError as error:
        raise FileError(
            "the file cannot be read", expected="a TOML file", got=error.strerror or str(error), where=str(path)
        ) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise FileError("this is no TOML file", expected="TOML, in UTF-8", got=str(error), where=str(path)) from error
