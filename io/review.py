"""The review: what a small model's file proves by itself, what belongs together, and what rests on trust."""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from modesieve.io import hdf5
from modesieve.io.files import load
from modesieve.io.model_file import load_model
from modesieve.io.reduced_file import as_model
from modesieve.io.seal import SEAL, digest
from modesieve.reduce.errors import FileError, ModesieveError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.model import Model, StateSpace, Structure
from modesieve.reduce.response.full import full_response
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import SecondOrderModal
from modesieve.reduce.truncation.gauge import yardstick_for
from modesieve.reduce.truncation.records import ReducedModel
from modesieve.reduce.truncation.statics import cutter
from modesieve.reduce.truncation.tails import with_tail_levels

#: Recomputed figures agree to this, relative: both sides do the same arithmetic, perhaps on another processor.
SAME = 1e-9
#: A stored full solution with a larger backward error proves nothing.
TRUSTED = 1e-10


@dataclass(frozen=True, kw_only=True)
class Finding:
    """One check: passed, failed (ok False), or not possible here (ok None), with what was seen."""

    what: str
    ok: bool | None
    seen: str


@dataclass(frozen=True, kw_only=True)
class Review:
    """All findings of one review; ``trusted``: what the file cannot prove by itself."""

    findings: tuple[Finding, ...]
    trusted: tuple[str, ...]

    @property
    def passed(self) -> bool:
        return all(finding.ok is not False for finding in self.findings)


def review(path: Path, *, page: Path | None = None, full: Path | None = None) -> Review:
    """Check a small model's file, optionally against its page and its full model.

    Raises FileError where the file is no reduced model or cannot be read at all.
    """
    seal = _seal(path)
    small = load(path)
    if not isinstance(small, ReducedModel):
        raise FileError(
            "this is no reduced model",
            expected="a file that `modesieve truncate` or `run` wrote",
            got=type(small).__name__.lower(),
            where=str(path),
        )
    checks: list[Callable[[ReducedModel], Finding]] = [
        _cut_again,
        _model_agrees,
        _stable,
        _samples,
        _error,
        _guarantee,
        _count,
    ]
    findings = [seal, *(_guarded(check, small) for check in checks)]
    if page is not None:
        findings += _page(page, path, small)
    if full is not None:
        findings += _against_full(small, full)
    return Review(findings=tuple(findings), trusted=_trusted(small, full is not None))


def _guarded(check: Callable[[ReducedModel], Finding], small: ReducedModel) -> Finding:
    try:
        return check(small)
    except (ModesieveError, ArithmeticError, ValueError, IndexError) as error:
        return Finding(what=check.__name__.strip("_").replace("_", " "), ok=False, seen=str(error).splitlines()[0])


def file_seal(path: Path) -> tuple[str, str]:
    """The seal that a file carries ("" if none) and the one that its content has."""
    with hdf5.opened(path) as source:
        return hdf5.text_attribute(source, source.file, SEAL), digest(source.file)


def _seal(path: Path) -> Finding:
    stated, found = file_seal(path)
    if not stated:
        return Finding(what="seal of the file", ok=None, seen="the file carries none")
    ok = stated == found
    return Finding(what="seal of the file", ok=ok, seen=found[:16] if ok else f"{found[:16]}, sealed {stated[:16]}")


def _compare(what: str, got: Any, expected: Any, tolerance: float = SAME) -> Finding:
    got, expected = np.asarray(got), np.asarray(expected)
    if got.shape != expected.shape:
        return Finding(what=what, ok=False, seen=f"shapes {got.shape} and {expected.shape}")
    scale = float(np.abs(expected).max(initial=0.0))
    gap = float(np.abs(got - expected).max(initial=0.0))
    relative = gap / scale if scale > 0 else gap
    return Finding(what=what, ok=bool(relative <= tolerance), seen=f"differs by {relative:.1e}")


def _grid(small: ReducedModel) -> Any:
    if small.samples is not None:
        return small.samples.omega
    low, high = small.band or (1.0, 10.0)
    return np.geomspace(max(low, 1e-3 * high), high, 50)


def _cut_again(small: ReducedModel) -> Finding:
    what = "small model cut again from the table"
    omega = _grid(small)
    if small.statics == "vectors":
        if small.hub is None:
            return Finding(what=what, ok=None, seen="tail levels are made from the full model")
        again = with_tail_levels(small.hub, small.kept, small.levels).system
    else:
        again = cutter(small.modes, small.statics, 0)(small.kept)
    return _compare(what, again.response(omega), small.response(omega))


def _guarantee(small: ReducedModel) -> Finding:
    """The guaranteed curve again from the stored reference model, and every spot check inside it."""
    what, hub, promise = "guarantee", small.hub, small.guarantee
    if hub is None or promise is None:
        return Finding(what=what, ok=None, seen="the file holds none")
    if not promise.holds:
        return Finding(what=what, ok=None, seen=f"withdrawn: {promise.reason}")
    gap = largest_singular_value(hub.weigh(hub.response(promise.omega) - small.response(promise.omega)))
    worst = float(np.max(np.abs(gap + hub.error(promise.omega) - promise.upper) / np.max(promise.upper), initial=0.0))
    broken = [s for s in promise.spot_checks if s.error > s.high + s.slack]
    seen = f"curve differs by {worst:.1e}, {len(promise.spot_checks)} spot checks, {len(broken)} outside the bound"
    return Finding(what=what, ok=worst <= 1e-6 and not broken, seen=seen)


