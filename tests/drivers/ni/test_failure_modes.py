"""The ways acquisition fails that users report, and where each is tried on the daqmx driver.

The twelve are those of the project's survey of issue threads. A row names its tests, or says why there is
none; the test below makes sure that what it names is there.
"""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

HERE = Path(__file__).parent

ROWS: dict[str, tuple[str, ...] | str] = {
    "1 the reader is too slow: overrun": (
        "test_faults.py::test_an_overrun_is_a_loud_loss_and_a_new_segment",
        "test_faults.py::test_a_reader_that_is_too_late_overruns_the_buffer",
        "test_faults.py::test_the_third_overrun_in_ten_minutes_is_final",
        "test_faults.py::test_a_slow_reader_is_warned_of_before_it_loses_anything",
        "test_daemon.py::test_a_job_through_the_driver_with_an_unplug_in_the_middle",
    ),
    "2 blocks too small, too many calls": (
        "test_options.py::test_a_wrong_option_is_told_with_its_key",
        "test_reading.py::test_a_block_is_one_call",
    ),
    "3 surprises of callbacks": "none is registered: every call is made by the reading thread; what a "
    "silent death would look like is row 4's silence",
    "4 time-out and short read": (
        "test_faults.py::test_a_short_read_is_a_loss_counted_exactly",
        "test_faults.py::test_what_follows_a_short_read_is_in_its_place",
        "test_faults.py::test_three_short_reads_in_a_row_lose_the_source",
        "test_faults.py::test_a_stalled_clock_is_a_silence_after_two_seconds",
        "test_ctypes.py::test_a_short_read_through_the_library",
    ),
    "5 the USB or network link dies": (
        "test_faults.py::test_every_code_reaches_us_with_its_kind",
        "test_trouble.py::test_the_sentences_of_an_operator",
        "test_faults.py::test_a_server_that_hangs_holds_nobody_for_ever",
        "test_faults.py::test_a_link_that_broke_leaves_no_task_to_block_the_device",
    ),
    "6 unplugged and plugged in again": (
        "test_faults.py::test_unplugged_and_plugged_in_again",
        "test_faults.py::test_a_renamed_device_is_found_by_its_serial_number",
        "test_faults.py::test_a_device_that_comes_back_dead_needs_a_new_process",
        "test_faults.py::test_a_device_that_was_never_seen_to_leave_does_not",
        "test_daemon.py::test_a_device_that_needs_a_new_process_ends_the_daemon_to_get_one",
        "test_ctypes.py::test_unplugged_and_dead_after_the_replug",
    ),
    "7 driver or part missing, wrong build": (
        "test_faults.py::test_a_pc_without_the_driver_says_so",
        "test_faults.py::test_a_missing_package_is_named_with_the_extra",
        "test_trouble.py::test_what_is_missing_is_named_with_the_check_made",
        "test_ctypes.py::test_an_old_driver_is_named",
    ),
    "8 a leaked or foreign task": (
        "test_faults.py::test_in_use_is_told_and_tried_again",
        "test_faults.py::test_a_device_that_another_client_reads_is_in_use",
        "test_faults.py::test_a_task_that_cannot_start_is_not_left_behind",
        "test_reading.py::test_opening_over_and_over_leaves_nothing_behind",
    ),
    "9 another rate, skew, drift": (
        "test_faults.py::test_a_rate_the_device_has_not_is_refused_or_coerced",
        "test_watch.py::test_the_two_clocks_are_compared_now_and_then",
        "test_vectors.py::test_a_1x_vector_is_the_emulated_one",
        "test_vectors.py::test_without_the_skew_the_phase_is_wrong_by_what_the_multiplexer_takes",
        "test_vectors.py::test_the_set_up_keeps_the_skew_of_source_and_stand_file_together",
    ),
    "10 a port that cannot be opened": "a serial port's own: tests/drivers/serial",
    "11 bytes lost or late": "a serial line's own: tests/drivers/serial; here the link is the driver's",
    "12 shutdown and encodings": (
        "test_faults.py::test_closing_without_a_server_is_harmless",
        "test_options.py::test_an_input_is_one_physical_channel",
        "test_ctypes.py::test_a_vector_through_the_library_is_the_emulated_one",  # with LANG=C
        "test_daemon.py::test_a_typing_mistake_ends_the_daemon_as_such",
    ),
}


def defined_in(file: str) -> set[str]:
    tree = ast.parse((HERE / file).read_text(encoding="utf-8"))
    return {node.name for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)}


def test_there_are_twelve() -> None:
    assert [int(row.split()[0]) for row in ROWS] == list(range(1, 13))


@pytest.mark.parametrize("row", [row for row, named in ROWS.items() if not isinstance(named, str)])
def test_what_a_row_names_is_there(row: str) -> None:
    for name in ROWS[row]:
        file, _, test = name.partition("::")
        assert test in defined_in(file), name
