"""The page in a real browser: what it shows, what ticking does, and that its numbers are Python's numbers."""

from __future__ import annotations

import json
import shutil
import tomllib
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve import io
from modesieve.io.commands import status_of
from modesieve.io.page import Words, page_text
from modesieve.io.page.payload import encode
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.comparison.records import Comparison
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.modal.records import Ranking
from modesieve.reduce.model import (
    Damping,
    Input,
    LossFactor,
    ModalRatio,
    Model,
    Output,
    StateSpace,
    Structure,
    Thermal,
    Unknowns,
)
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import Count, Keep, Statics
from modesieve.reduce.truncation.truncate import truncate

HOSTILE = "tip </script><script>window.hacked=1</script><img src=x onerror='window.hacked=1'><b>"
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
WORDS = Words(
    title=HOSTILE,
    headline="1.8 %",
    sentence=f"12 modes keep the response of {HOSTILE}.",
    about="60 unknowns",
    cautions=("not compared with hardware",),
    facts=(("damping", HOSTILE),),
    commands=("modesieve run brief.toml",),
)


def chain(damping: Damping) -> Structure:
    n = 60
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) * 1e4
    F, C = np.zeros((n, 2)), np.zeros((3, n))
    F[-1, 0] = F[20, 1] = C[0, -1] = C[1, 10] = C[2, 40] = 1.0
    return Structure(
        K=K,
        M=np.eye(n),
        F=F,
        Cq=C,
        damping=damping,
        title=HOSTILE,
        inputs=(Input(name=HOSTILE, unit="N", amplitude=3.0), Input(name="mid", unit="N")),
        outputs=tuple(Output(name=f"y{i}", unit="m") for i in range(3)),
        unknowns=Unknowns(
            node=tuple(map(str, range(n))),
            direction=("x",) * n,
            xyz=np.column_stack([np.zeros(n), np.zeros(n), np.arange(n)]),
        ),
    )


def plate() -> Thermal:
    n = 9
    line = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    K = sp.kron(line, sp.eye_array(n)) + sp.kron(sp.eye_array(n), line)
    F, C = np.zeros((n * n, 1)), np.zeros((2, n * n))
    F[30, 0] = C[0, 30] = C[1, 50] = 1.0
    return Thermal(
        K=K, E=2.0 * np.eye(n * n), F=F, C=C, outputs=(Output(name="a", unit="K"), Output(name="b", unit="K"))
    )


def controller() -> StateSpace:
    rng = np.random.default_rng(4)
    A = -np.diag([0.5, 1.0, 2.0, 2.0, 9.0, 30.0]) + np.diag([0.0, 0.0, 1.0, 0.0, 0.0], 1)
    A[4:6, 4:6] = [[-0.3, 8.0], [-8.0, -0.3]]
    return StateSpace(A=A, B=rng.normal(size=(6, 2)), C=rng.normal(size=(2, 6)))


MODELS: dict[str, tuple[Model, tuple[float, float]]] = {
    "structure": (chain(Damping(base=ModalRatio(ratio=0.01))), (1.0, 60.0)),
    "loss factor": (chain(Damping(base=LossFactor(eta=0.03))), (1.0, 60.0)),
    "thermal": (plate(), (0.01, 2.0)),
    "state space": (controller(), (0.1, 20.0)),
}


