"""One self-contained page per run: the data, the words and the scripts put together."""

from __future__ import annotations

from dataclasses import dataclass
from hashlib import sha256
from importlib.resources import files
from typing import Any

import numpy as np
from jinja2 import Environment, select_autoescape
from markupsafe import Markup

from modesieve.io.page.payload import (
    check_data,
    encode,
    figure_data,
    hub_data,
    mode_rows,
    number,
    packed,
    shape_data,
    spot_data,
    system_data,
    term_statics,
    time_data,
)
from modesieve.reduce.comparison.promised import Promised, promised
from modesieve.reduce.comparison.readiness import couplings
from modesieve.reduce.comparison.records import Check, Comparison, Sweep
from modesieve.reduce.modal.records import Modes, Ranking


@dataclass(frozen=True, kw_only=True)
class Words:
    """The texts of a page that are not in the data: verdict, cautions, assumptions, the commands to reproduce."""

    title: str
    headline: str
    sentence: str
    about: str
    cautions: tuple[str, ...] = ()
    facts: tuple[tuple[str, str], ...] = ()
    commands: tuple[str, ...] = ()


def page_text(comparison: Comparison, ranking: Ranking, words: Words, *, index: int = 0, file_seal: str = "") -> str:
    """The whole page as HTML, for the small model ``comparison.checks[index]``; `ranking` orders its modes.

    file_seal: seal of the small model's file, by which a review tells that the two belong together.

    Names of channels and titles come from files: they reach the page through JSON and text nodes only.
    """
    parts = files("modesieve.io.page")
    script = {name: Markup(parts.joinpath(f"{name}.js").read_text("utf-8")) for name in SCRIPTS}
    environment = Environment(autoescape=select_autoescape(default=True, default_for_string=True))
    template = environment.from_string(parts.joinpath("page.html").read_text("utf-8"))
    data = encode(page_data(comparison, comparison.checks[index], ranking, words) | {"file_seal": file_seal})
    return template.render(
        title=words.title,
        css=Markup(parts.joinpath("page.css").read_text("utf-8")),
        data=Markup(data),
        seal=sha256(data.encode()).hexdigest(),
        plotly=Markup(_plotly()),
        **script,
    )


SCRIPTS = ("numbers", "tails", "trial", "charts", "shapes", "page")


def _plotly() -> str:
    from plotly.offline import get_plotlyjs  # half a second to import: only when a page is written

    return str(get_plotlyjs())


def page_data(comparison: Comparison, check: Check, ranking: Ranking, words: Words) -> dict[str, Any]:
    """Everything the scripts read, as plain JSON values and packed arrays."""
    modes, small, full = comparison.modes, check.small, comparison.full
    origin = modes.origin
    scale = origin.weigh(np.ones((origin.p, origin.m)))
    low, high = comparison.band
    inside = full.omega[(full.omega >= low) & (full.omega <= high) & (full.omega > 0)]
    promise = promised(small, ranking, inside, comparison.threshold)
    return {
        "kind": origin.kind,
        "fingerprint": origin.fingerprint,
        "inputs": [{"name": c.name, "unit": c.unit} for c in origin.inputs],
        "outputs": [{"name": c.name, "unit": c.unit} for c in origin.outputs],
        "amplitudes": origin.amplitudes.tolist(),
        "scale": packed(scale),
        "band": [low, high],
        "in_band": [bool(low * (1 - 1e-12) <= w <= high * (1 + 1e-12)) for w in full.omega],
        "threshold": comparison.threshold,
        "reference_peak": comparison.reference_peak,
        "omega": packed(full.omega),
        "full": packed(full.G),
        "system": system_data(modes.system),
        "term_statics": packed(term_statics(modes.system)),
        "statics_matrix": None if modes.static is None else packed(modes.static),
        "eta_rest": getattr(small.system, "eta_X", 0.0),
        "counted_to": modes.certificate.below_omega,
        "modes": _rows_with_poles(modes, ranking),
        "by": ranking.by,
        "order": [int(n) for n in ranking.order],
        "measure_names": [n for n, v in ranking.measures.items() if n == ranking.by or np.isfinite(v).any()],
        "undefined": ranking.undefined,
        "coupling": np.hstack(couplings(modes)).tolist(),
        "delivered": check_data(check),
        "tolerance": _tolerance(small.choice),
        "sweep": None if comparison.sweep is None else sweep_data(comparison.sweep, promise),
        "axis": axis_data(promise),
        "step": time_data(comparison.step, small),
        "shapes": shape_data(modes),
        "hub": hub_data(small, full.omega),
        "spot_checks": spot_data(small),
        "error": figure_data(small.error),
        "verdict": {
            "headline": words.headline,
            "sentence": words.sentence,
            "about": words.about,
            "cautions": list(words.cautions),
        },
        "facts": [list(pair) for pair in words.facts],
        "commands": list(words.commands),
    }


def _rows_with_poles(modes: Modes, ranking: Ranking) -> list[dict[str, Any]]:
    rows = mode_rows(modes, ranking)
    for row, value in zip(rows, modes.eigenvalue, strict=True):
        row["re"], row["im"] = number(value.real), number(value.imag)
    return rows


def axis_data(promise: Promised | None) -> dict[str, Any] | None:
    """The whole-axis error over the number of states with its floor, or the reason why there is none."""
    if promise is None:
        return None
    if promise.axis is None or promise.floor is None:
        return {"reason": promise.reason}
    return {"states": promise.states.tolist(), "error": promise.axis.tolist(), "floor": promise.floor.tolist()}


def sweep_data(sweep: Sweep, promise: Promised | None) -> dict[str, Any]:
    """The sweep's local curves where there are any, else those of the peak; what is guaranteed beside them."""
    of = "local" if any(reference == "local" for _, reference in sweep.errors) else "peak"
    curves = [
        {
            "name": statics,
            "certainty": sweep.certainty,
            "x": [int(k) for k in sweep.kept],
            "y": [number(v) for v in values],
        }
        for (statics, reference), values in sweep.errors.items()
        if reference == of
    ]
    if promise is not None and of == "local":
        guaranteed = {"name": "at every sample", "certainty": "guaranteed"}
        curves.append(guaranteed | {"x": promise.kept.tolist(), "y": [number(v) for v in promise.local]})
    return {"by": sweep.ranked_by, "of": of, "curves": curves}


def _tolerance(choice: Any) -> dict[str, Any] | None:
    of = getattr(choice, "of", None)
    return None if of is None else {"value": choice.value, "of": of, "unit": choice.unit}
