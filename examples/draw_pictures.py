"""Draw the README's pictures again: the sieve chart of both demos, into the folder pictures/ beside this script."""

from pathlib import Path

from modesieve import reduce
from modesieve.examples import cold_plate, mast
from modesieve.io.figures.save import caption_text
from modesieve.io.figures.sieve import sieve_chart
from modesieve.io.figures.style import styled


def main() -> None:
    """The whole script."""
    folder = Path(__file__).parent / "pictures"
    folder.mkdir(exist_ok=True)
    for demo in (mast(), cold_plate()):
        table = reduce.rank(reduce.find_modes(demo.model, demo.band), band=demo.band)
        small = reduce.truncate(table, demo.tolerance, statics=demo.statics, band=demo.band)
        small = reduce.with_guarantee(small)
        check = reduce.compare(demo.model, [small], modes=table.modes, band=demo.band)
        with styled():
            figure = sieve_chart(table, small.kept, demo.band, caption_text(check))
            figure.savefig(folder / f"{demo.name}.png", dpi=140)
        print(folder / f"{demo.name}.png")


if __name__ == "__main__":
    main()
