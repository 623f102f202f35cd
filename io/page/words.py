"""The texts of a page: verdict, assumptions, certificate and the commands to reproduce, from the records."""

from __future__ import annotations

import textwrap
from datetime import date
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import numpy as np

from modesieve.io.page.build import Words
from modesieve.io.verdict import verdict_of
from modesieve.io.wording import format_frequency, format_number, format_quantity
from modesieve.reduce.comparison.readiness import readiness
from modesieve.reduce.comparison.records import Check, Comparison
from modesieve.reduce.modal.records import Modes


def page_words(comparison: Comparison, check: Check, *, commands: tuple[str, ...] = (), note: str = "") -> Words:
    """Everything that the page says in words about one small model."""
    origin, verdict = comparison.modes.origin, verdict_of(comparison, check)
    count, unknowns = len(comparison.modes), "states" if origin.kind == "state space" else "unknowns"
    about = f"{origin.title or 'A model'}: {origin.kind}, {origin.n:,} {unknowns}, {count} modes computed"
    return Words(
        title=origin.title or "A reduced model",
        headline=verdict.headline,
        sentence=verdict.sentence,
        about=". ".join(part for part in (about, note) if part) + ".",
        cautions=(*verdict.cautions, *_control(check)),
        facts=tuple(_facts(comparison, check)),
        commands=commands,
    )


def _control(check: Check) -> tuple[str, ...]:
    """What a control engineer must know; a thermal surrogate is not closed a loop around."""
    return () if check.small.modes.origin.kind == "thermal" else readiness(check.small).warnings


def _facts(comparison: Comparison, check: Check) -> list[tuple[str, str]]:
    modes, small, full = comparison.modes, check.small, comparison.full
    origin = modes.origin
    A, B, C, D = small.system.state_space()
    facts = [
        ("damping", origin.damping),
        ("unit system", ", ".join(u for u in vars(origin.units).values() if u) or "not stated"),
        ("total mass", _mass(modes)),
        ("count of modes", _count(modes)),
        ("solver", f"{modes.solver}, {modes.factorisations} factorisations, {modes.solves} solves"),
        ("worst residual of a mode", format_number(float(np.max(modes.residual, initial=0.0)))),
        ("full response", _full(comparison)),
        ("small model", f"A {A.shape}, B {B.shape}, C {C.shape}, D {D.shape}; statics {small.statics}"),
        ("local errors", comparison.threshold_note),
        ("model hash", origin.fingerprint),
        ("written", f"{date.today().isoformat()} by modesieve {_version()}"),
    ]
    facts += [("note", text) for text in (*small.notes, *modes.warnings, *comparison.warnings)]
    if full.factorisations:
        facts.insert(7, ("factorisations", f"{full.factorisations} for the response, {full.solves} solves"))
    return [(name, text) for name, text in facts if text]


def _mass(modes: Modes) -> str:
    if modes.total_mass is None:
        return ""
    unit = modes.origin.units.mass
    names = zip("xyz", modes.total_mass, strict=True)
    return ", ".join(f"{axis} {format_quantity(float(value), unit)}" for axis, value in names if value > 0)


def _count(modes: Modes) -> str:
    c = modes.certificate
    if c.complete == "all":
        return f"complete: all {c.found} modes are known"
    if c.complete == "counted" and c.below_omega is not None:
        point = format_frequency(c.below_omega) if modes.origin.kind == "structure" else f"{c.below_omega:.4g} 1/s"
        return f"complete below {point}: {c.expected} counted by the signs of the pivots, {c.found} found ({c.solver})"
    return f"not certified: {c.reason}"


def _full(comparison: Comparison) -> str:
    full = comparison.full
    methods = ", ".join(f"{full.method.count(m)} {m}" for m in sorted(set(full.method)))
    worst = format_number(float(full.backward_error.max(initial=0.0)), 2)
    return f"{len(full.omega)} frequencies ({methods}), backward error at most {worst}"


def _version() -> str:
    try:
        return version("modesieve")
    except PackageNotFoundError:
        return "(not installed)"


def reproduce(model: str, small: str, comparison: Comparison, check: Check, keep_list: str) -> tuple[str, ...]:
    """The commands that make the small model and the comparison again."""
    low, high = (f"{w / (2 * np.pi):.9g}Hz" for w in comparison.band)
    statics = f" --statics {check.small.statics}"
    if check.small.statics == "vectors":
        statics += f" --levels {check.small.levels}"
    paths = [_quoted(text) for text in (model, small, keep_list)]
    return (
        f"modesieve truncate {paths[0]} --band {low} {high} --keep-list {paths[2]}{statics} -o {paths[1]}",
        f"modesieve compare {paths[0]} {paths[1]} --band {low} {high} --page page.html",
        f"modesieve review {paths[1]} --page page.html --full {paths[0]}",
    )


def _quoted(text: str) -> str:
    name = Path(text).name
    return (
        name if name.replace("-", "").replace("_", "").replace(".", "").isalnum() else "'" + name.replace("'", "") + "'"
    )


# ---- the same words on paper -----------------------------------------------------------------------------------------

COLUMNS = 108


def report_lines(words: Words, comparison: Comparison) -> list[str]:
    """The texts and tables of a page as lines for a static report; lines that begin with "# " are headings."""
    lines = [f"# {words.title}", "", *_wrapped(f"{words.headline}: {words.sentence}"), *_wrapped(words.about), ""]
    lines += ["# Cautions", *(line for text in words.cautions for line in _wrapped(f"- {text}")), ""]
    lines += ["# Worst error of every pair, share of the pair's own peak", *_pairs(comparison), ""]
    lines += ["# Modes", *_modes(comparison), ""]
    lines += ["# Assumptions and certificate"]
    lines += [line for name, text in words.facts for line in _wrapped(f"{name}: {text}")]
    return [*lines, "", "# To reproduce", *(line for text in words.commands for line in _wrapped(text))]


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(" ".join(text.split()), COLUMNS, subsequent_indent="   ") or [""]


def _pairs(comparison: Comparison) -> list[str]:
    origin, share = comparison.modes.origin, comparison.checks[0].pair_peak
    rows = []
    for k, output in enumerate(origin.outputs):
        for l, channel in enumerate(origin.inputs):
            value = float(share[k, l])
            size = f"{100 * value:.3g} %" if np.isfinite(value) else "never above the threshold"
            rows += _wrapped(f"{output.name} from {channel.name}: {size}")
    return rows


def _modes(comparison: Comparison) -> list[str]:
    modes, kept = comparison.modes, set(comparison.checks[0].small.kept)
    thermal = modes.origin.kind == "thermal"
    rows = []
    for i in range(len(modes)):
        place = format_quantity(float(modes.time_constant[i]), "s") if thermal else format_frequency(modes.omega[i])
        damping = (
            "" if thermal or not np.isfinite(modes.damping_ratio[i]) else f", {100 * modes.damping_ratio[i]:.3g} %"
        )
        group = f", cluster {'-'.join(map(str, modes.cluster[i]))}" if modes.cluster[i] else ""
        why = modes.always_kept[i] or ("kept" if i + 1 in kept else "dropped")
        rows.append(f"{i + 1:4d}  {place}{damping}{group}: {why}")
    return rows
