"""The commands of the hand-over: export, simulate, handover."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import click
import numpy as np

from modesieve.io.units import parse_temperature, parse_time
from modesieve.reduce.errors import ChoiceError, FileError
from modesieve.reduce.truncation.records import ReducedModel

FILE = click.Path(path_type=Path)


def load_small(path: Path) -> ReducedModel:
    """A reduced model's file, else FileError."""
    from modesieve.io import load

    record = load(path)
    if not isinstance(record, ReducedModel):
        raise FileError(
            "this is no reduced model",
            expected="a file that `modesieve truncate` or `run` wrote",
            got=type(record).__name__.lower(),
            where=str(path),
        )
    return record


@click.command()
@click.argument("small", type=FILE)
@click.option(
    "--as",
    "form",
    type=click.Choice(["state-space", "second-order", "discrete", "python", "c"]),
    required=True,
    help="The form to write.",
)
@click.option("--sample-time", help="For discrete, python and c, e.g. '1 ms'; suggested from the poles when left out.")
@click.option("--hold", type=click.Choice(["zero", "linear"]), default="zero", show_default=True)
@click.option("--delay", help="Delay of every input, e.g. '0.5 ms'.")
@click.option("--to", "container", type=click.Choice(["hdf5", "npz", "json", "csv"]), help="Default: by the ending.")
@click.option("-o", "--output", type=FILE, required=True, help="File, or a folder for CSV tables.")
def export(
    small: Path, form: str, sample_time: str | None, hold: Any, delay: str | None, container: Any, output: Path
) -> None:
    """Write a small model as plain arrays or as a stand-alone surrogate."""
    from modesieve.io.handover.containers import container_of, write_form
    from modesieve.io.handover.forms import discrete_form, second_order_form, state_space_form

    model = load_small(small)
    wait = 0.0 if delay is None else parse_time(delay, what="the delay")
    if form in ("python", "c"):
        text, notes = surrogate_text(model, form, _sample_time(model, sample_time), hold, wait)
        written = _write_source(output, text)
    else:
        if form == "discrete":
            made = discrete_form(model, _sample_time(model, sample_time), hold, wait)
        else:
            made = state_space_form(model) if form == "state-space" else second_order_form(model)
        notes, written = made.about["notes"], write_form(output, made, container_of(output, container))
    for note in notes:
        click.echo(f"note: {note}")
    for path in written:
        click.echo(f"wrote {path}")


def _sample_time(model: ReducedModel, text: str | None) -> float:
    from modesieve.reduce.response.discrete import suggested_sample_time

    if text is not None:
        return parse_time(text, what="the sample time")
    dt = suggested_sample_time(model.system, model.band)
    click.echo(f"note: sample time {dt:g} s, suggested from the poles and the band")
    return dt


def _write_source(path: Path, text: str) -> list[Path]:
    from modesieve.io.atomic import write_text

    write_text(path, text)
    return [path]


def surrogate_text(model: ReducedModel, language: Any, dt: float, hold: Any, delay: float) -> tuple[str, list[str]]:
    """Source text of the surrogate, and what to say about it."""
    from modesieve.io.handover.forms import sampled, sampling_notes
    from modesieve.io.handover.surrogate import Surrogate, source
    from modesieve.reduce.response.discrete import discretise

    system = sampled(model)
    notes = sampling_notes(model, dt)
    made = Surrogate(
        system=system,
        discrete=discretise(system, dt, hold=hold, delay=delay),
        interface=model.modes.origin,
        notes=(*_header_notes(model), *notes),
        uniform=model.uniform,
    )
    return source(made, language), notes


def _header_notes(model: ReducedModel) -> list[str]:
    lines = [f"Cut from {model.modes.origin.n} unknowns: {len(model.kept)} modes, {model.states} states."]
    if model.band is not None:
        low, high = (w / (2 * np.pi) for w in model.band)
        lines.append(f"Valid in the band {low:.4g} to {high:.4g} Hz.")
    if model.error is not None:
        e = model.error
        size = f"{e.value:.3g} {e.unit}" if e.unit else f"{100 * e.value:.3g} %"
        lines.append(f"Worst error in the band: {size}, {e.certainty}, relative to {e.relative_to}.")
    lines += [f"SHA-256 of the full model: {model.modes.origin.fingerprint}"]
    return [*lines, "Not compared with hardware. Where people can be hurt, local codes and licensed practice decide."]


# ---- simulate --------------------------------------------------------------------------------------------------------


