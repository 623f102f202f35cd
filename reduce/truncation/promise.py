"""A small model together with its hub and its guarantee."""

from __future__ import annotations

from dataclasses import replace

from modesieve.reduce.errors import ModesieveError
from modesieve.reduce.progress import Listener
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.certify import certify
from modesieve.reduce.truncation.records import ReducedModel


def with_guarantee(small: ReducedModel, progress: Listener = None) -> ReducedModel:
    """``small`` with the hub of its modes and the guarantee over its band; what forbids one is the guarantee's reason.

    Without a band, or without the full model at hand, the small model comes back as it is.
    """
    if small.band is None or small.modes.model is None:
        return small
    try:
        hub = build_hub(small.modes, max(2, small.levels)) if small.hub is None else small.hub
    except ModesieveError:
        hub = None
    guarantee = certify(
        small.modes, small.system, small.band, hub=hub, kept=small.kept, full=small.samples, progress=progress
    )
    units = [c.unit for c in small.modes.origin.outputs]
    absolute = tuple(replace(figure, unit=unit) for figure, unit in zip(guarantee.absolute, units, strict=False))
    return replace(small, hub=hub, guarantee=replace(guarantee, absolute=absolute))
