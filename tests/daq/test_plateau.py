"""Which steady windows become readings (HOUSE: one per change beyond limits and one per ten minutes)."""

from __future__ import annotations

import numpy as np

from daq.plateau import PlateauWatch, Window


def window(end_s, speed_hz=25.0, vector=10 + 0j, first_sample=None):
    first = int((end_s - 3) * 1000) if first_sample is None else first_sample
    return Window(first, end_s, speed_hz, np.array([vector]), np.array([0.5]))


def test_the_first_steady_window_is_taken_and_the_next_like_it_is_not():
    watch = PlateauWatch(0.5)
    assert watch.takes(window(3.0))
    assert not watch.takes(window(3.4))


def test_a_changed_vector_is_taken():
    watch = PlateauWatch(0.5)
    watch.takes(window(3.0))
    assert not watch.takes(window(4.0, vector=10.49 + 0j))
    assert watch.takes(window(4.4, vector=10 + 0.51j))


def test_another_speed_is_taken():
    watch = PlateauWatch(0.5)
    watch.takes(window(3.0))
    assert not watch.takes(window(4.0, speed_hz=25.12))
    assert watch.takes(window(4.4, speed_hz=25.13))


def test_ten_minutes_later_it_is_taken_again():
    watch = PlateauWatch(0.5)
    watch.takes(window(3.0))
    assert not watch.takes(window(602.9))
    assert watch.takes(window(603.0))


def test_a_fresh_one_begins_after_the_asking():
    watch = PlateauWatch(0.5)
    watch.takes(window(3.0))
    watch.want_fresh(4000)
    assert not watch.takes(window(6.9, first_sample=3999))
    assert watch.takes(window(7.0, first_sample=4000))
    assert not watch.takes(window(8.0, first_sample=5000))


def test_a_new_run_begins_anew_and_remembers_no_speeds():
    watch = PlateauWatch(0.5)
    watch.takes(window(3.0))
    assert watch.speeds_hz == [25.0]
    watch.new_run()
    assert watch.speeds_hz == []
    assert watch.takes(window(9.0))
