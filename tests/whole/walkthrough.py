"""README's walk-through is the demo's own output. ``python tests/whole/walkthrough.py`` writes it anew.

A line ``<!-- demo: COMMAND #n -->`` in README stands before the block that the n-th command beginning with
those words printed. The test compares the words; figures move a little from run to run (noise), so there each
number is only a number.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

README = Path(__file__).parents[2] / "README.md"
PICTURES = ("job-0142.png", "bode-0142-1.png")
MARKER = re.compile(r"<!-- demo: (.+?)(?: #(\d+))? -->\n(?:\n```console\n.*?\n```\n)?", re.S)
NUMBER = re.compile(r"[-<]?\d+(?:\.\d+)?")
FOLDERS = re.compile(r"^Store:\s+\S+$", re.M)


def blocks(printed: str) -> list[str]:
    """Each command of the demo with what it printed, comments between left out."""
    found = re.split(r"\n(?=[$#] )", printed)
    return [block.rstrip() for block in found if block.startswith("$ ")]


def block_of(found: list[str], command: str, nth: int) -> str:
    """The n-th block (from 1) whose command begins with the words of ``command``."""
    joined = [(re.sub(r" \\\n\s+", " ", b), b) for b in found]
    fitting = [b for flat, b in joined if flat.startswith(f"$ revmark {command}")]
    return FOLDERS.sub("Store: FOLDER/bay-simulated.sqlite", fitting[nth - 1])


def filled(text: str, printed: str) -> str:
    """README with every marked block as the demo printed it."""
    found = blocks(printed)

    def block(match: re.Match[str]) -> str:
        command, nth = match.group(1), int(match.group(2) or 1)
        number = f" #{nth}" if match.group(2) else ""
        return f"<!-- demo: {command}{number} -->\n\n```console\n{block_of(found, command, nth)}\n```\n"

    return MARKER.sub(block, text)


def words(text: str) -> str:
    """Text with every run of numbers, of blanks and of dashes (a lag below its floor) made alike."""
    plain = re.sub(r"#(?: #)+", "#", re.sub(r"[ -]+", " ", NUMBER.sub("#", text)))
    return re.sub(r" $", "", plain, flags=re.M)


def main() -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name) / "demo"
        done = subprocess.run(
            [sys.executable, "-m", "cli.main", "demo", "--keep", "--folder", str(folder)],
            capture_output=True,
            text=True,
            check=True,
        )
        README.write_text(filled(README.read_text(), done.stdout))
        for picture in PICTURES:
            shutil.copy(folder / picture, README.parent / ".readme" / picture)


if __name__ == "__main__":
    main()
