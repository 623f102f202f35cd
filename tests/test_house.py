"""The rules of the house: who may import whom, and that the numerical part touches nothing outside."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
#: From left to right: a stage imports only itself and what stands before it.
STAGES = ("linalg", "response", "modal", "truncation", "comparison")
#: Modules of `reduce` that stand before all stages.
GROUND = {"arrays", "errors", "model", "progress", "report", "fingerprint"}
#: What opens, prints, draws or parses a command line.
OUTSIDE = {
    "h5py", "matplotlib", "plotly", "jinja2", "click", "rich", "pydantic", "pint", "tomllib", "json", "pathlib",
    "binsparse", "io", "shutil", "tempfile", "subprocess", "logging", "csv", "zipfile", "socket", "urllib",
}  # fmt: skip
#: The one look outside: how much memory is free, from the kernel, to foresee running out of it.
EXCEPTED = {"reduce/linalg/memory.py": {"pathlib"}}
ALLOWED_TOP = {
    "README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE", "pyproject.toml", ".gitignore", ".ci", "reduce", "io",
    "examples", "tests",
}  # fmt: skip


def sources(folder):
    return sorted(path for path in (ROOT / folder).rglob("*.py"))


def imports(path):
    """Absolute names of everything that a module imports, wherever in the module."""
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            yield node.module
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def stage_of(name):
    """Index of the stage in a module name such as "modesieve.reduce.modal.rank", -1 for the ground, None outside."""
    parts = name.split(".")
    if parts[:2] != ["modesieve", "reduce"] or len(parts) < 3:
        return None
    return STAGES.index(parts[2]) if parts[2] in STAGES else (-1 if parts[2] in GROUND else None)


@pytest.mark.parametrize("path", sources("reduce"), ids=lambda path: str(path.relative_to(ROOT)))
def test_reduce_imports_nothing_of_the_edge(path):
    """The numerical part never imports io or examples."""
    wrong = [name for name in imports(path) if name.startswith(("modesieve.io", "modesieve.examples"))]
    assert not wrong


@pytest.mark.parametrize("path", sources("reduce"), ids=lambda path: str(path.relative_to(ROOT)))
def test_reduce_touches_nothing_outside(path):
    """The numerical part opens no file, prints nothing, draws nothing and imports no library that does."""
    tree = ast.parse(path.read_text("utf-8"))
    called = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert not called & {"open", "print", "input", "exec", "eval"}
    tops = {name.split(".")[0] for name in imports(path)}
    assert not (tops & OUTSIDE) - EXCEPTED.get(path.relative_to(ROOT).as_posix(), set())


@pytest.mark.parametrize("path", sources("reduce"), ids=lambda path: str(path.relative_to(ROOT)))
def test_stages_import_only_to_the_left(path):
    """linalg <- response <- modal <- truncation <- comparison, and the ground under all of them."""
    relative = path.relative_to(ROOT / "reduce")
    if len(relative.parts) == 1:
        if relative.stem not in GROUND:
            return  # the table of contents and the inspection look over all stages
        own = -1
    else:
        own = STAGES.index(relative.parts[0])
    wrong = [name for name in imports(path) if (stage := stage_of(name)) is not None and stage > own]
    assert not wrong


@pytest.mark.parametrize("path", sources("reduce"), ids=lambda path: str(path.relative_to(ROOT)))
def test_only_the_edge_sees_the_inspection(path):
    """No stage but the modal one (whose door it guards) leans on the inspection of models."""
    relative = path.relative_to(ROOT / "reduce")
    if relative.parts[0] in ("modal", "inspection.py", "__init__.py"):
        return
    assert not [name for name in imports(path) if name.startswith("modesieve.reduce.inspection")]


@pytest.mark.parametrize("folder", ["reduce", "io", "examples"])
def test_modules_stay_short(folder):
    """A module past 400 lines is asking to be two."""
    long = {str(p.relative_to(ROOT)): n for p in sources(folder) if (n := len(p.read_text("utf-8").splitlines())) > 420}
    assert not long


@pytest.mark.parametrize("folder", ["reduce", "io", "examples"])
def test_imports_are_absolute_under_one_name(folder):
    """Modules import each other as modesieve..., never by the folder's own name or relatively."""
    for path in sources(folder):
        wrong = [name for name in imports(path) if name.split(".")[0] in ("reduce", "examples")]
        assert not wrong, path


def test_the_top_level_holds_what_is_known():
    """Nothing is committed at the top level beside the few known names."""
    import subprocess

    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    if listed.returncode:
        pytest.skip("not a git checkout")
    tops = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert tops <= ALLOWED_TOP


def test_packages_are_listed():
    """Every folder with Python modules is a package that an ordinary install brings along."""
    import tomllib

    stated = set(tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["tool"]["setuptools"]["packages"])
    found = {
        "modesieve." + ".".join(path.parent.relative_to(ROOT).parts)
        for folder in ("reduce", "io", "examples")
        for path in sources(folder)
    }
    assert found == stated