@click.command()
@click.argument("small", type=FILE)
@click.argument("inputs", type=FILE)
@click.option("--hold", type=click.Choice(["zero", "linear"]), default="zero", show_default=True)
@click.option("--start", default="rest", show_default=True, help="rest, uniform:25degC, steady, or a file.")
@click.option("--reference", metavar="T", help="Temperature that the model's zero stands for, e.g. '20 degC'.")
@click.option("--save-state", type=FILE, help="Save the state at the last time, to go on from with --start.")
@click.option("-o", "--output", type=FILE, required=True)
def simulate(
    small: Path, inputs: Path, hold: Any, start: str, reference: str | None, save_state: Path | None, output: Path
) -> None:
    """Run a small model through an input history (CSV: time in s, then one column a channel).

    A first column named hz makes it random loads: one-sided power spectral densities (unit^2/Hz), uncorrelated between
    inputs; OUT.csv then holds every output's root mean square and how far it may be off.
    """
    from modesieve.io.handover.histories import is_spectrum, read_inputs, write_outputs
    from modesieve.reduce.response.simulate import simulate as run

    model = load_small(small)
    origin = model.modes.origin
    if is_spectrum(inputs):
        _random(model, inputs, output)
        return
    given = read_inputs(inputs, tuple(c.name for c in origin.inputs))
    zero = 0.0 if reference is None else in_model_degrees(parse_temperature(reference), model)
    state = start_state(model, start, given.u[0], zero)
    began = time.perf_counter()
    result = run(model.system, given.t, given.u, hold=hold, state=state)
    spent = time.perf_counter() - began
    if save_state is not None:
        _save_state(save_state, model, result.state)
    columns = {c.name: result.y[:, k] + zero for k, c in enumerate(origin.outputs)}
    columns |= error_columns(model, start, given.u)
    write_outputs(output, given.t, columns)
    for line in _remarks(model, given.t, given.u):
        click.echo(f"note: {line}")
    span = float(given.t[-1] - given.t[0])
    click.echo(f"{len(given.t)} rows over {span:.4g} s in {spent:.3g} s: {span / max(spent, 1e-9):.3g} times real time")
    click.echo(f"wrote {output}")


def _random(model: ReducedModel, spectrum: Path, output: Path) -> None:
    """RMS of every output under the given densities, with its guaranteed error where the model carries a guarantee."""
    from modesieve.io.atomic import write_text
    from modesieve.io.handover.histories import read_inputs, safe_header
    from modesieve.reduce.response.simulate import random_response

    origin = model.modes.origin
    given = read_inputs(spectrum, tuple(c.name for c in origin.inputs))
    hz, bound = resolved(model, given.t), None
    psd = np.column_stack([np.interp(hz, given.t, column) for column in given.u.T])
    if model.hub is not None and model.guarantee is not None and model.guarantee.holds:
        omega = 2 * np.pi * hz
        bound = np.abs(model.hub.response(omega) - model.response(omega)) + model.hub.entry_error(omega)
    result = random_response(model.system, hz, psd, bound=bound)
    rows = ["output,unit,rms,error at most"]
    for k, channel in enumerate(origin.outputs):
        error = "" if result.error is None else repr(float(result.error[k]))
        rows.append(f"{safe_header(channel.name)},{safe_header(channel.unit)},{float(result.rms[k])!r},{error}")
        click.echo(
            f"{channel.name}: {result.rms[k]:.4g} {channel.unit} rms" + (f", off by at most {error}" if error else "")
        )
    write_text(output, "\n".join(rows) + "\n")
    click.echo(f"wrote {output}: from {hz[0]:g} to {hz[-1]:g} Hz, integrated on {len(hz)} frequencies")


def resolved(model: ReducedModel, hz: Any) -> Any:
    """The given frequencies with forty more across every resonance of the small model between them."""
    poles = model.system.poles
    swinging = poles[poles.imag > 0]
    centre, half = swinging.imag / (2 * np.pi), np.maximum(-swinging.real, 1e-6 * swinging.imag) / (2 * np.pi)
    spread = np.sinh(np.linspace(-5, 5, 41))
    more = (centre[:, None] + half[:, None] * spread).ravel()
    even = np.linspace(hz[0], hz[-1], 2001)
    return np.unique(np.concatenate([hz, even, more[(more > hz[0]) & (more < hz[-1])]]))


def error_columns(model: ReducedModel, start: str, u: Any) -> dict[str, Any]:
    """Guaranteed largest error of every output over all time, as columns: thermal, from rest, within the amplitudes."""
    from modesieve.reduce.truncation.time_bound import worst_error

    origin, guarantee = model.modes.origin, model.guarantee
    known = model.hub is not None and guarantee is not None and guarantee.holds and origin.kind == "thermal"
    if not known or start != "rest" or np.any(np.abs(u) > origin.amplitudes * (1 + 1e-9)):
        return {}
    worst = worst_error(model.hub, model.system).worst  # type: ignore[arg-type]
    return {f"{c.name} error at most": np.full(len(u), worst[k]) for k, c in enumerate(origin.outputs)}


