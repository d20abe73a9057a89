"""What made a vector beside counts and setting: software, numpy, processor. Equal ones give equal bits."""

from __future__ import annotations

import platform
from dataclasses import dataclass
from functools import cache
from importlib import import_module
from pathlib import Path

import numpy as np

from config.onethread import is_one_thread
from config.version import __version__

_X86 = ("vendor_id", "cpu family", "model")
_ARM = ("CPU implementer", "CPU part")
# what numpy may use of x86, widest first: names of its CPU features
_WIDTHS = ("AVX512_SPR", "AVX512_ICL", "X86_V4", "AVX512_SKX", "AVX512F", "X86_V3", "AVX2")


@dataclass(frozen=True, slots=True)
class Build:
    """Where all three are the same, the same counts and setting give the same bits."""

    software: str
    numpy: str
    processor: str
    """Family, not the single machine: maker, family and model, and the widest instructions numpy finds."""

    def other_than(self, then: Build) -> tuple[str, ...]:
        """What differs from another build, a phrase each."""
        pairs = (
            ("software", then.software, self.software),
            ("numpy", then.numpy, self.numpy),
            ("processor", then.processor, self.processor),
        )
        return tuple(f"{what} was {a or 'not known'}, is {b}" for what, a, b in pairs if a != b)


@cache
def this_build() -> Build:
    """The one that runs here."""
    return Build(__version__, np.__version__, processor())


def processor() -> str:
    """``x86_64 GenuineIntel 6 143, X86_V4``: the family whose members round alike."""
    family = " ".join([platform.machine(), *(_listed() or [platform.processor()])]).strip()
    parts = [family, *_widest(), *([] if is_one_thread() else ["several threads"])]
    return ", ".join(parts)


def _listed(file: Path = Path("/proc/cpuinfo")) -> list[str]:
    """Maker, family and model of the first processor, where the system lists them; else nothing."""
    try:
        text = file.read_text(encoding="utf-8", errors="replace")
    except OSError:
        return []
    told = dict(_pair(line) for line in text.partition("\n\n")[0].splitlines() if ":" in line)
    return next(([told[k] for k in keys] for keys in (_X86, _ARM) if all(told.get(k) for k in keys)), [])


def _pair(line: str) -> tuple[str, str]:
    name, _, value = line.partition(":")
    return name.strip(), value.strip()


def _widest() -> list[str]:
    """Of the instruction sets that numpy finds, the widest: a virtual machine may hide some of its host's."""
    try:
        found = getattr(import_module("numpy._core._multiarray_umath"), "__cpu_features__", {})
    except ImportError:
        return []
    return [name for name in _WIDTHS if found.get(name)][:1]
