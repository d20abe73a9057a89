"""Commented stand files to start from: ``revmark stand new FILE --like NAME``."""

from __future__ import annotations

from pathlib import Path

FOLDER = Path(__file__).parent


def template_names() -> tuple[str, ...]:
    """The templates there are, sorted."""
    return tuple(sorted(file.stem for file in FOLDER.glob("*.toml")))


def template_text(name: str) -> str:
    """The text of a template. Raises KeyError for a name that is not among ``template_names()``."""
    if name not in template_names():
        raise KeyError(name)
    return (FOLDER / f"{name}.toml").read_text(encoding="utf-8")
