"""A whole run as a function of model and settings, and the folder it is written into."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from modesieve.io.atomic import output_folder, write_text
from modesieve.io.files import save
from modesieve.io.json_output import dumps, run_object
from modesieve.io.keep_list import write_keep_list
from modesieve.io.settings import Settings
from modesieve.io.verdict import Verdict, verdict_of
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.comparison.records import Comparison
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.model import Model
from modesieve.reduce.progress import Listener
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import ReducedModel
from modesieve.reduce.truncation.truncate import truncate


@dataclass(frozen=True, kw_only=True, eq=False)
class Result:
    """Everything a run made, stage by stage."""

    settings: Settings
    modes: Modes
    ranking: Ranking
    reduced: ReducedModel
    comparison: Comparison

    @property
    def verdict(self) -> Verdict:
        """What it amounts to, in words."""
        return verdict_of(self.comparison, self.comparison.checks[0])


@dataclass(frozen=True, kw_only=True)
class Written:
    """One file of a run's folder and what it is for."""

    path: Path
    purpose: str


def run(model: Model, settings: Settings, progress: Listener = None) -> Result:
    """Modes, ranking, small model and comparison of ``model`` as ``settings`` say.

    Raises ModelError, ChoiceError or SolveError; nothing is written.
    """
    _ported(model)
    modes = find_modes(model, settings.band, count=settings.count, solver=settings.solver, progress=progress)
    ranking = rank(modes, by=settings.by, band=settings.band)
    small = truncate(
        ranking,
        settings.choice,
        statics=settings.statics,
        levels=settings.levels,
        band=settings.band,
        progress=progress,
    )
    small = with_guarantee(small, progress)
    comparison = compare(
        model,
        [small],
        modes=modes,
        band=settings.band,
        times=settings.times,
        sweep=settings.sweep,
        progress=progress,
    )
    return Result(settings=settings, modes=modes, ranking=ranking, reduced=small, comparison=comparison)


def _ported(model: Model) -> None:
    if 0 in (model.m, model.p):
        raise ChoiceError(
            "a run needs inputs and outputs",
            expected="at least one of each",
            got=f"{model.m} inputs and {model.p} outputs",
            where=model.source,
            remedy="add load and output matrices to the model file; `modesieve modes` works without them",
        )


# ---- the folder ------------------------------------------------------------------------------------------------------

#: What `write_run` leaves in its folder (the README lists the same).
PAGE, SMALL, MODES, KEEP, SUMMARY, REPORT, BRIEF, FIGURES = (
    "page.html",
    "small.h5",
    "modes.h5",
    "keep.toml",
    "summary.json",
    "report.txt",
    "brief.toml",
    "figures",
)


def write_run(folder: Path, result: Result, *, brief: str = "", report: str = "") -> list[Written]:
    """Write a run into ``folder``, every file whole or not at all, and say what each is for.

    brief: text of the brief, to be kept beside its results; report: the terminal's report in plain text. Raises
    FileError where the folder cannot be written to.
    """
    output_folder(folder)
    out: list[Written] = []

    def keep(name: str, purpose: str, write: Callable[[Path], None]) -> None:
        write(folder / name)
        out.append(Written(path=folder / name, purpose=purpose))

    keep(SMALL, "the small model, with the table of all modes and how wrong it is", lambda p: save(p, result.reduced))
    keep(MODES, "all computed modes with their shapes and certificate", lambda p: save(p, result.modes))
    keep(KEEP, "the kept mode numbers, to edit and feed back", lambda p: write_keep_list(p, result.reduced))
    keep(SUMMARY, "the numbers of this run for a script", lambda p: write_text(p, dumps(run_object(result))))
    if report:
        keep(REPORT, "the report as printed", lambda p: write_text(p, report))
    if brief:
        keep(BRIEF, "the brief of this run", lambda p: write_text(p, brief))
    keep(PAGE, "the page: decide, show and check by looking", lambda p: write_page(p, result, folder / SMALL))
    return [*out, *write_figures(folder, result.comparison, result.ranking, result.settings.figures)]


def write_page(path: Path, result: Result, small_file: Path) -> None:
    """Write the page of a run, tied to its small model's file."""
    from modesieve.io.page import page_text, page_words, reproduce
    from modesieve.io.review import file_seal

    check = result.comparison.checks[0]
    source = result.modes.origin.source
    commands = reproduce(source or "model.h5", small_file.name, result.comparison, check, KEEP)
    words = page_words(result.comparison, check, commands=commands)
    write_text(path, page_text(result.comparison, result.ranking, words, file_seal=file_seal(small_file)[1]))


def write_figures(folder: Path, comparison: Comparison, ranking: Ranking, formats: tuple[str, ...]) -> list[Written]:
    """Write the figures of a comparison into ``folder/figures``; none without formats."""
    if not formats:
        return []
    from modesieve.io.figures import save_figures  # matplotlib takes half a second to import

    paths = save_figures(comparison, ranking, output_folder(folder / FIGURES), formats=formats)
    return [Written(path=path, purpose=path.stem.replace("-", " ").replace("_", " ")) for path in paths]