def compared(name: str, statics: Statics | None = None) -> tuple[Comparison, Ranking]:
    model, band = MODELS[name]
    ranking = rank(find_modes(model, band), band=band)
    small = truncate(ranking, Count(modes=max(2, len(ranking.modes) // 5)), band=band, statics=statics)
    small = with_guarantee(small)
    return compare(model, [small], modes=ranking.modes, band=band), ranking


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    playwright = pytest.importorskip("playwright.sync_api", reason="the package playwright is not installed")
    if CHROMIUM is None:
        pytest.skip("no chromium on this machine")
    with playwright.sync_playwright() as session:
        chosen = session.chromium.launch(
            executable_path=CHROMIUM, args=["--no-sandbox", "--disable-gpu", "--disable-background-networking"]
        )
        yield chosen
        chosen.close()


@pytest.fixture
def opened(browser: Any, tmp_path: Path) -> Iterator[Any]:
    """Open a page from disk; at the end no console error, no request off the disk, no script from a name."""
    said: list[str] = []
    asked: list[str] = []
    context = browser.new_context(viewport={"width": 1500, "height": 1000}, accept_downloads=True)

    def open_page(comparison: Comparison, ranking: Ranking) -> Any:
        path = tmp_path / "page.html"
        path.write_text(page_text(comparison, ranking, WORDS), encoding="utf-8")
        page = context.new_page()
        page.on("console", lambda message: said.append(message.text))
        page.on("pageerror", lambda error: said.append(str(error)))
        page.on("request", lambda request: asked.append(request.url))
        page.goto(path.as_uri())
        page.wait_for_function("typeof modesieve !== 'undefined'")
        opened_pages.append(page)
        return page

    opened_pages: list[Any] = []
    yield open_page
    hacked = [page.evaluate("window.hacked") for page in opened_pages]
    context.close()
    assert said == []
    assert [url for url in asked if not url.startswith(("file:", "data:", "blob:"))] == []
    assert hacked == [None] * len(hacked)


@pytest.mark.browser
@pytest.mark.parametrize(
    ("name", "statics"),
    [(name, None) for name in MODELS] + [("structure", "none"), ("structure", "vectors"), ("thermal", "vectors")],
)
def test_the_browser_computes_what_python_computes(opened: Any, name: str, statics: Statics | None) -> None:
    """For random kept sets the small model, its error and its guaranteed curve agree with Python to 1e-9."""
    comparison, ranking = compared(name, statics)
    delivered = comparison.checks[0].small
    page = opened(comparison, ranking)
    rng = np.random.default_rng(8)
    modes, model = ranking.modes, comparison.model
    for _ in range(4):
        numbers = sorted(int(n) for n in rng.choice(modes.numbers, size=rng.integers(1, len(modes)), replace=False))
        kept, re, im, sigma, bound = page.evaluate(
            "(numbers) => { modesieve.keep(numbers); const r = modesieve.result();"
            " return [modesieve.kept(), Array.from(r.R.re), Array.from(r.R.im), Array.from(r.sigma),"
            " r.guaranteed && Array.from(r.guaranteed.sigma)]; }",
            numbers,
        )
        small = truncate(
            ranking,
            Keep(numbers=tuple(numbers)),
            band=comparison.band,
            full=comparison.full,
            statics=delivered.statics,
            levels=delivered.levels or 2,
        )
        assert sorted(kept) == sorted(small.kept)
        R = small.response(comparison.full.omega)
        peak = np.abs(R).max()
        np.testing.assert_allclose((np.array(re) + 1j * np.array(im)).reshape(R.shape), R, atol=1e-9 * peak)
        error = np.linalg.norm(model.weigh(comparison.full.G - R), ord=2, axis=(1, 2))
        np.testing.assert_allclose(sigma, error, atol=1e-9 * comparison.reference_peak)
        if delivered.hub is not None and delivered.guarantee is not None and delivered.guarantee.holds:
            omega = comparison.full.omega
            gap = np.linalg.norm(model.weigh(delivered.hub.response(omega) - R), ord=2, axis=(1, 2))
            expected = gap + delivered.hub.error(omega)
            np.testing.assert_allclose(bound, expected, atol=1e-9 * comparison.reference_peak)


@pytest.mark.browser
def test_the_step_response_is_python_s(opened: Any) -> None:
    """The delivered step response in the browser equals exact propagation in Python."""
    for name in ("structure", "thermal", "state space"):
        comparison, ranking = compared(name)
        assert comparison.step is not None
        page = opened(comparison, ranking)
        rows = page.evaluate(
            "() => { const trial = Trial.create(modesieve.data), t = Numbers.array(modesieve.data.step.t);"
            " return Array.from(trial.step(1, 0, t)); }"
        )
        expected = comparison.step.small[0][:, 1, 0]
        np.testing.assert_allclose(rows, expected, atol=1e-9 * np.abs(expected).max())


@pytest.mark.browser
def test_ticking_moving_and_saving(opened: Any, tmp_path: Path) -> None:
    """A tick changes the banner from delivered to trying, arrow keys move the count, the keep list is TOML."""
    comparison, ranking = compared("structure")
    page = opened(comparison, ranking)
    assert page.inner_text("#banner-state") == "Delivered"
    page.click("#modes-table tbody tr[data-number='2'] input")
    assert page.inner_text("#banner-state") == "Trying"
    assert 2 not in page.evaluate("modesieve.kept()")
    page.click("#back")
    assert page.inner_text("#banner-state") == "Delivered"
    before = len(page.evaluate("modesieve.kept()"))
    page.focus("#sieve-line")
    page.keyboard.press("ArrowRight")
    assert len(page.evaluate("modesieve.kept()")) == before + 1
    with page.expect_download() as download:
        page.click("#save")
    saved = tomllib.loads(Path(download.value.path()).read_text("utf-8"))
    assert saved["keep"] == sorted(page.evaluate("modesieve.kept()"))
    assert saved["model"] == ranking.modes.origin.fingerprint


@pytest.mark.browser
def test_the_line_is_dragged_and_the_list_is_cut_by(opened: Any, tmp_path: Path) -> None:
    """Dragging the sieve line up drops modes; the saved keep list makes the same small model on the command line."""
    comparison, ranking = compared("structure")
    page = opened(comparison, ranking)
    before = len(page.evaluate("modesieve.kept()"))
    box = page.locator("#sieve-handle").bounding_box()
    x, y = box["x"] + box["width"] / 3, box["y"] + box["height"] / 2
    page.mouse.move(x, y)
    page.mouse.down()
    page.mouse.move(x, y - 60, steps=6)
    page.mouse.up()
    kept = sorted(page.evaluate("modesieve.kept()"))
    assert 0 < len(kept) < before
    with page.expect_download() as download:
        page.click("#save")
    model, small = tmp_path / "model.h5", tmp_path / "small.h5"
    io.save(model, comparison.model)
    low, high = (f"{w}rad/s" for w in comparison.band)
    keep = tmp_path / "keep.toml"
    keep.write_bytes(Path(download.value.path()).read_bytes())
    arguments = ["truncate", str(model), "--band", low, high, "--keep-list", str(keep), "-o", str(small)]
    assert status_of(arguments) == 0
    assert list(io.load(small).kept) == kept  # type: ignore[union-attr]


@pytest.mark.browser
def test_a_pair_is_chosen_by_a_click_and_the_worst_stands_out(opened: Any) -> None:
    """Clicking a cell of the pair table shows that pair; a planted bad pair is marked."""
    comparison, ranking = compared("structure")
    G = np.array(comparison.full.G)
    G[:, 2, 1] *= 1.5
    planted = replace(comparison, full=replace(comparison.full, G=G))
    page = opened(planted, ranking)
    bad = page.locator("#pairs-table td.bad button")
    assert bad.count() == 1
    assert bad.get_attribute("data-pair") == "5"
    bad.click()
    assert page.inner_text("#response-title") == "Response: y2 from mid"
    assert page.locator("#pairs-table button[aria-pressed='true']").get_attribute("data-pair") == "5"


@pytest.mark.browser
def test_names_are_shown_as_text(opened: Any) -> None:
    """Markup in a channel's name or in the title is shown, not obeyed."""
    comparison, ranking = compared("structure")
    page = opened(comparison, ranking)
    assert HOSTILE in page.inner_text("#pairs-table thead")
    assert HOSTILE in page.text_content("#sentence")
    assert page.title().startswith(HOSTILE)


@pytest.mark.browser
def test_a_tick_takes_less_than_a_twentieth_of_a_second(opened: Any) -> None:
    """With 300 modes and 800 frequencies the arithmetic behind one tick of one pair stays far below a second."""
    comparison, ranking = compared("structure")
    page = opened(comparison, ranking)
    spent = page.evaluate("() => { const t = performance.now(); modesieve.toggle(5); return performance.now() - t; }")
    assert spent < 2000  # a loose sanity bound: speed is measured by the benchmark, not here


def test_the_page_is_one_file_and_holds_no_live_markup_from_names() -> None:
    """No address is loaded, and no name reaches the page as markup."""
    comparison, ranking = compared("structure")
    text = page_text(comparison, ranking, WORDS)
    assert HOSTILE not in text
    assert "window.hacked=1</script>" not in text
    assert len(text) < 12_000_000


def test_data_is_safe_inside_a_script_element() -> None:
    """The JSON text holds no character that could end its element, and reads back to the same value."""
    value = {"name": HOSTILE + "\u2028&amp;"}
    text = encode(value)
    assert not set("<>&\u2028") & set(text)
    assert json.loads(text) == value
