"""The examples of README.md and its like are run and must give what they show.

A fenced block ``pycon`` is a Python session.  In a block ``console`` each line that begins with
``$ `` is a command, and the lines below it are what it prints; ``...`` stands for anything.  A
block ``sh`` is only shown: what it does needs a network or hours.
"""

import doctest
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
DOCUMENTS = [
    path
    for path in (ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted(ROOT.glob("docs/*.md")))
    if path.is_file()
]
FLAGS = doctest.ELLIPSIS | doctest.NORMALIZE_WHITESPACE
BLOCK = re.compile(r"^```(\w+)\n(.*?)^```$", re.M | re.S)


def blocks(language):
    """A parameter (text of the block) for each block of all documents."""
    result = []
    for path in DOCUMENTS:
        text = path.read_text(encoding="utf-8")
        for found in BLOCK.finditer(text):
            if found[1] == language:
                line = text.count("\n", 0, found.start()) + 1
                result.append(pytest.param(found[2], id=f"{path.name}:{line}"))
    return result


def commands(block):
    """(command, what it prints) pairs of a console block; a command may end in a backslash."""
    before, *parts = re.split(r"^\$ ", block, flags=re.M)
    assert before == "" and parts, "a console block begins with a command"
    for part in parts:
        found = re.match(r"(?:.*\\\n)*.*", part)
        yield found[0], part[found.end() :].lstrip("\n")


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """An empty folder in which the examples find the data, and write what they write."""
    for name in ("data_synth", "models"):
        (tmp_path / name).symlink_to(ROOT / name)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.parametrize("block", blocks("pycon"))
def test_python_session(block, folder):
    example = doctest.DocTestParser().get_doctest(block, {}, "session", None, 0)
    told = []
    doctest.DocTestRunner(optionflags=FLAGS).run(example, out=told.append)
    assert not told, "".join(told)


@pytest.mark.parametrize("block", blocks("console"))
def test_commands(block, folder):
    path = f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"
    for command, shown in commands(block):
        done = subprocess.run(
            ["sh", "-c", command],
            cwd=folder,
            env={**os.environ, "PATH": path},
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        checker = doctest.OutputChecker()
        if not checker.check_output(shown, done.stdout, FLAGS):
            example = doctest.Example(command, shown)
            pytest.fail(checker.output_difference(example, done.stdout, FLAGS))


def test_commands_of_a_block_are_found():
    # by hand
    block = "$ a \\\n  b\nout\n$ c | d\n$ e\nmore\nlines\n"
    assert list(commands(block)) == [
        ("a \\\n  b", "out\n"),
        ("c | d", ""),
        ("e", "more\nlines\n"),
    ]


def test_every_fence_is_of_a_known_kind():
    known = {"pycon", "console", "sh", "json", "toml", "text", "csv"}
    for path in DOCUMENTS:
        fences = re.findall(r"^```(.*)$", path.read_text(encoding="utf-8"), flags=re.M)
        assert len(fences) % 2 == 0
        assert set(fences[::2]) <= known and set(fences[1::2]) <= {""}
