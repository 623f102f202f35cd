"""Printed records are short reports, and tables in a notebook."""

from __future__ import annotations

from dataclasses import replace

from modesieve.examples import chain
from modesieve.reduce import Count, compare, find_modes, rank, truncate, with_guarantee
from modesieve.reduce.model import Damping, ModalRatio

BAND = (0.01, 0.9)


def test_every_record_prints_as_a_report_and_shows_as_a_table() -> None:
    """Modes, ranking, reduced model, guarantee and comparison: a few aligned lines, markup in names escaped."""
    model = replace(chain(30, damping=Damping(base=ModalRatio(ratio=0.02))), title="<b>chain</b>")
    table = rank(find_modes(model, BAND), band=BAND)
    small = with_guarantee(truncate(table, Count(modes=6), band=BAND))
    check = compare(model, [small], modes=table.modes, band=BAND)
    for record in (table.modes, table, small, small.guarantee, check):
        text, html = repr(record), record._repr_html_()  # type: ignore[union-attr]
        assert 2 <= len(text.splitlines()) <= 40
        assert max(map(len, text.splitlines())) <= 200
        assert html.startswith("<table>")
        assert "<b>" not in html


def test_the_printed_modes() -> None:
    """The whole text, as a reader sees it."""
    expected = """\
3 modes of fixed-free chain of 3 masses (structure, 3 unknowns)
  complete  every mode is known
  solver    LAPACK, dense
mode      Hz  time constant s  damping %  cluster  always kept
1     0.0708              112          2
2      0.198             40.1          2
3      0.287             27.7          2"""
    modes = find_modes(chain(3, damping=Damping(base=ModalRatio(ratio=0.02))))
    shown = [line for line in repr(modes).splitlines() if not line.startswith("  residual")]
    assert shown[0] == expected.splitlines()[0]
    assert shown[1] == expected.splitlines()[1]
    assert shown[3:] == expected.splitlines()[3:]
