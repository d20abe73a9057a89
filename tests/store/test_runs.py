"""Runs and readings as the daemon writes them, what comes back, and the records that correct them."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from store_kit import MACHINE, Stand, reading, samples, vector

from config.errors import Refusal, StoreError
from store import ledger_coefficients
from store.records import Label, MarkPosition, Origin, RunState


def test_reading_comes_back_whole(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    draft = reading(10 - 2j, raw=samples())
    added, mark = stand.ledger.add_reading(run.id, draft)
    assert mark is None
    found = stand.history.reading(added.id)
    assert found == added
    assert (found.number, found.at_us, found.duration_s) == (1, 1_700_000_100_000_000, 4.0)
    assert (found.speed_hz, found.revolutions, found.flags) == (25.0, 100, ("near gap limit",))
    assert found.steadiness == {"speed": 0.0001, "drift": 0.02}
    assert found.vectors == draft.vectors
    back = stand.history.reading_raw(added.id)
    assert draft.raw is not None
    assert (back.counts == draft.raw.counts).all()
    assert (back.volts_per_count, back.rate_hz, back.first_sample) == (
        (0.001, 0.002, 0.003),
        25_600.0,
        51_200,
    )


def test_run_comes_back_whole(stand: Stand) -> None:
    mount = stand.mount()
    run = stand.begin(Origin.REPLAYED)
    assert stand.history.open_run() == run
    assert (run.name, run.job_number, run.number, run.unassigned_number) == ("0142/1", "0142", 1, None)
    assert (run.mount_id, run.set_up_id, run.origin) == (mount.id, stand.set_up_id, Origin.REPLAYED)
    assert (run.operator, run.condition, run.software) == ("ana", {"load": "none"}, "revmark test")
    assert (run.state, run.reason, run.ended_us, run.void) == (RunState.OPEN, "", None, None)
    closed, _ = stand.ledger.close_run(
        run.id, RunState.INTERRUPTED, "source lost", 77, "cable", fast_enough=False
    )
    assert (closed.state, closed.reason, closed.ended_us) == (RunState.INTERRUPTED, "source lost", 77)
    assert stand.history.open_run() is None
    assert stand.history.run("0142/1") == closed
    # closing again (a retry) changes nothing
    assert stand.end(run.id)[0] == closed
    with pytest.raises(Refusal, match="has ended"):
        stand.ledger.add_reading(run.id, reading())


def test_one_run_at_a_time(stand: Stand) -> None:
    run = stand.begin()
    with pytest.raises(Refusal, match="Run U/1 is still open"):
        stand.begin()
    with pytest.raises(Refusal, match="cannot be closed as open"):
        stand.ledger.close_run(run.id, RunState.OPEN, "", 0, fast_enough=True)


def test_numbers(stand: Stand) -> None:
    """Within the job from 1; U/n by store; kept when a run moves on."""
    names = [stand.run(None)[0].name]
    stand.mount()
    names += [stand.run(None)[0].name, stand.run(None)[0].name]
    stand.mount(job_number="0143")
    names += [stand.run(None)[0].name]
    stand.ledger.unmount("ana")
    names += [stand.run(None)[0].name]
    assert names == ["U/1", "0142/1", "0142/2", "0143/1", "U/2"]
    assert stand.ledger.assign_run("U/2", "0142", "ana").name == "0142/3"
    assert stand.history.run("U/2").name == "0142/3"
    assert stand.ledger.assign_run("0142/3", "0143", "ana").name == "0143/2"
    for name in ("U/2", "0142/3", "0143/2"):
        assert stand.history.run(name).name == "0143/2"
    stand.mount()
    assert stand.run(None)[0].name == "0142/4"  # 3 is not given twice
    lines = {line.name: line.other_name for line in stand.history.runs()}
    assert lines == {
        "U/1": None,
        "0142/1": None,
        "0142/2": None,
        "0142/4": None,
        "0143/1": None,
        "0143/2": "U/2",
    }


def test_assigned_run_takes_the_mount_that_was_forgotten(stand: Stand) -> None:
    """Nothing was mounted in the store; the operator mounts afterwards and assigns the run."""
    run, _ = stand.run(None)
    mount = stand.mount()
    assert stand.ledger.assign_run(run.name, "0142", "ana").mount_id == mount.id
    stand.ledger.unmount("ana")
    later, _ = stand.run(None)
    assert stand.ledger.assign_run(later.name, "0142", "ana").mount_id == mount.id


def test_assigned_run_counts_in_the_coefficients(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O, 10 + 0j)
    stand.fit()
    stand.run(Label.O_T, 4 + 3j)
    first = stand.history.coefficients()
    stand.ledger.add_machine(replace(MACHINE, serial="F-211"), "ana")
    stand.mount(serial="F-211", job_number="0143", marks=(MarkPosition(1, 30.0),))
    stand.ledger.assign_run("0142/2", "0143", "ana")
    assert stand.history.coefficients() == ()
    stand.ledger.assign_run("0142/2", "0142", "ana")
    assert [c.run_names for c in stand.history.coefficients()] == [("0142/1", "0142/3")] * 2
    assert [c.value for c in stand.history.coefficients()] == [c.value for c in first]


def test_void(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O, 10 + 0j)
    stand.fit()
    stand.run(Label.O_T, 4 + 3j)
    assert len(stand.history.coefficients()) == 2
    gone = stand.ledger.void_run("0142/2", "belt slipped", "ana")
    assert (gone.void, gone.readings[0].label) == ("belt slipped", Label.O_T)
    assert stand.history.coefficients() == ()
    with pytest.raises(Refusal, match=r"void already \(belt slipped\)"):
        stand.ledger.void_run("0142/2", "again", "ana")
    for why in ("", "two\nlines", "x" * 501):
        with pytest.raises(Refusal):
            stand.ledger.void_run("0142/1", why, "ana")


def test_revise(stand: Stand) -> None:
    stand.mount()
    run, _ = stand.run(None)
    with pytest.raises(Refusal, match="no set-up"):
        stand.ledger.revise_run(run.name, run.id, "typed wrong", "ana")
    from store_kit import SET_UP

    other = stand.ledger.set_up(replace(SET_UP, rate_hz=51_200.0))
    assert stand.ledger.revise_run(run.name, other.id, "rate was set anew", "ana").set_up_id == other.id
    assert stand.history.job_story("0142").set_ups == {other.id: other}


def test_open_run_is_not_corrected(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    for act in (
        lambda: stand.ledger.void_run(run.name, "why", "ana"),
        lambda: stand.ledger.assign_run(run.name, "0142", "ana"),
        lambda: stand.ledger.revise_run(run.name, stand.set_up_id, "why", "ana"),
    ):
        with pytest.raises(Refusal, match="is still open"):
            act()


@pytest.mark.parametrize(
    "name", ["", "1", "0142", "0142/", "/1", "0142/x", "0142/-1", "0142/²", "U/9", "9/9"]
)
def test_names_of_no_run(refusing: Stand, name: str) -> None:
    with pytest.raises(Refusal, match="no run"):
        refusing.history.run(name)


def test_job_number_with_a_slash(stand: Stand) -> None:
    """It would read like the name of a run."""
    with pytest.raises(Refusal, match="'26/0142' holds a '/'"):
        stand.mount(job_number="26/0142")
    assert stand.history.jobs() == ()


def test_recover(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    stand.ledger.add_reading(run.id, reading())
    (closed,) = stand.ledger.recover()
    assert (closed.state, closed.reason) == (RunState.INTERRUPTED, "the daemon ended without closing it")
    # the reading began at 1 700 000 100 s and lasted 4 s
    assert closed.ended_us == 1_700_000_104_000_000
    assert len(closed.readings) == 1
    assert stand.ledger.recover() == ()
    assert [e.kind for e in stand.history.events()] == ["run recovered"]


# --- the border --------------------------------------------------------------------------------------


def test_reading_with_a_number_that_is_none(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    for field in ("speed_hz", "duration_s", "mono_s"):
        for bad in (math.nan, math.inf, -math.inf):
            with pytest.raises(Refusal, match=f"{field} is .*cannot be stored"):
                stand.ledger.add_reading(run.id, reading(**{field: bad}))
    assert stand.history.counts()["reading"] == 0


@pytest.mark.parametrize(
    "bad", [vector(complex(math.nan, 0)), vector(complex(0, math.inf)), replace(vector(1j), cov=math.nan)]
)
def test_vector_that_is_none_undoes_the_whole_reading(stand: Stand, bad: Any) -> None:
    stand.mount()
    run = stand.begin()
    with pytest.raises(Refusal, match="cannot be stored"):
        stand.ledger.add_reading(run.id, reading(vectors=(vector(1 + 0j, "probe 2"), bad), raw=samples()))
    counts = stand.history.counts()
    assert (counts["reading"], counts["vector"], counts["raw"]) == (0, 0, 0)


def test_json_and_integers_at_the_border(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    for bad in ({"a": math.nan}, {"a": object()}):
        with pytest.raises(Refusal, match="steadiness holds what cannot be stored"):
            stand.ledger.add_reading(run.id, reading(steadiness=bad))
    with pytest.raises(Refusal, match="first_sample is 9223372036854775808"):
        stand.ledger.add_reading(run.id, reading(first_sample=2**63))
    assert stand.ledger.add_reading(run.id, reading(first_sample=2**63 - 1))[0].number == 1


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    value=st.complex_numbers(allow_nan=False, allow_infinity=False),
    small=st.floats(allow_nan=False, allow_infinity=False, allow_subnormal=True),
    revolutions=st.integers(-(2**63) + 1, 2**63 - 1),
    flag=st.text(),
)
def test_any_finite_reading_comes_back(
    stand: Stand, value: complex, small: float, revolutions: int, flag: str
) -> None:
    run = stand.history.open_run() or stand.begin()
    draft = reading(vectors=(replace(vector(value), var_re=small),), revolutions=revolutions, flags=(flag,))
    added, _ = stand.ledger.add_reading(run.id, draft)
    assert stand.history.reading(added.id) == added
    assert added.vectors == draft.vectors
    assert (added.revolutions, added.flags) == (revolutions, (flag,))


def test_what_is_derived_never_costs_what_is_measured(stand: Stand, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(story: object) -> tuple[()]:
        raise ZeroDivisionError("no way")

    monkeypatch.setattr(ledger_coefficients.coefficients, "from_story", broken)
    stand.mount()
    stand.run(Label.O)
    assert stand.history.run("0142/1").readings[0].label is Label.O
    assert stand.history.events(1)[0].text == "Job 0142: ZeroDivisionError: no way"


def test_rebuild(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O, 10 + 0j)
    stand.fit()
    stand.run(Label.O_T, 4 + 3j)
    before = stand.history.coefficients()
    with stand.ledger._write() as w:
        w.c.exec_driver_sql("DELETE FROM coefficient")
    assert stand.ledger.rebuild_coefficients() == 2
    assert stand.history.coefficients() == before
    assert stand.ledger.rebuild_coefficients("0142") == 2


# --- raw samples age ---------------------------------------------------------------------------------


def _kept(stand: Stand, names: list[str]) -> list[bool]:
    kept = []
    for name in names:
        try:
            stand.history.reading_raw(stand.history.run(name).readings[0].id)
            kept.append(True)
        except Refusal:
            kept.append(False)
    return kept


def test_raw_ages_oldest_unlabelled_first(stand: Stand) -> None:
    stand.mount()
    labels = (Label.CHECK, None, None, Label.CHECK)
    names = [stand.run(label, raw=samples(i, 20_000))[0].name for i, label in enumerate(labels)]
    # 20 000 frames of 3 channels of noise over the whole range pack to about 0.11 MiB each
    total_mib = stand.history.info().raw_bytes / 2**20
    assert 0.4 < total_mib < 0.5
    assert stand.ledger.age_raw(0.5) == 0
    assert stand.ledger.age_raw(0.4) == 1
    assert _kept(stand, names) == [True, False, True, True]
    assert stand.ledger.age_raw(0.25) == 1
    assert _kept(stand, names) == [True, False, False, True]
    assert stand.ledger.age_raw(0.0, at_most=1) == 1
    assert _kept(stand, names) == [False, False, False, True]
    assert stand.ledger.age_raw(0.0) == 1
    assert stand.history.info().raw_bytes == 0
    with pytest.raises(Refusal, match=r"were let go \(raw budget: oldest unlabelled first, 0 MiB\)"):
        stand.history.reading_raw(stand.history.run(names[0]).readings[0].id)
    assert len(stand.history.run(names[0]).readings[0].vectors) == 3


def test_raw_never_stored(stand: Stand) -> None:
    stand.mount()
    _, found = stand.run(None)
    with pytest.raises(Refusal, match="were not stored"):
        stand.history.reading_raw(found.id)
    with pytest.raises(Refusal, match="no reading"):
        stand.history.reading_raw(stand.set_up_id)


def test_damaged_raw_is_told(stand: Stand) -> None:
    stand.mount()
    _, found = stand.run(None, raw=samples())
    with stand.ledger._write() as w:
        w.c.exec_driver_sql("DROP TRIGGER raw_no_update")
        w.c.exec_driver_sql("UPDATE raw SET crc32 = crc32 + 1")
    with pytest.raises(StoreError, match="checksum") as caught:
        stand.history.reading_raw(found.id)
    assert caught.value.kind == "corrupt"
