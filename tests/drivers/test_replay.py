"""Recordings against the standard library's reader, and files that are wrong."""

import json
import struct
import wave

import numpy as np
import pytest

from config.errors import DriverError, Refusal
from daq.drivers.base import Block, ChannelPlan, DriverState, EndOfSource, ProbePlan, PulsePlan
from daq.drivers.registry import make_driver

FAN = {"files": ["fan-O.wav", "fan-T1.wav"], "full_scale": "30 V", "pace": "fast"}


@pytest.fixture
def make(plan, clock):
    made = []

    def build(folder, channels=plan, **options):
        driver = make_driver("replay", {**FAN, **options}, channels, clock=clock, folder=folder)
        made.append(driver)
        return driver

    yield build
    for driver in made:
        driver.close()


def play(driver, file=None):
    """The whole next file: its blocks and its end."""
    driver.act("next", file=file)
    blocks = []
    while isinstance(got := driver.read(), Block):
        blocks.append(got)
    assert isinstance(got, EndOfSource)
    return blocks, got


def joined(blocks):
    return np.concatenate([b.counts for b in blocks])


def write_wav(path, counts, rate=12800, width=2):
    with wave.open(str(path), "wb") as out:
        out.setnchannels(counts.shape[1])
        out.setsampwidth(width)
        out.setframerate(rate)
        out.writeframes(counts.astype("<i4" if width == 4 else "<i2").tobytes())


@pytest.mark.parametrize("name", ["fan-O", "fan-T1", "fan-T2", "fan-check", "fan-slow-roll"])
def test_recordings_are_bit_exact_beside_the_standard_library(make, recordings, name):
    driver = make(recordings)
    info = driver.open()
    blocks, end = play(driver, f"{name}.wav")
    with wave.open(str(recordings / f"{name}.wav")) as file:  # the independent reader
        raw = file.readframes(file.getnframes())
        assert info.rate_hz == file.getframerate()
    low, mid, high = np.frombuffer(raw, np.uint8).reshape(-1, 3).T.astype(np.int64)
    unsigned = low + 256 * mid + 65536 * high
    expected = np.where(unsigned >= 1 << 23, unsigned - (1 << 24), unsigned).reshape(-1, 3)
    assert np.array_equal(joined(blocks), expected)
    assert (info.dtype, info.full_scale_counts) == ("int32", (-8388608, 8388607))
    assert info.volts_per_count == (30 / 8388608,) * 3
    assert end == EndOfSource("end of source")


def test_the_vector_of_a_recording_is_that_of_its_truth(make, recordings):
    # recordings/truth.json, made by a program that shares no code with this one
    truth = json.loads((recordings / "truth.json").read_text())["runs"][0]
    driver = make(recordings)
    info = driver.open()
    volts = joined(play(driver)[0]) * info.volts_per_count[0]
    begin, end = (round(truth[key] * 12800) for key in ("dwell_from_s", "dwell_to_s"))
    level = volts[begin:end, 0] + 11.5
    at = np.flatnonzero((level[:-1] > 0) & (level[1:] <= 0))
    edges = at + level[at] / (level[at] - level[at + 1])
    n = np.arange(int(edges[0]) + 1, int(edges[-1]))
    angle = 2 * np.pi * np.interp(n, edges, np.arange(len(edges)))
    basis = np.column_stack([np.cos(angle), np.sin(angle), np.ones_like(angle)])
    fit = np.linalg.lstsq(basis, volts[begin:end, 1:][n] / 7.874e-3, rcond=None)[0]
    for probe, expected in enumerate(truth["probes"]):
        value = fit[0, probe] + 1j * fit[1, probe]
        assert abs(value) == pytest.approx(expected["amp_um_pk"], rel=0.005)
        assert np.degrees(np.angle(value)) % 360 == pytest.approx(expected["lag_deg"], abs=0.5)