def _model_agrees(small: ReducedModel) -> Finding:
    """/model, which other programs read, says the same as /system."""
    what, model, omega = "matrices in /model", as_model(small), _grid(small)
    if isinstance(model, StateSpace) and isinstance(small.system, SecondOrderModal) and np.any(small.system.eta):
        return Finding(what=what, ok=None, seen="in state space the loss factor is a damping ratio of half its size")
    return _compare(what, full_response(model, omega).G, small.response(omega), 1e-8)


def _stable(small: ReducedModel) -> Finding:
    worst = float(small.system.poles.real.max(initial=-np.inf))
    named = {reason for reason in small.modes.always_kept if reason}
    ok = worst <= 1e-9 * float(np.abs(small.system.poles).max(initial=1.0)) or "unstable" in named
    seen = f"largest real part {worst:.3g} 1/s" + (f", with {', '.join(sorted(named))} modes" if named else "")
    return Finding(what="stability", ok=ok, seen=seen)


def _samples(small: ReducedModel) -> Finding:
    what = "stored full response"
    if small.samples is None:
        return Finding(what=what, ok=None, seen="the file holds none")
    worst = float(small.samples.backward_error.max(initial=0.0))
    seen = f"{len(small.samples.omega)} frequencies, backward error at most {worst:.1e}"
    return Finding(what=what, ok=worst <= TRUSTED, seen=seen)


def _error(small: ReducedModel) -> Finding:
    """The stated error again, from the stored samples and the matrices."""
    what = "stated error"
    if small.error is None or small.samples is None or small.band is None:
        return Finding(what=what, ok=None, seen="no error, samples or band stored")
    stated, unit = small.error, f" {small.error.unit}".rstrip()
    yard = yardstick_for(small.modes, small.samples, small.band)
    figure = measured_again(yard, small)
    if figure is None:
        return Finding(what=what, ok=None, seen=f"{stated.value:.4g} {unit} relative to {stated.relative_to}".strip())
    seen = f"stated {stated.value:.4g}{unit} ({stated.certainty}), measured again {figure:.4g}{unit}"
    if stated.certainty == "guaranteed":
        return Finding(what=what, ok=figure <= stated.value * (1 + SAME), seen=seen)
    return Finding(what=what, ok=abs(figure - stated.value) <= 1e-6 * max(stated.value, 1e-12), seen=seen)


def measured_again(yard: Any, small: ReducedModel) -> float | None:
    """The error figure of the stored kind on the stored samples; None for a unit that no output has."""
    assert small.error is not None
    G = small.response(yard.omega)
    if small.error.relative_to != "absolute":
        return float(yard.figure(G, small.error.relative_to, "measured").value)
    worst = [float(f.value) for f in yard.absolute(G, "measured") if f.unit == small.error.unit]
    return max(worst) if worst else None


def _count(small: ReducedModel) -> Finding:
    c = small.modes.certificate
    seen = {"all": f"all {c.found} modes are known", "counted": f"{c.found} modes found, {c.expected} counted"}.get(
        c.complete, c.reason
    )
    agrees = c.found == len(small.modes) and c.expected in (None, c.found)
    return Finding(what="count certificate", ok=agrees if c.complete != "no" else None, seen=seen)


# ---- the page --------------------------------------------------------------------------------------------------------


def page_seal(data_text: str) -> str:
    """Hash of a page's data, as it stands in its script element."""
    return hashlib.sha256(data_text.encode()).hexdigest()


def _page(page: Path, path: Path, small: ReducedModel) -> list[Finding]:
    try:
        text = page.read_text("utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise FileError("the page cannot be read", got=str(error), where=str(page)) from error
    found = re.search(
        r'<script type="application/json" id="data" data-seal="([0-9a-f]{64})">(.*?)</script>', text, re.S
    )
    if found is None:
        return [Finding(what="page", ok=False, seen=f"{page} holds no data of this program")]
    data = json.loads(found[2])
    sealed = page_seal(found[2]) == found[1]
    belongs = data.get("file_seal") == file_seal(path)[1]
    kept = data["delivered"]["kept"] == list(small.kept)
    same = data.get("fingerprint") == small.modes.origin.fingerprint
    return [
        Finding(what="seal of the page", ok=sealed, seen="unaltered" if sealed else "the page's data was altered"),
        Finding(
            what="page and file",
            ok=belongs and kept and same,
            seen="belong together" if belongs and kept and same else "the page was written for another file or run",
        ),
    ]


# ---- the full model --------------------------------------------------------------------------------------------------


def _against_full(small: ReducedModel, full: Path) -> list[Finding]:
    model = load_model(full)
    same = fingerprint(model) == small.modes.origin.fingerprint
    findings = [Finding(what="full model", ok=same, seen="the one it was cut from" if same else "another model")]
    if same:
        findings.append(_solve_again(small, model))
    return findings


def _solve_again(small: ReducedModel, model: Model) -> Finding:
    """A few stored samples solved again with the full matrices."""
    from modesieve.reduce.modal.find import find_modes

    what = "stored samples solved again"
    if small.samples is None:
        return Finding(what=what, ok=None, seen="the file holds none")
    at = np.unique(np.linspace(0, len(small.samples.omega) - 1, 5).astype(int))
    modal = isinstance(model, Structure) and model.damping.is_modal
    modes = find_modes(model, count=len(small.modes)) if modal else None
    again = full_response(model, small.samples.omega[at], modes=modes)
    return _compare(what, again.G, small.samples.G[at], 1e-7)


def _trusted(small: ReducedModel, have_full: bool) -> tuple[str, ...]:
    out = ["that the full model describes the real thing: not compared with hardware here"]
    if not have_full:
        out.append("that the stored samples and the table of modes came from the full model (give --full to check)")
    if small.modes.certificate.complete == "counted":
        out.append("that the count was made with the pivots it reports")
    return tuple(out)
