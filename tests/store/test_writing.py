"""Transactions: requests done once, a full disk, threads, and what a failure leaves."""

from __future__ import annotations

import threading
from typing import Any

import pytest
from sqlalchemy import event as sa_event
from store_kit import Stand, reading, samples

from config.errors import Refusal, StoreError
from store import database
from store.ledger import Ledger
from store.records import Label, PieceDraft, RunState

# --- once --------------------------------------------------------------------------------------------


def _fit(stand: Stand, mass_g: float = 3.0) -> dict[str, Any]:
    (event,) = stand.ledger.fit(PieceDraft(1, mass_g, 16), "ana")
    return {"seq": event.seq}


def test_same_request_is_done_once(stand: Stand) -> None:
    stand.mount()
    body = {"plane": 1, "mass_g": 3.0}
    first = stand.ledger.once("k", "fit", body, lambda: _fit(stand))
    again = stand.ledger.once("k", "fit", dict(reversed(body.items())), lambda: _fit(stand))
    assert first == again == {"seq": 1}
    assert stand.history.counts()["weight"] == 1


@pytest.mark.parametrize(("verb", "mass_g"), [("fit", 4.0), ("drill", 3.0)])
def test_other_request_under_the_key_is_refused(stand: Stand, verb: str, mass_g: float) -> None:
    stand.mount()
    stand.ledger.once("k", "fit", {"mass_g": 3.0}, lambda: _fit(stand))
    with pytest.raises(Refusal, match="used for another request"):
        stand.ledger.once("k", verb, {"mass_g": mass_g}, lambda: _fit(stand))
    assert stand.history.counts()["weight"] == 1


def test_failed_request_undoes_all_and_may_be_tried_again(stand: Stand) -> None:
    stand.mount()

    def two() -> dict[str, Any]:
        _fit(stand)
        stand.ledger.fit(PieceDraft(1, 3.0, 99), "ana")
        return {}

    with pytest.raises(Refusal, match="no hole 99"):
        stand.ledger.once("k", "fit", {}, two)
    assert (stand.history.counts()["weight"], stand.history.counts()["request"]) == (0, 0)
    assert stand.ledger.once("k", "fit", {}, lambda: _fit(stand)) == {"seq": 1}


def test_failure_caught_inside_still_undoes_all(stand: Stand) -> None:
    stand.mount()

    def sly() -> dict[str, Any]:
        _fit(stand)
        with pytest.raises(Refusal):
            stand.ledger.fit(PieceDraft(1, 3.0, 99), "ana")
        return {"done": True}

    with pytest.raises(Refusal, match="no hole 99"):
        stand.ledger.once("k", "fit", {}, sly)
    assert stand.history.counts()["weight"] == 0
    _fit(stand)


@pytest.mark.parametrize("key", ["", "a" * 65, "a\nb"])
def test_bad_keys(stand: Stand, key: str) -> None:
    with pytest.raises(Refusal, match="key"):
        stand.ledger.once(key, "fit", {}, dict)
    stand.mount()
    with pytest.raises(Refusal, match="key"):
        stand.ledger.ask_mark(key, Label.O, "ana")


def test_answer_that_is_no_json(stand: Stand) -> None:
    with pytest.raises(Refusal, match="answer holds what cannot be stored"):
        stand.ledger.once("k", "fit", {}, lambda: {"x": float("nan")})
    assert stand.ledger.checkpoint() is True


def test_no_checkpoint_inside(stand: Stand) -> None:
    assert stand.ledger.once("k", "v", {}, lambda: {"done": stand.ledger.checkpoint()}) == {"done": False}


# --- full disk ---------------------------------------------------------------------------------------


def _limit(stand: Stand, pages: int) -> None:
    stand.ledger._driver().execute(f"PRAGMA max_page_count = {pages}")


def test_full_disk_loses_nothing_and_heals(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    stand.ledger.add_reading(run.id, reading(raw=samples(1, 20_000)))
    (pages,) = stand.ledger._driver().execute("PRAGMA page_count").fetchone()
    _limit(stand, pages + 3)
    big = reading(raw=samples(2, 200_000))
    for _ in range(2):
        with pytest.raises(StoreError, match="no room left") as caught:
            stand.ledger.add_reading(run.id, big)
        assert caught.value.kind == "full"
    assert len(stand.history.run(run.name).readings) == 1
    # without its samples the reading still fits
    assert stand.ledger.add_reading(run.id, reading())[0].number == 2
    _limit(stand, 1_000_000)
    assert stand.ledger.add_reading(run.id, big)[0].number == 3
    assert stand.end(run.id)[0].state is RunState.COMPLETE
    assert stand.ledger.checkpoint() is True
    (sound,) = stand.ledger._driver().execute("PRAGMA integrity_check").fetchone()
    assert sound == "ok"


def test_full_disk_inside_once(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    (pages,) = stand.ledger._driver().execute("PRAGMA page_count").fetchone()
    _limit(stand, pages + 1)

    def fill() -> dict[str, Any]:
        stand.ledger.add_reading(run.id, reading(raw=samples(1, 100_000)))
        return {}

    with pytest.raises(StoreError) as caught:
        stand.ledger.once("k", "v", {}, fill)
    assert caught.value.kind == "full"
    _limit(stand, 1_000_000)
    assert stand.ledger.once("k", "v", {}, lambda: {"done": True}) == {"done": True}


def test_commit_that_fails(stand: Stand) -> None:
    """Whatever breaks at the last moment: nothing is acknowledged, nothing stays, the ledger goes on."""
    stand.mount()

    def refuse(conn: object) -> None:
        raise StoreError("The disk went away.", "", kind="io")

    sa_event.listen(stand.ledger._engine, "commit", refuse)
    with pytest.raises(StoreError, match="went away"):
        stand.fit()
    sa_event.remove(stand.ledger._engine, "commit", refuse)
    assert stand.history.counts()["weight"] == 0
    stand.fit()
    assert stand.history.counts()["weight"] == 1


def test_close_on_a_full_disk(stand: Stand, monkeypatch: pytest.MonkeyPatch) -> None:
    """What is committed stays in the log; the lock is let go all the same."""

    def full(connection: object) -> bool:
        raise StoreError("No room.", "", kind="full")

    stand.ledger.note_event("test", "kept")
    monkeypatch.setattr(database, "checkpoint", full)
    stand.ledger.close()
    monkeypatch.undo()
    assert [e.text for e in stand.history.events()] == ["kept"]
    Ledger.open(stand.path, clock=stand.clock, software="x").close()


# --- several threads ---------------------------------------------------------------------------------


def test_threads_take_turns(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    failures: list[BaseException] = []

    def work(act: Any) -> None:
        try:
            for _ in range(20):
                act()
        except BaseException as e:
            failures.append(e)

    acts = (
        lambda: stand.ledger.add_reading(run.id, reading()),
        lambda: stand.ledger.note_event("test", "x"),
        stand.history.runs,
        lambda: stand.history.run("0142/1"),
        stand.ledger.checkpoint,
    )
    threads = [threading.Thread(target=work, args=(act,)) for act in acts]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    assert failures == []
    assert [r.number for r in stand.history.run("0142/1").readings] == list(range(1, 21))
    assert len(stand.history.events()) == 20
