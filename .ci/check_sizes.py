"""Size budget: functions with a median of at most 12 lines and none above 60, files of at most 600.

A function's docstring does not count, so that nobody is tempted to leave it out.
"""

from __future__ import annotations

import ast
import statistics
import sys
from collections.abc import Iterator
from pathlib import Path

FLOORS = ("cli", "config", "daq", "store")
MEDIAN_LINES, FUNCTION_LINES, FILE_LINES = 12, 60, 600


def functions(file: Path) -> Iterator[tuple[str, int]]:
    """(place, lines without docstring) of every function in a file."""
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef) and node.end_lineno:
            lines = node.end_lineno - node.lineno + 1
            if ast.get_docstring(node) is not None:
                text = node.body[0]
                lines -= (text.end_lineno or text.lineno) - text.lineno + 1
            yield f"{file}:{node.lineno} {node.name}", lines


def main() -> int:
    files = [file for floor in FLOORS for file in sorted(Path(floor).rglob("*.py"))]
    sized = [found for file in files for found in functions(file)]
    problems = [
        f"{place}: {lines} lines, at most {FUNCTION_LINES}"
        for place, lines in sized
        if lines > FUNCTION_LINES
    ]
    for file in files:
        lines = file.read_text(encoding="utf-8").count("\n")
        if lines > FILE_LINES:
            problems.append(f"{file}: {lines} lines, at most {FILE_LINES}")
    median = statistics.median(lines for _, lines in sized)
    if median > MEDIAN_LINES:
        problems.append(f"median function: {median} lines, at most {MEDIAN_LINES}")
    print(*problems, f"{len(files)} files, {len(sized)} functions, median {median:g} lines", sep="\n")
    return 1 if problems else 0


if __name__ == "__main__":
    sys.exit(main())
