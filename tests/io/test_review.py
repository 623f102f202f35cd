"""The review: an honest file passes, one altered digit or a foreign page does not."""

from __future__ import annotations

import shutil
from pathlib import Path

import h5py
import pytest

from modesieve import io
from modesieve.examples import chain, ladder
from modesieve.io.page import Words, page_text
from modesieve.io.review import Finding, file_seal, review
from modesieve.io.seal import write_seal
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.errors import FileError
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.model import Damping, LossFactor, ModalRatio, Model, Rayleigh
from modesieve.reduce.truncation.records import Count, ReducedModel
from modesieve.reduce.truncation.truncate import truncate

WORDS = Words(title="t", headline="1 %", sentence="s", about="a")
MODELS: dict[str, tuple[Model, tuple[float, float]]] = {
    "modal": (chain(30, damping=Damping(base=ModalRatio(ratio=0.02))), (0.01, 0.9)),
    "Rayleigh": (chain(30, damping=Damping(base=Rayleigh(alpha=0.01, beta=0.02))), (0.01, 0.9)),
    "loss factor": (chain(30, damping=Damping(base=LossFactor(eta=0.03))), (0.01, 0.9)),
    "thermal": (ladder(20), (0.001, 0.5)),
}


def cut(name: str) -> tuple[Model, ReducedModel]:
    model, band = MODELS[name]
    return model, truncate(rank(find_modes(model, band), band=band), Count(modes=6), band=band)


def found(findings: tuple[Finding, ...], what: str) -> Finding:
    return next(f for f in findings if f.what == what)


@pytest.mark.parametrize("name", list(MODELS))
def test_an_honest_file_passes_with_its_page_and_full_model(tmp_path: Path, name: str) -> None:
    """Everything that can be recomputed agrees, and nothing fails."""
    model, small = cut(name)
    io.save(tmp_path / "small.h5", small)
    io.save(tmp_path / "full.h5", model)
    comparison = compare(model, [small], modes=small.modes, band=small.band)
    assert small.ranking is not None
    seal = file_seal(tmp_path / "small.h5")[1]
    page = page_text(comparison, small.ranking, WORDS, file_seal=seal)
    (tmp_path / "page.html").write_text(page, encoding="utf-8")
    result = review(tmp_path / "small.h5", page=tmp_path / "page.html", full=tmp_path / "full.h5")
    assert [f for f in result.findings if f.ok is False] == []
    assert result.passed
    for what in (
        "small model cut again from the table",
        "stated error",
        "page and file",
        "stored samples solved again",
    ):
        assert found(result.findings, what).ok, what


@pytest.mark.parametrize(
    ("place", "caught_by"),
    [
        ("system/x", "small model cut again from the table"),
        ("model/load", "seal of the file"),
        ("samples/G", "stated error"),
        ("certificate@found", "count certificate"),
    ],
)
def test_altered_numbers_are_seen_even_if_the_seal_is_made_anew(tmp_path: Path, place: str, caught_by: str) -> None:
    """A changed number breaks the seal; sealed again, the recomputation still finds it where that is possible."""
    _, small = cut("modal")
    path = tmp_path / "small.h5"
    io.save(path, small)
    with h5py.File(path, "r+") as file:
        name, _, attribute = place.partition("@")
        if attribute:
            file[name].attrs[attribute] = file[name].attrs[attribute] + 1
        else:
            file[name][...] = file[name][()] * 1.001
    result = review(path)
    assert found(result.findings, "seal of the file").ok is False
    assert not result.passed
    with h5py.File(path, "r+") as file:
        write_seal(file)
    again = review(path)
    assert found(again.findings, "seal of the file").ok
    if caught_by != "seal of the file":
        assert found(again.findings, caught_by).ok is False


def test_a_page_of_another_run_or_with_an_altered_digit_is_seen(tmp_path: Path) -> None:
    """Page and file are tied by the file's seal, and the page's own data by its hash."""
    model, small = cut("modal")
    _, other = cut("Rayleigh")
    io.save(tmp_path / "small.h5", small)
    io.save(tmp_path / "other.h5", other)
    comparison = compare(model, [small], modes=small.modes, band=small.band)
    assert small.ranking is not None
    text = page_text(comparison, small.ranking, WORDS, file_seal=file_seal(tmp_path / "small.h5")[1])
    page = tmp_path / "page.html"
    page.write_text(text, encoding="utf-8")
    foreign = review(tmp_path / "other.h5", page=page)
    assert found(foreign.findings, "page and file").ok is False
    page.write_text(text.replace('"threshold":', '"threshold":1', 1), encoding="utf-8")
    altered = review(tmp_path / "small.h5", page=page)
    assert found(altered.findings, "seal of the page").ok is False
    page.write_text("<html></html>", encoding="utf-8")
    assert found(review(tmp_path / "small.h5", page=page).findings, "page").ok is False


def test_another_full_model_is_told(tmp_path: Path) -> None:
    """A full model with another hash is not the one the small model was cut from."""
    _, small = cut("modal")
    io.save(tmp_path / "small.h5", small)
    io.save(tmp_path / "full.h5", chain(31))
    result = review(tmp_path / "small.h5", full=tmp_path / "full.h5")
    assert found(result.findings, "full model").ok is False


def test_what_is_no_reduced_model_is_refused(tmp_path: Path) -> None:
    """A full model's file is not reviewed; a broken file is told as such."""
    io.save(tmp_path / "full.h5", chain(5))
    with pytest.raises(FileError, match="no reduced model"):
        review(tmp_path / "full.h5")
    shutil.copy(tmp_path / "full.h5", tmp_path / "short.h5")
    with (tmp_path / "short.h5").open("r+b") as file:
        file.truncate(700)
    with pytest.raises(FileError):
        review(tmp_path / "short.h5")