@pytest.mark.parametrize("width", [2, 4])
def test_16_and_32_bits_are_kept_as_they_are(make, tmp_path, width):
    kind = np.iinfo("i2" if width == 2 else "i4")
    counts = np.random.default_rng(1).integers(kind.min, kind.max, (3000, 3), endpoint=True)
    counts[0] = kind.min, kind.max, 0
    write_wav(tmp_path / "a.wav", counts, width=width)
    driver = make(tmp_path, files=["a.wav"])
    info = driver.open()
    found = joined(play(driver)[0])
    assert np.array_equal(found, counts)
    assert (found.dtype, info.dtype) == (f"int{8 * width}",) * 2
    assert info.volts_per_count[0] == 30 / 2 ** (8 * width - 1)


def test_an_extensible_header_and_foreign_chunks_are_read(make, tmp_path):
    # layout: Microsoft's multimedia registration of WAVE_FORMAT_EXTENSIBLE (from memory)
    counts = np.arange(30, dtype="<i2").reshape(10, 3)
    guid = struct.pack("<H", 1) + bytes.fromhex("000000001000800000aa00389b71")
    fmt = struct.pack("<HHIIHHHHI", 0xFFFE, 3, 12800, 12800 * 6, 6, 16, 22, 16, 0) + guid
    note = b"LIST" + struct.pack("<I", 3) + b"abc\0"  # odd length, padded
    body = b"fmt " + struct.pack("<I", len(fmt)) + fmt + note + b"data" + struct.pack("<I", 60)
    (tmp_path / "a.wav").write_bytes(
        b"RIFF" + struct.pack("<I", 64 + len(body)) + b"WAVE" + body + counts.tobytes()
    )
    driver = make(tmp_path, files=["a.wav"])
    driver.open()
    assert np.array_equal(joined(play(driver)[0]), counts)


# --- holding ------------------------------------------------------------------------------------------


def test_holds_before_and_after_each_file(make, recordings):
    driver = make(recordings)
    driver.open()
    assert driver.read(0.2) is None
    first, _ = play(driver)
    assert driver.read(0.2) is None
    second, _ = play(driver)
    assert {b.segment for b in second} == {first[0].segment + 1}
    assert second[0].first_sample == len(joined(first))
    with pytest.raises(Refusal, match="All 2 files have been played"):
        driver.act("next")


def test_next_while_playing_is_refused_and_a_named_file_sets_the_place(make, recordings):
    driver = make(recordings, files=["fan-O.wav", "fan-T1.wav", "fan-T2.wav"])
    driver.open()
    answer = driver.act("next", file="fan-T1.wav")
    assert (answer["file"], answer["files_left"]) == ("fan-T1.wav", 1)
    with pytest.raises(Refusal, match="still playing"):
        driver.act("next")
    while not isinstance(driver.read(), EndOfSource):
        pass
    assert driver.act("next")["file"] == "fan-T2.wav"


@pytest.mark.parametrize(("pace", "seconds"), [("real", 10.5), (4, 2.625)])
def test_pace(make, recordings, clock, pace, seconds):
    driver = make(recordings, pace=pace)
    assert driver.paces_itself
    driver.open()
    begin_s = clock.monotonic()
    blocks, _ = play(driver)
    length_s = len(joined(blocks)) / 12800
    assert length_s == 10.5  # (1,209,644 - 44 bytes) of 9 a sample at 12,800 samples a second
    assert clock.monotonic() - begin_s == pytest.approx(seconds, abs=1e-6)
    assert blocks[0].mono_s - begin_s == pytest.approx(0.1 * seconds / 10.5)


def test_fast_does_not_wait(make, recordings, clock):
    driver = make(recordings)
    assert not driver.paces_itself
    driver.open()
    begin_s = clock.monotonic()
    play(driver)
    assert clock.monotonic() == begin_s


# --- columns ------------------------------------------------------------------------------------------


def test_columns_are_taken_by_number(make, recordings):
    swapped = ChannelPlan(PulsePlan("tacho", "1"), (ProbePlan("a", "3"), ProbePlan("b", "2")))
    straight, crossed = make(recordings), make(recordings, channels=swapped)
    straight.open()
    crossed.open()
    assert np.array_equal(joined(play(straight)[0])[:, [0, 2, 1]], joined(play(crossed)[0]))


