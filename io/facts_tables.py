"""The facts about a model file on a terminal."""

from __future__ import annotations

from typing import Any

from rich.console import Console

from modesieve.io.terminal import Column, bullets, labelled, table
from modesieve.io.wording import format_number, pretty_unit
from modesieve.reduce.inspection import Facts


def facts_report(console: Console, facts: Facts) -> list[Any]:
    """What a model file holds, whether it can be used, and what would be done."""
    noun = "states" if facts.kind == "state space" else "unknowns"
    mass = pretty_unit(facts.units.mass) or "in the matrices' mass unit"
    rows = [
        ("model", facts.title),
        ("file", facts.source),
        ("kind", f"{facts.kind}, {facts.n} {noun}, {facts.inputs} inputs, {facts.outputs} outputs"),
        ("damping", facts.damping),
        ("units", ", ".join(f"{name} {text}" for name, text in vars(facts.units).items() if text) or "not stated"),
        ("massless", f"{facts.massless} {noun}" if facts.massless else ""),
        ("parts", _parts_words(facts, noun)),
        ("empty rows", "; ".join(facts.zero_rows[:6]) + (" ..." if len(facts.zero_rows) > 6 else "")),
        ("total mass", "" if facts.total_mass is None else _total_mass(facts.total_mass, mass)),
        ("capacity", "" if facts.capacity is None else f"{format_number(facts.capacity, 4)} in all"),
    ]
    names = list(facts.nonzeros)
    matrices: list[Column] = [
        ("matrix", names),
        ("nonzeros", [str(facts.nonzeros[name]) for name in names]),
        ("asymmetry", [format_number(facts.asymmetry[name], 2) if name in facts.asymmetry else "" for name in names]),
        ("definiteness", [facts.definiteness.get(name, "") for name in names]),
    ]
    out: list[Any] = [labelled(console, rows), "", table(console, matrices, left=(0, 3))]
    if facts.problems:
        out += ["", "Problems", bullets(console, facts.problems)]
    return [*out, "", "Next", bullets(console, facts.next_steps)]


def _parts_words(facts: Facts, noun: str) -> str:
    if len(facts.parts) <= 1:
        return "one, connected"
    sizes = ", ".join(str(size) for size in facts.parts[:6]) + (" ..." if len(facts.parts) > 6 else "")
    return f"{len(facts.parts)} that nothing connects, of {sizes} {noun}"


def _total_mass(values: Any, unit: str) -> str:
    x, y, z = (format_number(float(v), 4) for v in values)
    return f"{x} {unit}" if x == y == z else f"x {x}, y {y}, z {z} {unit}"
