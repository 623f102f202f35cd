"""What the README promises: its commands and code run as printed, its lists are true."""

import re
import shlex
from pathlib import Path

import pytest

from modesieve.io.commands import COMMANDS, status_of

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text("utf-8")


def blocks(language):
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)


def command_lines():
    return [line for block in blocks("sh") for line in block.splitlines() if line]


def test_the_two_commands():
    """Each of the two commands does all the set-up, word for word as the integration server reads them."""
    lines = re.findall(r"^    (python3 -m venv .*)$", README, re.MULTILINE)
    setup = "python3 -m venv .venv && .venv/bin/pip install -q -e "
    assert lines == [
        setup + "'.[fast]' && .venv/bin/modesieve demo",
        setup + "'.[fast,test]' && .venv/bin/pytest",
    ]


def test_the_integration_server_reads_the_second_command():
    """The integration script takes its command from the README and knows no other."""
    script = (ROOT / ".ci" / "run").read_text("utf-8")
    assert "README.md" in script
    assert "pip install -q -e" not in script


def test_python_blocks_and_commands_run(tmp_path, monkeypatch, capsys):
    """The writer, the tour's commands and the example of the API run, one after the other, in one folder."""
    monkeypatch.chdir(tmp_path)
    api, writer = blocks("python")
    exec(compile(writer, "README.md, writer", "exec"), {})
    for line in command_lines():
        words, _, target = line.partition(" > ")
        status = status_of(shlex.split(words)[1:])
        captured = capsys.readouterr()
        assert status == 0, (line, captured.err)
        if target:
            Path(target).write_text(captured.out)
    exec(compile(api, "README.md, API", "exec"), {})
    assert "Comparison with chain" in capsys.readouterr().out
    written = set(re.findall(r"^\| `([\w./]+)` \|", README.partition("## What a run writes")[2], re.MULTILINE))
    found = {path.name + "/" * path.is_dir() for path in (tmp_path / "job-results").iterdir()}
    assert found == written


def test_the_writer_takes_ten_lines():
    """From opening the file to its last line the writer is ten lines at most."""
    writer = blocks("python")[1]
    assert len(writer.partition("with h5py.File")[2].splitlines()) <= 10


def test_every_command_named_exists():
    """The README names no command that is not there."""
    named = {line.split()[1] for line in command_lines()} | set(re.findall(r"`modesieve (\w+)", README))
    assert named <= set(COMMANDS)


def test_every_measure_is_named():
    """Every measure that ranks is in the README."""
    from modesieve.reduce.modal.measures import MEASURES

    named = README.replace("`effective-mass-x`, `-y`, `-z`", "effective-mass-x effective-mass-y effective-mass-z")
    assert [name for name in MEASURES if name not in named] == []


@pytest.mark.parametrize("target", sorted(set(re.findall(r"\]\((?!https?:)([^)#]+)\)", README))))
def test_links_lead_somewhere(target):
    """Pictures and files that the README shows or names are there."""
    assert (ROOT / target).is_file()
