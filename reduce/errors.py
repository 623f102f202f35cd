"""The domain errors: one small family, each also the nearest builtin.

Every message says what is wrong, what was expected, what was found, where, and what to do about it.
"""

from __future__ import annotations


class ModesieveError(Exception):
    """Base of every error that a user can cause; the command line prints it and ends with status 1."""

    def __init__(self, what: str, *, expected: str = "", got: str = "", where: str = "", remedy: str = "") -> None:
        self.what = what
        self.expected = expected
        self.got = got
        self.where = where
        self.remedy = remedy
        super().__init__(str(self))

    def __str__(self) -> str:
        lines = [self.what]
        for label in ("expected", "got", "where", "remedy"):
            text = getattr(self, label)
            if text:
                lines.append(f"  {label + ':':<9} {text}")
        return "\n".join(lines)

    def __reduce__(self) -> tuple[object, ...]:
        # Keyword-only arguments do not survive the default pickling; workers send errors home.
        return (_rebuild, (type(self), self.what, self.expected, self.got, self.where, self.remedy))


def _rebuild(kind: type[ModesieveError], what: str, expected: str, got: str, where: str, remedy: str) -> ModesieveError:
    return kind(what, expected=expected, got=got, where=where, remedy=remedy)


class ModelError(ModesieveError, ValueError):
    """The model's matrices, channels or damping do not make a model that can be used."""


class ChoiceError(ModesieveError, ValueError):
    """A request (band, count, measure, tolerance, keep list, statics) that this model cannot meet."""


class SolveError(ModesieveError, ArithmeticError):
    """A factorisation or an eigenvalue solve failed, or was foreseen to fail."""


class FileError(ModesieveError, OSError):
    """A file cannot be read or written, or holds something else than it should."""


class UnitError(ModesieveError, ValueError):
    """A quantity lacks a unit, has one of the wrong dimension, or disagrees with the model's units."""
