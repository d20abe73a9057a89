"""The ways acquisition fails that users report, and where each is tried on the serial driver.

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
        "test_serial_driver.py::test_a_reader_that_is_too_late_loses_exactly_what_did_not_fit",
        "test_frames.py::test_scans_that_the_digitizer_left_out_are_lost_too",
        "test_throughput.py::test_a_million_samples_a_second_arrive_as_they_are_sent",
    ),
    "2 blocks too small, too many calls": (
        "test_serial_driver.py::test_a_slow_line_is_not_read_byte_by_byte",
        "test_serial_driver.py::test_bytes_in_drips_are_put_together",
    ),
    "3 surprises of callbacks": "none is registered: the reading thread makes every call; a silent death "
    "would show as row 4's silence",
    "4 time-out and short read": (
        "test_serial_driver.py::test_silence_is_lost_after_two_seconds",
        "test_serial_driver.py::test_a_silent_port_is_told",
        "test_serial_driver.py::test_bytes_in_drips_are_put_together",
    ),
    "5 the USB or network link dies": (
        "test_link.py::test_whatever_pyserial_raises_is_a_port_that_is_gone",
        "test_link.py::test_a_socket_whose_peer_has_gone_leaves_nothing_open",
        "test_serial_driver.py::test_silence_is_lost_after_two_seconds",
    ),
    "6 unplugged and plugged in again": (
        "test_serial_driver.py::test_unplug_is_told_at_once_and_samples_flow_within_2_s_of_the_replug",
        "test_serial_driver.py::test_a_port_that_stays_away_is_gone_again_after_a_while",
        "test_serial_driver.py::test_the_wrong_digitizer_after_a_replug_may_be_exchanged_again",
        "test_serial_driver.py::test_a_digitizer_started_anew_is_opened_anew",
        "test_link.py::test_a_name_that_stays_with_the_device_is_offered",
        "test_daemon.py::test_a_job_through_the_driver_with_faults_in_the_middle",
    ),
    "7 driver or part missing, wrong build": (
        "test_link.py::test_without_pyserial_the_hint_names_the_right_package",
        "test_link.py::test_an_unknown_scheme_is_a_mistake_in_the_stand_file",
        "test_serial_driver.py::test_another_version_is_named",
    ),
    "8 a leaked or foreign task": (
        "test_link.py::test_a_port_in_use_names_who_has_it",
        "test_link.py::test_a_port_that_somebody_else_has_open_without_a_lock_is_warned_of",
    ),
    "9 another rate, skew, drift": (
        "test_serial_driver.py::test_a_stream_that_does_not_fit_is_refused_in_a_sentence",
        "test_serial_driver.py::test_a_rate_within_one_percent_is_taken_and_the_true_one_used",
        "test_serial_driver.py::test_a_description_that_changes_ends_the_stream",
        # skew is a key of the stand file's channels, tested with the signal; the clock that drifts is the
        # digitizer's own, and nothing is compared with the PC's
    ),
    "10 a port that cannot be opened": (
        "test_link.py::test_no_right_to_open_names_the_command",
        "test_link.py::test_the_group_is_that_of_the_port",
        "test_link.py::test_a_port_in_use_names_who_has_it",
        "test_link.py::test_busy_by_number",
        "test_link.py::test_a_port_that_is_not_there",
        "test_link.py::test_on_windows_only_the_text_is_left",
        "test_serial_driver.py::test_garbage_in_the_middle_ends_in_the_same_words",
    ),
    "11 bytes lost or late": (
        "test_damage.py::test_2000_frames_of_which_3_percent_are_damaged",
        "test_damage.py::test_a_noisy_line_that_hits_delimiters_too",
        "test_damage.py::test_10_000_mutated_streams",
        "test_serial_driver.py::test_loss_is_exact_and_starts_a_segment",
        "test_serial_driver.py::test_damage_is_told_once_a_minute",
        "test_link.py::test_buffers_are_set_after_opening_where_there_are_any",
    ),
    "12 shutdown and encodings": (
        "test_serial_driver.py::test_close_from_another_thread_ends_a_read",
        "test_serial_driver.py::test_close_ends_the_wait_for_a_port",
        "test_frames.py::test_an_impossible_description_is_no_description",  # a name beyond ASCII
        "test_frames.py::test_numbers_do_not_hang_on_the_locale",
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
