"""The stand file: what is measured on this stand, with which probes, and when a run and a reading count.

Quantities are typed as text with their unit (``"200 mV/mil"``, ``"60 rpm"``) and held as numbers in base
units, named so. ``load_stand`` and ``check_stand`` report every mistake of a file at once.
"""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from pydantic import Field, PrivateAttr, ValidationError

from config.errors import StandFileError
from config.fields import Section
from config.pairs import pair_problems
from config.problems import Problem, sentences
from config.sections import (
    Access,
    Channel,
    Identity,
    OncePerRev,
    RawBudget,
    RunRules,
    Source,
    Steadiness,
    StoreFile,
    Surroundings,
)
from config.steadiness import SteadinessLimits

__all__ = [
    "Channel",
    "OncePerRev",
    "OptionsCheck",
    "Stand",
    "SteadinessLimits",
    "check_stand",
    "load_stand",
    "stand_schema",
]

OptionsCheck = Callable[[str, Mapping[str, Any]], Iterable[Problem]]
"""(driver's name, its options as typed) -> problems, with keys from the top (``source.options.rate``)."""

OWN_STORE_DRIVERS = ("simulated", "replay")
"""Drivers whose runs never happened on this stand: by default they get a store of their own."""


class Stand(Section):
    """A stand file as a whole."""

    identity: Identity = Field(alias="stand")
    """Name, time zone and ends of the stand."""
    source: Source
    """The driver and its options."""
    pulse: OncePerRev = Field(alias="once_per_rev")
    """The once-per-rev channel: without it there is no phase."""
    channels: tuple[Channel, ...] = Field(alias="channel", strict=False, min_length=1, max_length=64)
    """The probes, one [[channel]] each."""
    steadiness_keys: Steadiness = Field(default_factory=Steadiness, alias="steadiness")
    """When a reading is steady."""
    surroundings: Surroundings = Field(default_factory=Surroundings)
    """What else vibrates near the machine."""
    run: RunRules = Field(default_factory=RunRules)
    """What counts as a run."""
    raw: RawBudget = Field(default_factory=RawBudget)
    """How many raw samples are kept."""
    store_file: StoreFile = Field(default_factory=StoreFile, alias="store")
    """Where the store is."""
    access: Access = Field(default_factory=Access)
    """Who may mark and read."""
    _file: Path = PrivateAttr(default=Path("stand.toml"))

    @property
    def file(self) -> Path:
        """The stand file, absolute."""
        return self._file

    @property
    def folder(self) -> Path:
        """The stand file's folder: relative paths in the file start here."""
        return self._file.parent

    @property
    def name(self) -> str:
        return self.identity.name

    @property
    def ends(self) -> tuple[str, str]:
        return self.identity.ends

    @property
    def zone(self) -> ZoneInfo:
        """The time zone in which dates are shown."""
        return ZoneInfo(self.identity.time_zone)

    @property
    def steadiness(self) -> SteadinessLimits:
        """The limits in force: the preset with what the file says otherwise."""
        return self.steadiness_keys.limits()

    @property
    def store_path(self) -> Path:
        """The store's file, absolute. Simulated and replayed runs have one of their own by default."""
        if self.store_file.path is not None:
            return (self.folder / self.store_file.path).resolve()
        own = f"-{self.source.driver}" if self.source.driver in OWN_STORE_DRIVERS else ""
        return self.folder / f"{self._file.stem}{own}.sqlite"

    def channel(self, name: str) -> Channel | None:
        return next((c for c in self.channels if c.name == name), None)

    def set_up_content(self, rate_hz: float) -> dict[str, Any]:
        """What a set-up record of the store holds (its fields but id and revision), ready for JSON.

        Equal content is the same set-up; how amplitudes are shown is no part of it. ``rate_hz`` is the
        true rate the source told when it was opened.
        """
        return {
            "stand": self.name,
            "ends": list(self.ends),
            "angles_seen_from": self.identity.angles_seen_from,
            "zero": self.identity.zero,
            "channels": [_channel_content(c) for c in self.channels],
            "pulse": {
                **self.pulse.model_dump(include={"name", "input", "edge", "level_v", "angle_deg", "pulses"}),
                "pattern": self.pulse.pattern,
            },
            "rate_hz": float(rate_hz),
            "driver": self.source.driver,
        }


def _channel_content(channel: Channel) -> dict[str, Any]:
    low_v, high_v = channel.gap_limits_v or (None, None)
    same = ("name", "kind", "input", "volts_per_unit", "angle_deg", "coupling", "filter", "skew_s", "pair")
    return {
        **channel.model_dump(include=set(same)),
        "unit": channel.unit,
        "positive": channel.positive_sign,
        "gap_low_v": low_v,
        "gap_high_v": high_v,
    }


