"""The documents keep pace with the tree: what they name exists, and nothing is left to be filled in.

- a path in backquotes or in a link of a document exists (``daq/drivers/base.py``, ``config/templates``);
- a command in backquotes (``revmark run list``) exists, and each command is named in README or DEVELOPERS;
- no word that stands for text to come;
- no file holds the path of somebody's home or work folder.
"""

from __future__ import annotations

import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import click

DOCUMENTS = ("README.md", "DEVELOPERS.md", "CHANGELOG.md")
TOP = ("cli", "config", "daq", "store", "tests", ".ci")
TO_COME = re.compile(
    r"\b(" + "|".join(("TO" + "DO", "FIX" + "ME", "T" + "BD", "lorem ipsum", "coming soon")) + r")\b", re.I
)
HOMES = re.compile(
    r"(?<![\w.])/(?:" + "|".join(("ho" + "me", "ro" + "ot", "Us" + "ers", "wo" + "rk")) + r")/[\w.-]+"
)
PATHS = re.compile(r"`((?:" + "|".join(re.escape(top) for top in TOP) + r")/[\w./-]*)`")
LINKS = re.compile(r"\]\((?!https?:|#|mailto:)([^)#\s]+)")
COMMANDS = re.compile(r"(?:`|^ {4}|^\$ )revmark ((?:[a-z-]+)(?: [a-z-]+)?)", re.M)


def tracked() -> list[Path]:
    """The files git keeps; in a tree without git, none."""
    listed = subprocess.run(["git", "ls-files", "-z"], capture_output=True, text=True, check=False).stdout
    return [Path(name) for name in filter(None, listed.split("\0")) if Path(name).is_file()]


def of_document(file: Path) -> Iterator[str]:
    text = file.read_text(encoding="utf-8")
    for number, line in enumerate(text.splitlines(), 1):
        for name in PATHS.findall(line) + LINKS.findall(line):
            if not (file.parent / name).exists():
                yield f"{file}:{number}: names {name}, which is not there"
        if TO_COME.search(line):
            yield f"{file}:{number}: left to be filled in: {line.strip()}"
    for words in COMMANDS.findall(text):
        if not is_command(words.split()):
            yield f"{file}: names `revmark {words}`, which is no command"


def is_command(words: list[str]) -> bool:
    """True when the words lead to a command; a word after a command that is no group is an argument."""
    from cli.main import revmark

    found: click.Command | None = revmark
    for word in words:
        if not isinstance(found, click.Group):
            return True
        try:
            found = found.get_command(click.Context(found), word)
        except ModuleNotFoundError:
            return False
    return found is not None


def unmentioned() -> Iterator[str]:
    from cli import main as cli_main

    text = "".join(Path(name).read_text(encoding="utf-8") for name in DOCUMENTS if Path(name).exists())
    for name in cli_main.COMMANDS:
        if f"revmark {name}" not in text:
            yield f"`revmark {name}` is named in no document"


def homes(file: Path) -> Iterator[str]:
    data = file.read_bytes()
    if b"\0" in data[:4096]:
        return
    for number, line in enumerate(data.decode("utf-8", "replace").splitlines(), 1):
        if HOMES.search(line):
            yield f"{file}:{number}: holds a path of one machine: {line.strip()[:80]}"


def main() -> int:
    problems = [f"{name} is missing" for name in (*DOCUMENTS, "LICENSE") if not Path(name).exists()]
    for name in DOCUMENTS:
        if Path(name).exists():
            problems += of_document(Path(name))
    problems += unmentioned()
    for file in tracked():
        problems += homes(file)
    print(*problems, f"{len(problems)} problems in documents and paths", sep="\n")
    return 1 if problems else 0


if __name__ == "__main__":
    sys.path.insert(0, ".")
    sys.exit(main())
