"""From a structure to a small model with a guaranteed error, in Python."""

from modesieve import io, reduce
from modesieve.examples import mast
from modesieve.reduce.truncation.records import Tolerance


def main() -> None:
    """The whole script."""
    demo = mast()
    modes = reduce.find_modes(demo.model, demo.band)
    table = reduce.rank(modes, by="band-share", band=demo.band)
    small = reduce.with_guarantee(reduce.truncate(table, Tolerance(value=0.05), band=demo.band))
    print(small)
    print(small.guarantee)
    io.save("mast-small.h5", small)


if __name__ == "__main__":
    main()