def start_state(model: ReducedModel, start: str, first: Any, zero: float = 0.0) -> Any:
    """The state that the words of --start mean; zero: the model's own zero in degrees. ChoiceError or FileError."""
    from modesieve.reduce.response.simulate import steady_state

    if start == "rest":
        return None
    if start == "steady":
        return steady_state(model.system, first)
    if start.startswith("uniform:"):
        if model.uniform is None:
            raise ChoiceError(
                "this model has no uniform temperature",
                expected="a thermal model whose file holds its uniform state",
                got=f"a {model.modes.origin.kind} model",
                remedy="start from rest, steady, or a saved state",
            )
        return (in_model_degrees(parse_temperature(start.removeprefix("uniform:")), model) - zero) * model.uniform
    return _load_state(Path(start), model)


def in_model_degrees(kelvin: float, model: ReducedModel) -> float:
    """An absolute temperature in the model's own unit; degrees Celsius unless the model says kelvin."""
    return kelvin if model.modes.origin.units.temperature in ("K", "kelvin") else kelvin - 273.15


def _save_state(path: Path, model: ReducedModel, state: Any) -> None:
    import json

    from modesieve.io.atomic import write_text

    content = {"format": "modesieve state", "model": model.modes.origin.fingerprint, "kept": list(model.kept)}
    write_text(path, json.dumps(content | {"state": [float(v) for v in state]}) + "\n")


def _load_state(path: Path, model: ReducedModel) -> Any:
    import json

    try:
        content = json.loads(path.read_text("utf-8"))
        state = np.array(content["state"], dtype=float)
        fits = (content["model"], content["kept"]) == (model.modes.origin.fingerprint, list(model.kept))
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise FileError(
            "this is no saved state",
            expected="rest, uniform:25degC, steady, or a file that --save-state wrote",
            got=str(error),
            where=str(path),
        ) from error
    if not fits or state.shape != (model.states,) or not np.isfinite(state).all():
        raise FileError("this state belongs to another small model", expected=f"{model.states} states", where=str(path))
    return state


def _remarks(model: ReducedModel, t: Any, u: Any) -> list[str]:
    """Inputs beyond what was stated, and content beyond the band."""
    out = []
    for k, channel in enumerate(model.modes.origin.inputs):
        top = float(np.abs(u[:, k]).max())
        if channel.amplitude is not None and top > channel.amplitude * (1 + 1e-9):
            out.append(f"input {channel.name} reaches {top:.4g}, beyond its stated amplitude {channel.amplitude:.4g}")
    steps = np.diff(t)
    if model.band is not None and steps.size and float(steps.min()) > 0:
        share = _beyond_band(t, u, model.band[1])
        if share > 0.01:
            out.append(
                f"{100 * share:.2g} % of the inputs' power lies beyond the band: the stated error does not cover it"
            )
    return out


def _beyond_band(t: Any, u: Any, top: float) -> float:
    """Share of the inputs' power above ``top`` (rad/s), from the history on even times."""
    even = np.linspace(t[0], t[-1], min(len(t), 1 << 16))
    moved = np.array([np.interp(even, t, column - column.mean()) for column in u.T])
    power = (np.abs(np.fft.rfft(moved, axis=1)) ** 2).sum(axis=0)
    omega = 2 * np.pi * np.fft.rfftfreq(len(even), even[1] - even[0])
    total = float(power.sum())
    return float(power[omega > top].sum()) / total if total > 0 else 0.0


# ---- handover --------------------------------------------------------------------------------------------------------


@click.command()
@click.argument("job", metavar="BRIEF.toml|DIR", type=FILE)
@click.option("-o", "--output", type=FILE, required=True, metavar="FOLDER.zip")
def handover(job: Path, output: Path) -> None:
    """Bundle a run (its folder, or a brief that is run first) into one zip with a manifest of hashes."""
    import tempfile

    from modesieve.io.handover.bundle import write_bundle

    if job.is_dir():
        names = write_bundle(job, output)
    else:
        with tempfile.TemporaryDirectory() as scratch:
            _run_brief(job, Path(scratch))
            names = write_bundle(Path(scratch), output)
    click.echo(f"wrote {output}: {', '.join(names)}")


def _run_brief(brief_file: Path, folder: Path) -> None:
    from modesieve.io.brief import brief_model, brief_settings, read_brief
    from modesieve.io.progress_display import ProgressDisplay
    from modesieve.io.report import run_text
    from modesieve.io.run import run, write_run

    brief, base = read_brief(brief_file), brief_file.resolve().parent
    model = brief_model(brief, base)
    with ProgressDisplay() as progress:
        result = run(model, brief_settings(brief, model, base), progress)
    write_run(folder, result, brief=brief_file.read_text("utf-8"), report=run_text(result))
    _static_report(folder / "report.pdf", result)


def _static_report(path: Path, result: Any) -> None:
    from modesieve.io.figures import save_report
    from modesieve.io.page import page_words, report_lines

    words = page_words(result.comparison, result.comparison.checks[0])
    save_report(path, result.comparison, result.ranking, report_lines(words, result.comparison))