def stand_schema() -> dict[str, Any]:
    """JSON schema of a stand file, with the keys and the text as typed."""
    return _without_null(Stand.model_json_schema(by_alias=True))  # type: ignore[no-any-return]


def _without_null(part: Any) -> Any:
    """TOML has no null: what may be left out is simply not required."""
    if isinstance(part, list):
        return [_without_null(p) for p in part]
    if not isinstance(part, dict):
        return part
    kept = {k: _without_null(v) for k, v in part.items() if not (k == "default" and v is None)}
    choices = [c for c in kept.get("anyOf", []) if c != {"type": "null"}]
    if len(choices) == 1 and "anyOf" in kept:
        del kept["anyOf"]
        kept = {**choices[0], **kept}
    return kept


# --- from a file to a Stand --------------------------------------------------------------------------


def load_stand(path: str | os.PathLike[str]) -> Stand:
    """The stand of a file, its driver's options unchecked.

    Raises StandFileError with every mistake at once, also when there is no such file.
    """
    return check_stand(path, lambda _driver, _options: ())


def check_stand(path: str | os.PathLike[str], options_check: OptionsCheck) -> Stand:
    """As ``load_stand``, with the problems of the driver's options, as ``options_check`` finds them."""
    file = Path(path).absolute()
    raw = _read(file)
    stand: Stand | None = None
    problems: list[Problem] = []
    try:
        stand = Stand.model_validate(raw)
    except ValidationError as error:
        problems += sentences(error, Stand)
    problems += _shared(raw) + pair_problems(raw) + _of_options(raw, options_check)
    if problems or stand is None:
        raise _trouble(file, problems)
    stand._file = file
    return stand


def _trouble(file: Path, problems: list[Problem]) -> StandFileError:
    count = "one mistake" if len(problems) == 1 else f"{len(problems)} mistakes"
    return StandFileError(f"The stand file {file.name} has {count}.", "Put right:", tuple(problems))


def _read(file: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(file.read_text(encoding="utf-8-sig"))
    except FileNotFoundError as error:
        raise StandFileError(
            f"There is no stand file {file}.",
            f"Make one with: revmark stand new {file.name} --like simulated",
        ) from error
    except OSError as error:
        raise StandFileError(
            f"The stand file {file} cannot be read: {error.strerror}.", "Check its name and permissions."
        ) from error
    except UnicodeDecodeError as error:
        raise _trouble(file, [("(file)", "is not text in UTF-8; save it as UTF-8.")]) from error
    except tomllib.TOMLDecodeError as error:
        raise _trouble(file, [_syntax(str(error))]) from error


def _syntax(message: str) -> Problem:
    found = re.search(r"\s*\(at (?:line (\d+), column (\d+)|end of document)\)$", message)
    what = message[: found.start()] if found else message
    if found and found[1]:
        return f"line {found[1]}", f"is not TOML: {what} (column {found[2]})."
    return "end of file", f"is not TOML: {what}."


def _of_options(raw: Mapping[str, Any], options_check: OptionsCheck) -> list[Problem]:
    source = raw.get("source")
    if not isinstance(source, dict) or not isinstance(source.get("driver"), str):
        return []
    options = source.get("options", {})
    return list(options_check(source["driver"], options)) if isinstance(options, dict) else []


def _shared(raw: Mapping[str, Any]) -> list[Problem]:
    """Inputs and names that two channels claim. Works on the raw file, so other mistakes do not hide them."""
    return _twice(
        raw, "input", "is wired to {key} already; each channel needs an input of its own."
    ) + _twice(raw, "name", "is the name of {key} already; give each channel a name of its own.")


def _twice(raw: Mapping[str, Any], field: str, sentence: str) -> list[Problem]:
    first: dict[str, str] = {}
    found = []
    for key, table in _tables(raw):
        value = table.get(field, "once-per-rev" if (key, field) == ("once_per_rev", "name") else None)
        if not isinstance(value, str):
            continue
        folded = value.strip().casefold()
        if folded in first:
            found.append((f"{key}.{field}", f"{value!r} " + sentence.format(key=first[folded])))
        first.setdefault(folded, key)
    return found


def _tables(raw: Mapping[str, Any]) -> list[tuple[str, Mapping[str, Any]]]:
    channels = raw.get("channel")
    listed = channels if isinstance(channels, list) else []
    keyed = [("once_per_rev", raw.get("once_per_rev"))]
    keyed += [(f"channel.{number}", table) for number, table in enumerate(listed, 1)]
    return [(key, table) for key, table in keyed if isinstance(table, dict)]