def test_a_column_map_allows_more_columns_than_channels(make, recordings):
    one = ChannelPlan(PulsePlan("tacho", "A"), (ProbePlan("a", "B"),))
    driver, whole = make(recordings, channels=one, columns={"A": 1, "B": 3}), make(recordings)
    driver.open()
    whole.open()
    assert np.array_equal(joined(play(driver)[0]), joined(play(whole)[0])[:, [0, 2]])


@pytest.mark.parametrize(("probe_input", "columns"), [("0", {}), ("4", {}), ("x", {}), ("B", {"B": 9})])
def test_an_input_without_a_column_is_refused(make, recordings, probe_input, columns):
    plan = ChannelPlan(PulsePlan("tacho", "1"), (ProbePlan("a", "2"), ProbePlan("b", probe_input)))
    driver = make(recordings, channels=plan, columns=columns)
    driver.open()
    with pytest.raises(DriverError, match=f"no column for the input '{probe_input}'") as caught:
        driver.act("next")
    assert caught.value.kind == "config"


# --- wrong files --------------------------------------------------------------------------------------


def spoil(recordings, tmp_path):
    good = (recordings / "fan-O.wav").read_bytes()
    counts = np.zeros((1280, 3))
    (tmp_path / "good.wav").write_bytes(good)
    (tmp_path / "short.wav").write_bytes(good[:-1000])
    (tmp_path / "header.wav").write_bytes(good[:30])
    (tmp_path / "empty.wav").write_bytes(b"")
    (tmp_path / "text.wav").write_text("not a recording at all")
    write_wav(tmp_path / "two.wav", counts[:, :2], width=4)
    write_wav(tmp_path / "rate.wav", counts, rate=25600, width=4)
    write_wav(tmp_path / "16bit.wav", counts, width=2)
    (tmp_path / "nothing.wav").write_bytes(good[:40] + struct.pack("<I", 0))
    (tmp_path / "float.wav").write_bytes(
        good[:20] + struct.pack("<HHIIHH", 3, 3, 12800, 153600, 12, 32) + good[36:]
    )
    (tmp_path / "8bit.wav").write_bytes(
        good[:20] + struct.pack("<HHIIHH", 1, 3, 12800, 38400, 3, 8) + good[36:]
    )
    (tmp_path / "lies.wav").write_bytes(
        good[:20] + struct.pack("<HHIIHH", 1, 3, 12800, 38400, 4, 24) + good[36:]
    )


WRONG = [
    ("short.wav", "lost_data", r"truncated: it announces 1209600 bytes of samples and holds 1208600"),
    ("header.wav", "lost_data", r"truncated: it has no samples"),
    ("nothing.wav", "lost_data", r"truncated: it has no samples"),
    ("empty.wav", "config", r"is no WAV file"),
    ("text.wav", "config", r"is no WAV file"),
    ("two.wav", "config", r"has samples of 32 bits where 24 are expected"),
    ("rate.wav", "config", r"has 25600 samples a second where 12800 are expected"),
    ("16bit.wav", "config", r"has samples of 16 bits where 24 are expected"),
    ("float.wav", "config", r"holds 32-bit float"),
    ("8bit.wav", "config", r"holds format 0x1 of 8 bits"),
    ("lies.wav", "config", r"contradicts itself"),
    ("absent.wav", "config", r"There is no file .*absent\.wav"),
    (".", "config", r"cannot be read"),
]


@pytest.mark.parametrize(("name", "kind", "words"), WRONG, ids=[w[0] for w in WRONG])
def test_a_wrong_file_is_refused_and_the_driver_holds_on(make, recordings, tmp_path, name, kind, words):
    spoil(recordings, tmp_path)
    driver = make(tmp_path, files=["good.wav"])
    driver.open()
    with pytest.raises(DriverError, match=words) as caught:
        driver.act("next", file=name)
    assert caught.value.kind == kind
    assert caught.value.remedy
    assert driver.state is DriverState.OPEN
    assert driver.read(0.1) is None
    assert len(play(driver)[0]) == 105  # 10.5 s in blocks of 0.1 s


