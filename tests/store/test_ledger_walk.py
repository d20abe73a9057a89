"""One job from mount to check, as the daemon would write it, and what the history then tells."""

from __future__ import annotations

import pytest

from store_kit import Stand
from store.records import Label, MarkState


def test_job(stand: Stand) -> None:
    stand.mount()
    run, found = stand.run(Label.O, 10 + 0j)
    stand.fit(3.0, 16)
    run2, found2 = stand.run(Label.O_T, 4 + 3j)
    print(stand.history.runs())
    print(stand.history.job_story("0142"))
    print(stand.history.coefficients())
