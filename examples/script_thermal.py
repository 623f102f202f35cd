"""A thermal surrogate: reduce the cold plate, run it through a duty cycle, and write it as Python source."""

from pathlib import Path

import numpy as np

from modesieve import reduce
from modesieve.examples import cold_plate
from modesieve.io.handover import Surrogate, source
from modesieve.reduce.response.discrete import discretise
from modesieve.reduce.response.simulate import simulate


def main() -> None:
    """The whole script."""
    demo = cold_plate()
    table = reduce.rank(reduce.find_modes(demo.model, demo.band), band=demo.band)
    small = reduce.truncate(table, demo.tolerance, statics="vectors", band=demo.band)
    print(small)

    t = np.arange(0.0, 1800.0, 5.0)
    duty = np.where((t % 600 < 300)[:, None], demo.model.amplitudes, 0.0)
    history = simulate(small.system, t, duty)
    for output, hottest in zip(demo.model.outputs, history.y.max(axis=0), strict=True):
        print(f"{output.name}: at most {hottest:.2f} K above the sea")

    step = Surrogate(system=small.system, discrete=discretise(small.system, 1.0), interface=small.modes.origin)
    Path("cold_plate_surrogate.py").write_text(source(step, "python"), encoding="utf-8")


if __name__ == "__main__":
    main()
