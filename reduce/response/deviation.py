"""How far a small response is from the full one, and relative to what.

Three references, always said: ``peak`` (largest singular value of the weighted full response over the band), ``local``
(the full response at the same frequency, not below a threshold), ``absolute`` (per output, in its unit, all inputs at
their amplitudes added).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.model import Interface
from modesieve.reduce.report import number
from modesieve.reduce.response.norms import largest_singular_value, worst_ratio
from modesieve.reduce.response.records import Certainty, ErrorFigure, FullResponse, Reference

#: Without resolutions, what lies this far below the band's peak does not count as a local reference.
_FLOOR = 1e-3


@dataclass(frozen=True, kw_only=True, eq=False)
class Yardstick:
    """What errors are held against: the full response, weighted, and the levels derived from it.

    omega (w,) rad/s; G (w, p, m) weighted full response; sigma (w,) its largest singular value; local (w,) the local
    reference ``max(sigma, threshold)``; peak: the band's peak, without rigid-body and integrating terms; threshold and
    its reason; refusal: why relative errors mean nothing here, "" if they do.
    """

    channels: Interface
    omega: Real
    G: Complex
    sigma: Real
    local: Real
    peak: float
    threshold: float
    threshold_note: str
    refusal: str = ""

    def scale(self, of: Literal["peak", "local"]) -> Real:
        """Divisor (w,) of the weighted error."""
        return self.local if of == "local" else np.full(len(self.omega), self.peak if self.peak > 0 else 1.0)

    def figure(self, R: Complex, of: Reference, certainty: Certainty = "measured") -> ErrorFigure:
        """Worst error of the response ``R`` (w, p, m, physical units) relative to ``of``.

        With ``of="absolute"``: the worst output, see `absolute`.
        """
        if of == "absolute":
            return max(self.absolute(R, certainty), key=lambda figure: figure.value)
        if self.refusal:
            return ErrorFigure(value=float("nan"), certainty=certainty, relative_to=of, note=self.refusal)
        E = self.G - self.channels.weigh(R)
        value, at = worst_ratio(E, self.scale(of))
        return ErrorFigure(
            value=value,
            certainty=certainty,
            relative_to=of,
            pair=self.pair(E[at]),
            at_omega=float(self.omega[at]),
            threshold=self.threshold if of == "local" else None,
        )

    def absolute(self, R: Complex, certainty: Certainty = "measured") -> tuple[ErrorFigure, ...]:
        """One figure per output: ``max_w sum_l abs(G - R)_kl amplitude_l`` in the output's unit."""
        E = np.abs(self.G - self.channels.weigh(R)) * self.channels.resolutions[:, None]  # amplitudes are in G
        total = E.sum(axis=2)
        at = np.argmax(total, axis=0) if len(total) else np.zeros(self.channels.p, dtype=int)
        return tuple(self._of_output(k, E[at[k], k], float(self.omega[at[k]]), certainty) for k in range(E.shape[1]))

    def _of_output(self, k: int, entries: Real, omega: float, certainty: Certainty) -> ErrorFigure:
        output, inputs = self.channels.outputs[k], self.channels.inputs
        return ErrorFigure(
            value=float(entries.sum()),
            certainty=certainty,
            relative_to="absolute",
            unit=output.unit,
            pair=(inputs[int(np.argmax(entries))].name if inputs else "", output.name),
            at_omega=omega,
        )

    def pair(self, entry: Complex) -> tuple[str, str] | None:
        """(input, output) of the largest entry (p, m)."""
        if entry.size == 0:
            return None
        k, l = np.unravel_index(int(np.argmax(np.abs(entry))), entry.shape)
        return self.channels.inputs[l].name, self.channels.outputs[k].name


def yardstick(channels: Interface, full: FullResponse, *, rigid: Complex | None = None, refusal: str = "") -> Yardstick:
    """The references of ``full``.

    rigid (w, p, m): the response of rigid-body and integrating modes, which every small model keeps exactly; the peak
    is that of the rest. Near frequency 0 they grow without limit, and a share of infinity says nothing.
    """
    G = channels.weigh(full.G)
    sigma = largest_singular_value(G)
    elastic = sigma if rigid is None else largest_singular_value(G - channels.weigh(rigid))
    peak = float(elastic.max(initial=0.0))
    threshold, note = _threshold(channels, peak, rigid is not None)
    return Yardstick(
        channels=channels,
        omega=full.omega,
        G=G,
        sigma=sigma,
        local=np.maximum(sigma, threshold if threshold > 0 else 1.0),
        peak=peak,
        threshold=threshold,
        threshold_note=note,
        refusal=refusal,
    )


def _threshold(channels: Interface, peak: float, has_rigid: bool) -> tuple[float, str]:
    if channels.has_resolutions:
        return 1.0, "local errors count from the outputs' resolutions upwards"
    of = "the elastic response's peak in the band" if has_rigid else "the band's peak"
    level = f"{number(_FLOOR * peak)}, {_FLOOR:g} of {of}"
    return _FLOOR * peak, f"local errors count from {level}, upwards (no resolutions given)"


def largest_pairs(E: Complex, G: Complex) -> Real:
    """Worst error of every pair relative to its own peak, (p, m); 0 where both vanish, nan where only G does."""
    error, size = np.abs(E).max(axis=0, initial=0.0), np.abs(G).max(axis=0, initial=0.0)
    out = np.divide(error, size, out=np.full(error.shape, np.nan), where=size > 0)
    out[(size == 0) & (error == 0)] = 0.0
    return np.asarray(out)


def phase_error(R: Complex, G: Complex, floor: Any) -> Real:
    """``arg(R/G)`` in rad within (-pi, pi], nan where ``abs(G)`` is below ``floor``."""
    counts = (np.abs(G) > floor) & (np.abs(R) > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        angle = np.angle(np.where(counts, R * np.conj(G), 1.0))
    return np.where(counts, angle, np.nan)


def joined(parts: list[FullResponse]) -> FullResponse:
    """Several full responses of one model as one, frequencies ascending, each only once."""
    if len(parts) == 1:
        return parts[0]
    omega = np.concatenate([part.omega for part in parts])
    _, order = np.unique(omega, return_index=True)
    method = tuple(name for part in parts for name in part.method)
    return replace(
        parts[0],
        omega=omega[order],
        G=np.concatenate([part.G for part in parts])[order],
        backward_error=np.concatenate([part.backward_error for part in parts])[order],
        residual=np.concatenate([part.residual for part in parts])[order],
        method=tuple(method[i] for i in order),
        factorisations=sum(part.factorisations for part in parts),
        solves=sum(part.solves for part in parts),
        seconds=sum(part.seconds for part in parts),
    )


def picked(full: FullResponse, keep: Any) -> FullResponse:
    """``full`` at the frequencies of the mask or index array ``keep`` only."""
    keep = np.flatnonzero(keep) if np.asarray(keep).dtype == bool else np.asarray(keep)
    return replace(
        full,
        omega=full.omega[keep],
        G=full.G[keep],
        backward_error=full.backward_error[keep],
        residual=full.residual[keep],
        method=tuple(full.method[i] for i in keep),
    )
