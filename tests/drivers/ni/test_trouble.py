"""Codes and exceptions of the library in our kinds and words."""

from __future__ import annotations

import logging
import struct
import sys

import pytest
from nidaqmx import errors
from nidaqmx.error_codes import DAQmxErrors

from config.errors import DriverError
from daq.drivers.ni.trouble import CONFIG, KINDS, Where, border, translated

HERE = Where("Dev1", at="14:05:59", silent_s=12.34)
FAR = Where("Dev1", "box:31763")

# what the names in nidaqmx.error_codes say of themselves, by the kind it makes of them
NAMED = {
    "lost_data": {
        "SAMPLES_NO_LONGER_AVAILABLE",
        "ACQ_STOPPED_TO_PREVENT_INPUT_BUFFER_OVERWRITE",
        "INPUT_FIFO_OVERFLOW_2",
        "INPUT_FIFO_OVERFLOW",
        "ADC_OVERRUN",
    },
    "gone": {
        "DEV_CANNOT_BE_ACCESSED",
        "INVALID_DEVICE_ID",
        "DEVICE_REMOVED",
        "HARDWARE_NOT_RESPONDING",
        "PAL_TRANSFER_ABORTED",
        "PAL_COMMUNICATIONS_FAULT",
        "PAL_USB_TRANSACTION_ERROR",
        "NETWORK_TARGET_UNREACHABLE",
        "NETWORK_STATUS_DOWN",
        "NETWORK_STATUS_CONNECTION_LOST",
        "DEV_ABSENT_OR_UNAVAILABLE_ROUTING",
    },
    "busy": {
        "PAL_RESOURCE_RESERVED",
        "NETWORK_DEVICE_IN_USE",
        "NETWORK_DEVICE_RESERVED_BY_ANOTHER_HOST",
    },
    "timeout": {"SAMPLES_NOT_YET_AVAILABLE", "OPERATION_TIMED_OUT", "PAL_TRANSFER_TIMED_OUT"},
    "config": {
        "INVALID_ATTRIBUTE_VALUE",
        "PHYSICAL_CHAN_DOES_NOT_EXIST",
        "ATTRIBUTE_NOT_SUPPORTED_IN_TASK_CONTEXT",
        "CAN_NOT_PERFORM_OP_WHEN_NO_CHANS_IN_TASK",
        "DEVS_WITHOUT_COMMON_SYNC_STRATEGY",
    },
}


def test_each_code_is_the_one_the_library_calls_so() -> None:
    by_name = {DAQmxErrors[name].value: kind for kind, names in NAMED.items() for name in names}
    assert by_name == KINDS


@pytest.mark.parametrize("code", sorted(KINDS))
def test_a_code_has_a_kind_a_sentence_and_what_to_do(code: int) -> None:
    found = translated(errors.DaqError("Anything at all.", code), HERE)
    assert found.kind == KINDS[code]
    assert found.retryable == (code not in CONFIG)
    assert f"(code {code}" in found.cause
    assert "Dev1" in found.cause
    assert found.remedy.endswith((".", "it."))
    assert "{" not in str(found)


def test_the_text_of_the_library_decides_nothing() -> None:
    texts = ("resource reserved", "Überlauf", "")
    assert len({str(translated(errors.DaqError(text, -201003), HERE)) for text in texts}) == 1


def test_the_sentences_of_an_operator() -> None:
    overrun = str(translated(errors.DaqReadError("x", -200279, 0), HERE))
    assert overrun.startswith("Samples were lost at 14:05:59: the PC did not collect data of Dev1 for 12.3 s")
    assert "closed as interrupted" in overrun
    usb = str(translated(errors.DaqError("x", -50405), HERE))
    assert "USB link to Dev1 failed" in usb
    assert "powered hub" in usb
    busy = str(translated(errors.DaqError("x", -50103), FAR))
    assert busy.startswith("Dev1 at box:31763 is in use by another program, or by one that crashed")
    apart = str(translated(errors.DaqError("x", -201425), HERE))
    assert "wire probes and once-per-rev to one device" in apart


def test_a_refused_setting_is_told_in_the_library_s_words_too() -> None:
    text = "Requested value is not supported.\n\nProperty: AI.Max"
    found = translated(errors.DaqError(text, -200077), HERE)
    assert "(code -200077: Requested value is not supported)." in found.cause


def test_an_unknown_code_is_no_riddle() -> None:
    found = translated(errors.DaqError("Something new.", -299999), HERE)
    assert (found.kind, found.retryable) == ("protocol", True)
    assert found.cause == "Dev1 reported code -299999: Something new."


def test_what_is_missing_is_named_with_the_check_made() -> None:
    bits = f"{struct.calcsize('P') * 8} bits"
    missing = translated(errors.DaqNotFoundError("no driver"), HERE)
    assert missing.kind == "no_driver"
    assert bits in missing.cause
    assert "source.options.server" in missing.remedy
    assert sys.platform in translated(errors.DaqNotSupportedError("no"), HERE).cause
    assert "too old" in translated(errors.DaqFunctionNotSupportedError("no"), HERE).cause
    wrong = translated(OSError("[WinError 193] %1 is not a valid Win32 application"), HERE)
    assert (wrong.kind, bits in wrong.cause) == ("no_driver", True)
    assert "same number of bits" in wrong.remedy


def test_a_missing_package_names_the_extra() -> None:
    found = translated(ModuleNotFoundError("No module named 'google'", name="google"), FAR)
    assert (found.kind, found.retryable) == ("no_driver", False)
    assert "a device server needs" in found.cause
    assert "pip install 'revmark[ni]'" in found.remedy


@pytest.mark.parametrize(
    ("status", "kind", "words"),
    [
        ("UNAVAILABLE", "gone", "does not answer"),
        ("DEADLINE_EXCEEDED", "timeout", "did not answer in time"),
        ("UNIMPLEMENTED", "no_driver", "lacks a function"),
        ("INTERNAL", "protocol", "failed with INTERNAL"),
    ],
)
def test_a_server_that_fails_is_named(status: str, kind: str, words: str) -> None:
    grpc = pytest.importorskip("grpc")
    found = translated(errors.RpcError(grpc.StatusCode[status], "text"), FAR)
    assert found.kind == kind
    assert words in found.cause
    assert "box:31763" in found.cause


def test_the_border_keeps_the_cause_and_lets_our_own_mistakes_pass() -> None:
    log = logging.getLogger("revmark.test")
    with pytest.raises(DriverError) as caught, border(lambda: HERE, log):
        raise errors.DaqError("x", -201003)
    assert isinstance(caught.value.__cause__, errors.DaqError)
    with pytest.raises(ZeroDivisionError), border(lambda: HERE, log):
        print(1 / 0)


def test_the_whole_text_goes_to_the_log(caplog: pytest.LogCaptureFixture) -> None:
    log = logging.getLogger("revmark.test")
    with caplog.at_level(logging.INFO), pytest.raises(DriverError), border(lambda: HERE, log):
        raise errors.DaqError("First line.\n\nDevice: Dev1", -201003)
    assert "First line. Device: Dev1 Status Code: -201003" in caplog.text