def test_a_wrong_number_of_channels_is_refused(make, recordings):
    plan = ChannelPlan(PulsePlan("tacho", "1"), (ProbePlan("probe 1", "2"),))
    driver = make(recordings, channels=plan)
    driver.open()
    with pytest.raises(DriverError, match=r"fan-O\.wav has 3 channels, and the stand file has 2") as caught:
        driver.act("next")
    assert caught.value.kind == "config"


def test_the_first_readable_file_gives_the_format_unless_the_options_do(make, recordings, tmp_path):
    spoil(recordings, tmp_path)
    assert make(tmp_path, files=["absent.wav", "good.wav"]).open().rate_hz == 12800
    assert make(tmp_path, files=[], rate_hz=25600, bits=16).open().dtype == "int16"
    with pytest.raises(DriverError, match="None of the files can be played"):
        make(tmp_path, files=["absent.wav", "text.wav"]).open()


def test_a_file_cut_while_it_plays_ends_with_its_error(make, recordings, tmp_path):
    spoil(recordings, tmp_path)
    driver = make(tmp_path, files=["good.wav"])
    driver.open()
    driver.act("next")
    driver.read()
    with (tmp_path / "good.wav").open("r+b") as file:
        file.truncate(200_000)
    while isinstance(got := driver.read(), Block):
        pass
    assert isinstance(got, EndOfSource)
    assert got.error is not None
    assert (got.error.kind, driver.state) == ("lost_data", DriverState.OPEN)


# --- CSV ----------------------------------------------------------------------------------------------

HEAD = "# rate_hz = 1000, full_scale = 30 V\ntacho,probe 1,probe 2\n"
CSV_PLAN = ChannelPlan(PulsePlan("once", "tacho"), (ProbePlan("a", "probe 2"), ProbePlan("b", "probe 1")))


def csv(make, tmp_path, text, **options):
    (tmp_path / "a.csv").write_text(text)
    return make(tmp_path, channels=CSV_PLAN, files=["a.csv"], **options)


def test_csv_volts_become_counts_of_24_bits(make, tmp_path):
    driver = csv(make, tmp_path, HEAD + "-8,-10.5,1e0\n-15.0, 30 ,-31\n\n")
    info = driver.open()
    blocks, end = play(driver)
    # hand calculation: -8 / 30 * 2**23 = -2236962.13; 30 V is one count beyond the range, -31 V far
    assert joined(blocks).tolist() == [[-2236962, 279620, -2936013], [-4194304, -8388608, 8388607]]
    assert (info.rate_hz, info.dtype, end.error) == (1000.0, "int32", None)


def test_csv_without_a_comment_takes_rate_and_scale_of_the_options(make, tmp_path):
    driver = csv(make, tmp_path, HEAD.split("\n", 1)[1] + "1,2,3\n", rate_hz=500)
    assert driver.open().rate_hz == 500
    assert len(joined(play(driver)[0])) == 1


@pytest.mark.parametrize("line", ["1,2", "1,2,3,4", "1,2,x", "1,2,nan", "1;2;3", "1,2,inf", "1,,3"])
def test_a_bad_row_ends_the_file_and_is_named(make, tmp_path, line):
    rows = "1,2,3\n" * 150 + line + "\n" + "1,2,3\n" * 10
    driver = csv(make, tmp_path, HEAD + rows)
    driver.open()
    blocks, end = play(driver)
    assert len(joined(blocks)) == 100  # the first block; the bad row is in the second
    assert end.error.kind == "lost_data"
    assert "Line 153 of the file" in end.error.cause
    assert driver.read(0.1) is None


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("1,2,3\n4,5,6\n", "no header"),
        ("", "no header"),
        ("tacho,probe 1,probe 2\n1,2,3\n", "does not say its sample rate"),
        ("# rate_hz = fast\ntacho,probe 1,probe 2\n1,2,3\n", "the rate 'fast'"),
        (HEAD.replace("30 V", "10 V") + "1,2,3\n", "full scale of 10 V where the stand file has 30 V"),
        (HEAD.replace("30 V", "30") + "1,2,3\n", "full scale that cannot be read"),
    ],
)
def test_a_bad_csv_head_is_refused(make, tmp_path, text, words):
    with pytest.raises(DriverError, match=words):
        csv(make, tmp_path, text).open()
