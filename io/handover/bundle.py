"""The hand-over: one zip with the small model in every form, its page, report and brief, and a manifest with hashes."""

from __future__ import annotations

import hashlib
import json
import tempfile
import zipfile
from collections.abc import Iterator
from pathlib import Path

from modesieve.io.atomic import replacing
from modesieve.io.files import load
from modesieve.io.handover.containers import write_form
from modesieve.io.handover.forms import second_order_form, state_space_form
from modesieve.reduce.errors import ChoiceError, FileError, ModesieveError
from modesieve.reduce.response.small import SecondOrderModal
from modesieve.reduce.truncation.records import ReducedModel
from modesieve.reduce.truncation.weight import uncertainty_weight

MANIFEST, README, SMALL = "manifest.json", "README.txt", "small.h5"
#: A member of a hand-over is never larger than this when it is read back.
LARGEST = 2**30
#: What is taken from the folder of a run, where it is there.
FROM_RUN = (SMALL, "page.html", "report.txt", "report.pdf", "brief.toml", "keep.toml", "summary.json")


def write_bundle(folder: Path, path: Path) -> list[str]:
    """Bundle the results of a run in ``folder``; the names written. Raises FileError where the folder holds no run."""
    if not (folder / SMALL).is_file():
        raise FileError(
            "this folder holds no run",
            expected=f"a folder that `modesieve run` wrote, with {SMALL}",
            got="none",
            where=str(folder),
        )
    small = load(folder / SMALL)
    if not isinstance(small, ReducedModel):
        raise FileError("this is no reduced model", expected="a reduced model", where=str(folder / SMALL))
    with tempfile.TemporaryDirectory() as scratch:
        members = {name: folder / name for name in FROM_RUN if (folder / name).is_file()}
        members |= {file.name: file for file in _forms(small, Path(scratch))}
        return _write_zip(path, members, _readme(small))


def _forms(small: ReducedModel, scratch: Path) -> Iterator[Path]:
    """State space in every container that one file holds, and second order where there is one."""
    for ending, container in ((".npz", "npz"), (".json", "json")):
        yield from write_form(scratch / f"state-space{ending}", state_space_form(small), container)  # type: ignore[arg-type]
    if isinstance(small.system, SecondOrderModal):
        yield from write_form(scratch / "second-order.npz", second_order_form(small), "npz")
    weight = weight_text(small)
    if weight:
        (scratch / "weight.json").write_text(weight, encoding="utf-8")
        yield scratch / "weight.json"


def weight_text(small: ReducedModel) -> str:
    """The uncertainty weight that covers the guaranteed error on the whole axis, as JSON; "" where there is none."""
    if small.hub is None or small.guarantee is None or not small.guarantee.holds:
        return ""
    try:
        weight = uncertainty_weight(small.hub, small.system)
    except ModesieveError:
        return ""
    pairs = {
        name: [[v.real, v.imag] for v in values] for name, values in (("zeros", weight.zeros), ("poles", weight.poles))
    }
    about = {
        "covers": "largest singular value of the additive error, channels weighted by amplitude and resolution",
        "gain": weight.gain,
        "median_over_cover_db": weight.median_db,
        "checked_to_rad_per_s": weight.certain_to,
        "notes": list(weight.notes),
    }
    return json.dumps(about | pairs, indent=1, allow_nan=False) + "\n"


def _write_zip(path: Path, members: dict[str, Path], readme: str) -> list[str]:
    contents = {name: file.read_bytes() for name, file in members.items()} | {README: readme.encode()}
    hashes = {name: hashlib.sha256(data).hexdigest() for name, data in sorted(contents.items())}
    manifest = {"format": "modesieve hand-over bundle", "version": 1, "sha256": hashes}
    with replacing(path) as temporary, zipfile.ZipFile(temporary, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr(MANIFEST, json.dumps(manifest, indent=1) + "\n")
        for name, data in contents.items():
            archive.writestr(name, data)
    return [MANIFEST, *contents]


def _readme(small: ReducedModel) -> str:
    origin = small.modes.origin
    lines = [
        f"{origin.title or 'Reduced model'}: {small.states} states for {origin.n} unknowns ({origin.kind}).",
        "",
        f"{SMALL} is the small model; with modesieve installed, `modesieve review THIS.zip` checks it.",
        "state-space.npz and .json hold x' = A x + B u, y = C x + D u (no program needed to read them).",
        "page.html opens in a browser, without a network. manifest.json holds the SHA-256 of every file.",
        "",
        f"Error: {small.error}." if small.error is not None else "Error: not stated.",
        "Held against the full model, not against hardware.",
        "Where people can be hurt, local codes and licensed practice decide.",
    ]
    return "\n".join(lines) + "\n"


def open_bundle(path: Path, into: Path) -> tuple[Path, Path | None]:
    """Unpack a bundle's small model and page into ``into`` after checking every hash; the two paths (page or None).

    Only plain names that the manifest lists are written. Raises FileError for anything else.
    """
    try:
        with zipfile.ZipFile(path) as archive:
            if any(entry.file_size > LARGEST for entry in archive.infolist()):
                raise ChoiceError("a member is larger than a hand-over can be")
            hashes = json.loads(archive.read(MANIFEST))["sha256"]
            names = set(archive.namelist()) - {MANIFEST}
            contents = {name: archive.read(name) for name in names}
    except (OSError, KeyError, ValueError, TypeError, zipfile.BadZipFile, NotImplementedError, RuntimeError) as error:
        raise FileError(
            "this is no hand-over bundle",
            expected="a zip that `modesieve handover` wrote",
            got=str(error),
            where=str(path),
        ) from error
    wrong = [n for n in names | set(hashes) if hashlib.sha256(contents.get(n, b"")).hexdigest() != hashes.get(n)]
    if wrong or SMALL not in contents:
        raise FileError(
            "the bundle does not match its manifest",
            expected="every file with its hash",
            got=", ".join(sorted(map(repr, wrong)))[:300] or f"no {SMALL}",
            where=str(path),
        )
    for name in (SMALL, "page.html"):
        if name in contents:
            (into / name).write_bytes(contents[name])
    return into / SMALL, (into / "page.html") if "page.html" in contents else None
