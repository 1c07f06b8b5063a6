"""Every example of README.md and DEVELOPERS.md runs.

Python blocks of a file run one after the other in one namespace; lines ``$ ssn ...`` and ``$ python -m ssn ...``
of console blocks run in bash and must exit 0. Both run in a scratch folder that shows the repository's
files, so that what they write stays out of the repository.
"""

from __future__ import annotations

import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
DOCUMENTS = ["README.md", "DEVELOPERS.md"]
FENCE = re.compile(r"^```(\w+)[^\n]*\n(.*?)^```\s*$", re.MULTILINE | re.DOTALL)
COMMAND = re.compile(r"^\$ (?:ssn|python3? -m ssn)(?= |$)")


def blocks(text: str, *languages: str) -> list[tuple[int, str]]:
    """Return (line number of the first line, content) of the fenced blocks in these languages."""
    return [
        (text.count("\n", 0, match.start(2)) + 1, match[2])
        for match in FENCE.finditer(text)
        if match[1] in languages
    ]


def commands(text: str) -> list[str]:
    """Return what follows ``ssn`` on the command lines of the console blocks, continuation lines joined."""
    lines = [
        line
        for _, block in blocks(text, "console", "sh", "bash", "shell")
        for line in re.sub(r"\\\n\s*", "", block).splitlines()
    ]
    return [COMMAND.sub("", line).strip() for line in lines if COMMAND.match(line)]


def _text(document: str) -> str:
    path = ROOT / document
    return path.read_text("utf-8") if path.exists() else ""


COMMANDS = [(document, command) for document in DOCUMENTS for command in commands(_text(document))]


@pytest.fixture
def scratch(tmp_path, monkeypatch):
    """Change into a folder with links to the repository's folders and documents, but not to earlier output."""
    for entry in ROOT.iterdir():
        if not entry.name.startswith(".") and (entry.is_dir() or entry.suffix in {".md", ".toml"}):
            (tmp_path / entry.name).symlink_to(entry)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.parametrize("document", DOCUMENTS)
def test_python_blocks_run(scratch, document):
    namespace = {"__name__": "__main__"}
    for line, block in blocks(_text(document), "python"):
        # Blank lines in front: a traceback shows the line of the document.
        exec(compile("\n" * (line - 1) + block, str(ROOT / document), "exec"), namespace)


@pytest.mark.parametrize(("document", "command"), COMMANDS)
def test_command_exits_0(scratch, document, command):
    line = f"set -euo pipefail; {shlex.quote(sys.executable)} -m ssn {command}"
    environment = os.environ | {"PYTHONPATH": str(scratch), "NO_COLOR": "1"}
    done = subprocess.run(
        ["bash", "-c", line], cwd=scratch, env=environment, capture_output=True, text=True, timeout=600
    )
    assert done.returncode == 0, f"{document}: ssn {command}\n{done.stdout}\n{done.stderr}"


def test_there_is_something_to_run():
    readme = _text("README.md")
    assert len(blocks(readme, "python")) > 0
    assert len(commands(readme)) > 0
    assert len(commands(_text("DEVELOPERS.md"))) > 0


def test_blocks_and_commands_are_found():
    text = (
        "Text\n\n```python\nx = 1\n```\n\n```text\n$ ssn no\n```\n\n```console\n$ ssn list\nout\n"
        "$ make compare\n$ python -m ssn solve a.py \\\n    --parameter n=3\n$ ssnake\n```\n\n```python\ny = 2\n\n```\n"
    )
    assert blocks(text, "python") == [(4, "x = 1\n"), (21, "y = 2\n\n")]
    assert commands(text) == ["list", "solve a.py --parameter n=3"]
