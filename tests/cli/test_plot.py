"""``revmark plot polar``: where a vector is drawn, what is refused, and what a picture says."""

from __future__ import annotations

import cmath
import importlib.util
import json
import math
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import replace
from datetime import UTC
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from PIL import Image
from scipy import ndimage

from cli.main import main
from cli.plots import polar as plots
from cli.plots import words
from cli.plots.geometry import (
    Box,
    Wanted,
    at_angle,
    clearest_angle,
    place_labels,
    plot_point,
    plot_vector,
    ring_step,
    rings,
)
from cli.plots.page import INK, shorten, text_width, wrap
from config.units import parse_display
from store import consult
from store.casework_polar import PolarPicture, polar_picture
from store.database import create_store
from store.records import Label, MarkPosition, PieceDraft, Sense, WeightPlane

KIT_FILE = Path(__file__).parent.parent / "store" / "store_kit.py"
UM_PP = parse_display("um pp", "displacement")
CLOCKWISE = Sense("clockwise", "drive")


def _kit() -> Any:
    """The builders of the store's tests, by their file: test folders are no packages."""
    spec = importlib.util.spec_from_file_location("plot_store_kit", KIT_FILE)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


kit = _kit()


def phasor(amplitude: float, degrees: float) -> complex:
    return cmath.rect(amplitude, math.radians(degrees))


def degrees_of(value: complex) -> float:
    return math.degrees(cmath.phase(value)) % 360


@pytest.fixture
def stand(tmp_path: Path) -> Iterator[Any]:
    """A store bay.sqlite with the machine F-204, and the stand file bay.toml that names it."""
    file = tmp_path / "bay.toml"
    main_code("stand", "new", str(file), "--like", "replay")
    file.write_text(file.read_text() + '\n[store]\npath = "bay.sqlite"\n')
    create_store(tmp_path / "bay.sqlite", clock=kit.FakeClock(), software="revmark test")
    made = kit.Stand(tmp_path / "bay.sqlite", kit.FakeClock())
    yield made
    made.close()


def main_code(*arguments: str) -> int:
    try:
        main(list(arguments))
    except SystemExit as ended:
        return int(ended.code or 0)
    return 0


def plot(stand: Any, *arguments: str, job: str = "0142") -> int:
    return main_code("plot", "polar", job, "--stand", str(stand.path.with_name("bay.toml")), *arguments)


def both(first: complex, second: complex) -> dict[str, Any]:
    return {"vectors": (kit.vector(first), kit.vector(second, "probe 2"))}


def picture(stand: Any, **how: Any) -> PolarPicture:
    story = stand.history.job_story("0142")
    judged = [r for run in story.runs for r in run.readings if r.label in (Label.CHECK, Label.TRIM)]
    verdicts = [consult.verdict(stand.history, "0142", r.id) for r in judged]
    return polar_picture(story, verdicts, **how)


def vector_of(shown: PolarPicture, role: str, channel: int = 0) -> complex:
    found = [v.value for v in shown.channels[channel].vectors if v.role == role]
    assert len(found) == 1
    return found[0]


# --- pure geometry: by hand, 0 deg at the top ----------------------------------------------------------


@pytest.mark.parametrize(
    ("lag_deg", "sense", "x", "y"),
    [
        (0, "counterclockwise", 0.0, 1.0),
        (90, "counterclockwise", -1.0, 0.0),
        (180, "counterclockwise", 0.0, -1.0),
        (270, "counterclockwise", 1.0, 0.0),
        (30, "counterclockwise", -0.5, 0.8660254037844386),
        (0, "clockwise", 0.0, 1.0),
        (90, "clockwise", 1.0, 0.0),
        (270, "clockwise", -1.0, 0.0),
        (210, "clockwise", -0.5, -0.8660254037844386),
    ],
)
def test_where_a_lag_is_drawn(lag_deg: float, sense: str, x: float, y: float) -> None:
    assert plot_point(phasor(2.0, lag_deg), sense) == pytest.approx((2 * x, 2 * y), abs=1e-12)
    assert at_angle(2.0, lag_deg, sense) == pytest.approx((2 * x, 2 * y), abs=1e-12)
    assert plot_vector((2 * x, 2 * y), sense) == pytest.approx(phasor(2.0, lag_deg), abs=1e-12)


@pytest.mark.parametrize(
    ("largest", "expected"),
    [
        (16.7, (5, 10, 15, 20)),
        (9.7, (2, 4, 6, 8, 10)),
        (100.0, (25, 50, 75, 100, 125)),
        (0.03, (0.01, 0.02, 0.03, 0.04)),
        (0.0, (1, 2)),
    ],
)
def test_rings_are_round_and_hold_the_longest_vector(largest: float, expected: tuple[float, ...]) -> None:
    assert rings(largest) == pytest.approx(expected)
    assert rings(largest)[0] == pytest.approx(ring_step(largest))


def test_ring_labels_keep_clear_of_the_vectors() -> None:
    busy = [at_angle(1.0, d, "clockwise") for d in range(0, 300, 5)]
    assert clearest_angle(busy, "clockwise", [0.5, 1.0]) in (315.0, 345.0)


def test_labels_of_one_spot_lie_apart_and_inside() -> None:
    wanted = [Wanted((-0.3, 0.1), 0.9, 0.15)] * 6
    boxes = place_labels(wanted, centre=(0.0, 0.0), radius=1.9)
    assert all(a.overlap(b) == 0 for i, a in enumerate(boxes) for b in boxes[:i])
    assert all(math.hypot(*corner) < 1.9 for box in boxes for corner in box.corners())


def test_a_label_keeps_off_what_is_taken() -> None:
    taken = Box(0.0, -0.4, 1.2, 0.4)
    (box,) = place_labels([Wanted((0.2, 0.0), 0.5, 0.15)], centre=(0.0, 0.0), radius=1.9, taken=[taken])
    assert box.overlap(taken) == 0


def test_long_text_is_shortened_and_wrapped() -> None:
    assert text_width("W" * 20) > 2.0 > text_width("i" * 20)
    assert text_width(shorten("W" * 40, 1.0)) <= 1.0
    lines = wrap("plane 1: 1.9 g in hole 17, " * 8, 3.0)
    assert all(text_width(line) <= 3.0 for line in lines)
    assert " ".join(lines).split() == ("plane 1: 1.9 g in hole 17, " * 8).split()


# --- pixels: measured off the PNG with nothing but the colours -----------------------------------------


def pixels(file: Path) -> NDArray[np.int16]:
    return np.asarray(Image.open(file).convert("RGB"), dtype=np.int16)


def like(image: NDArray[np.int16], colour: str, slack: int = 12) -> NDArray[np.bool_]:
    wanted = [int(colour[i : i + 2], 16) for i in (1, 3, 5)]
    return np.asarray((np.abs(image - wanted) <= slack).all(axis=2))


def rim_of(image: NDArray[np.int16]) -> tuple[float, float, float]:
    """Centre column, centre row and radius of the one circle on the page, from its rim's own colour."""
    mask = like(image, plots.RIM, 2)
    named, _ = ndimage.label(ndimage.binary_dilation(mask, iterations=6))  # strokes cross the rim
    sizes = np.bincount(named.ravel())
    rows, columns = np.nonzero((named == 1 + int(np.argmax(sizes[1:]))) & mask)
    x, y = (columns.min() + columns.max()) / 2, (rows.min() + rows.max()) / 2
    return float(x), float(y), float(columns.max() - columns.min()) / 2


def blob(mask: NDArray[np.bool_]) -> tuple[float, float]:
    """(column, row) of the middle of the only thick spot: lines and strokes are eaten away first."""
    thick = ndimage.binary_erosion(mask, iterations=4)
    named, count = ndimage.label(ndimage.binary_dilation(thick, iterations=2))
    assert count == 1
    row, column = ndimage.center_of_mass(named == 1)
    return float(column), float(row)


def measured(image: NDArray[np.int16], role: str, rim_um_pp: float, *, lag_left: bool) -> tuple[float, float]:
    """(um pp, lag in deg) of a role's marker. ``lag_left``: lag grows counterclockwise from the top."""
    x, y, radius = rim_of(image)
    rows, columns = np.indices(image.shape[:2])
    inside = np.hypot(columns - x, rows - y) < 0.97 * radius
    column, row = blob(like(image, plots.LOOKS[role].colour) & inside)
    right, up = column - x, y - row
    lag = math.degrees(math.atan2(-right if lag_left else right, up)) % 360
    return math.hypot(right, up) / radius * rim_um_pp, lag


@pytest.mark.parametrize("clockwise", [True, False])
def test_vectors_read_off_the_picture_are_true(stand: Any, tmp_path: Path, clockwise: bool) -> None:
    """Three vectors of 0-peak 50, 30 and 20 um: twice that in um pp, on a rim of 125 um pp (25 a ring)."""
    stand.mount(rotation=Sense("clockwise" if clockwise else "counterclockwise", "drive"))
    stand.run(Label.O, **both(phasor(50, 200), phasor(1, 0)))
    stand.fit()
    stand.run(Label.O_T, **both(phasor(30, 310), phasor(1, 0)))
    stand.run(Label.CHECK, **both(phasor(20, 77), phasor(1, 0)))
    file = tmp_path / "job.png"
    assert plot(stand, "-o", str(file), "--channel", "probe 1", "--dpi", "200") == 0
    image = pixels(file)
    for role, um_pp, lag in (("O", 100.0, 200.0), ("O+T", 60.0, 310.0), ("check", 40.0, 77.0)):
        size, angle = measured(image, role, 125.0, lag_left=clockwise)
        assert size == pytest.approx(um_pp, rel=0.03), role
        assert abs((angle - lag + 180) % 360 - 180) < 2.0, role


@pytest.mark.parametrize("clockwise", [True, False])
def test_the_rotation_arrow_points_as_the_rotor_turns(stand: Any, tmp_path: Path, clockwise: bool) -> None:
    """In the upper right corner clockwise is down and to the right: its head lies beyond 45 deg."""
    stand.mount(rotation=Sense("clockwise" if clockwise else "counterclockwise", "drive"))
    stand.run(Label.O, **both(phasor(50, 200), phasor(1, 0)))
    file = tmp_path / "job.png"
    assert plot(stand, "-o", str(file), "--channel", "probe 1", "--dpi", "200") == 0
    image = pixels(file)
    x, y, radius = rim_of(image)
    rows, columns = np.indices(image.shape[:2])
    away = np.hypot(columns - x, rows - y) / radius
    corner = (columns > x) & (rows < y) & (away > 1.16) & (away < 1.32)
    column, row = blob(like(image, INK, 4) & corner)
    from_top = math.degrees(math.atan2(column - x, y - row))
    assert (from_top > 50) if clockwise else (from_top < 40)


def test_the_end_seen_from_decides_how_it_looks(stand: Any) -> None:
    """Clockwise from the free end is counterclockwise from the drive end, which the stand's angles use."""
    stand.mount(rotation=Sense("clockwise", "free"))
    stand.run(Label.O)
    shown = picture(stand)
    assert (shown.turns, shown.angles_grow) == ("counterclockwise", "clockwise")
    assert words.senses(shown) == (
        "Rotation: counterclockwise seen from drive, and so drawn. Lag and weight angles grow against "
        "rotation (clockwise here) from 0 deg at the top."
    )


# --- what a picture holds ------------------------------------------------------------------------------


ONE_PLANE = replace(
    kit.MACHINE,
    serial="P-7",
    model_code="ONE",
    grade_mm_s=None,
    permissible_gmm=100.0,
    bearing_loads_kg=(),
    planes=(WeightPlane(1, 100.0, 0, CLOCKWISE),),
)


def one_plane_job(stand: Any, *, slow: complex = 0j) -> None:
    """METHODS example 1.0 [D], tenfold in um: V0 26@312, V1 17@251 with 1@0 (1000 g.mm); then half of w."""
    stand.ledger.add_machine(ONE_PLANE, "ana")
    stand.mount(serial="P-7", marks=())
    if slow:
        stand.run(Label.SLOW_ROLL, speed_hz=4.0, **both(slow, slow))
    stand.run(Label.O, **both(phasor(26, 312), phasor(26, 312)))
    stand.ledger.fit(PieceDraft(1, 10.0, angle_deg=0.0), "ana", None)
    stand.run(Label.O_T, **both(phasor(17, 251), phasor(17, 251)))
    stand.ledger.remove(1, "ana", every=True)
    stand.ledger.fit(PieceDraft(1, 5.61290269345, angle_deg=320.061389485), "ana", None)
    stand.run(Label.CHECK, **both(phasor(12, 300), phasor(12, 300)))


def test_effect_prediction_and_tolerance_circle_of_one_plane(stand: Any) -> None:
    """T 23.1609217369@171.938610515 [METHODS 1.0, tenfold]; half of w leaves half of V0; |alpha| 100 g.mm."""
    one_plane_job(stand)
    shown = picture(stand)
    (effect,) = shown.channels[0].effects
    assert abs(effect.value) == pytest.approx(23.1609217369, rel=1e-9)
    assert degrees_of(effect.value) == pytest.approx(171.938610515, abs=1e-7)
    assert effect.weights == {1: pytest.approx(1000.0)}
    assert vector_of(shown, "predicted") == pytest.approx(phasor(13, 312), rel=1e-8)
    assert vector_of(shown, "check") == pytest.approx(phasor(12, 300), rel=1e-12)
    circle = shown.channels[0].circle
    assert circle is not None
    assert circle.centre == 0
    assert circle.radius == pytest.approx(2.31609217369, rel=1e-8)


def test_the_circle_lies_about_the_slow_roll_that_the_verdict_takes_off(stand: Any) -> None:
    one_plane_job(stand, slow=phasor(0.3, 80))
    circle = picture(stand).channels[0].circle
    assert circle is not None
    assert circle.centre == pytest.approx(phasor(0.3, 80), rel=1e-12)


def test_the_circle_is_drawn_before_a_check_too(stand: Any) -> None:
    stand.ledger.add_machine(ONE_PLANE, "ana")
    stand.mount(serial="P-7", marks=())
    stand.run(Label.O, **both(phasor(26, 312), phasor(26, 312)))
    assert picture(stand).channels[0].circle is None
    stand.ledger.fit(PieceDraft(1, 10.0, angle_deg=0.0), "ana", None)
    stand.run(Label.O_T, **both(phasor(17, 251), phasor(17, 251)))
    circle = picture(stand).channels[0].circle
    assert circle is not None
    assert circle.radius == pytest.approx(2.31609217369, rel=1e-8)


def two_plane_job(stand: Any) -> None:
    """O 10@0; plane 1 tried and kept: 14@20; plane 2 tried beside it: 9@50; then both left on: check."""
    stand.mount()
    stand.run(Label.O, **both(phasor(10, 0), phasor(4, 90)))
    stand.fit(3.0, 16)
    stand.run(Label.O_T, **both(phasor(14, 20), phasor(6, 100)))
    stand.ledger.fit(PieceDraft(2, 2.0, angle_deg=90.0), "ana", None)
    stand.run(Label.O_T, **both(phasor(9, 50), phasor(8, 200)))
    stand.run(Label.CHECK, **both(phasor(9, 51), phasor(8, 201)))


def test_two_planes_have_no_circle_but_a_line_each(stand: Any) -> None:
    two_plane_job(stand)
    shown = picture(stand)
    assert [c.circle for c in shown.channels] == [None, None]
    said = [line.text for line in words.foot(shown, 12.0)]
    assert "No tolerance circle: with two planes each probe sees the unbalance of both." in said
    lines = [t for t in said if t.startswith("plane ") and "residual" in t]
    assert [t[:7] for t in lines] == ["plane 1", "plane 2"]
    assert all("permissible 318.3 g.mm" in t for t in lines)  # G 2.5, 40 kg, 25 Hz: 636.6 / 2


def test_a_kept_trial_weight_has_its_effect_from_the_run_before(stand: Any) -> None:
    two_plane_job(stand)
    first, second = picture(stand).channels[0].effects
    assert (first.since_run, first.run) == ("0142/1", "0142/2")
    assert (second.since_run, second.run) == ("0142/2", "0142/3")
    assert second.value == pytest.approx(phasor(9, 50) - phasor(14, 20))
    assert list(second.weights) == [2]


def test_the_weights_stand_by_hole_at_each_run(stand: Any) -> None:
    """Hole 16 of 24 is 225 deg from hole 1, the mark 30: 195 deg, counted as the holes against rotation."""
    two_plane_job(stand)
    said = [
        (line.lead, line.text.replace("\N{NO-BREAK SPACE}", " ")) for line in words.foot(picture(stand), 12)
    ]
    assert ("O 0142/1", "none") in said
    assert ("O+T 0142/2", "plane 1: 3 g in hole 16 (195.0 deg)") in said
    assert ("check 0142/4", "plane 1: 3 g in hole 16 (195.0 deg); plane 2: 2 g at 90.0 deg") in said


def test_a_prediction_turns_with_the_frame_of_its_reading(stand: Any) -> None:
    """Mounted again with the mark 30 deg further against rotation: every angle is 30 deg less."""
    two_plane_job(stand)
    before = vector_of(picture(stand), "predicted")
    stand.mount(marks=(MarkPosition(1, 60.0),), carry_over=True, mark_change="moved")
    stand.run(Label.O, **both(phasor(9, 21), phasor(8, 171)))
    after = picture(stand)
    assert vector_of(after, "check") == pytest.approx(phasor(9, 21), rel=1e-9)
    assert vector_of(after, "predicted") == pytest.approx(before * phasor(1, -30), rel=1e-9)


def test_a_job_that_only_has_an_o_run(stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    stand.mount()
    stand.run(Label.O, **both(phasor(50, 200), phasor(1, 0)))
    assert plot(stand, "-o", str(tmp_path / "o.png")) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "o.png: job 0142, probe 1, probe 2 at 1500 r/min" in out
    assert "rotation counterclockwise seen from drive; angles grow clockwise" in out
    assert "No check run yet, so no residual unbalance to judge." in [
        line.text for line in words.foot(picture(stand), 12.0)
    ]


def test_short_vectors_are_drawn_again_enlarged(stand: Any) -> None:
    stand.mount()
    stand.run(Label.O, **both(phasor(50, 200), phasor(5, 0)))
    stand.run(Label.CHECK, **both(phasor(0.8, 40), phasor(4, 10)))
    drawing = plots.draw(picture(stand), {"probe 1": UM_PP, "probe 2": UM_PP}, UTC)
    assert [(d.channel, d.full_scale) for d in drawing.dials] == [("probe 1", 125.0), ("probe 2", 12.5)]
    assert [(d.channel, d.full_scale) for d in drawing.insets] == [("probe 1", 2.0)]


def test_panels_side_by_side_then_in_a_grid() -> None:
    assert [plots.columns(n) for n in (1, 2, 4, 5, 9, 10, 16)] == [1, 2, 2, 3, 3, 4, 4]


def test_names_are_drawn_as_they_are(stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Dollar signs are no mathematics, and a letter the font lacks is said."""
    stand.ledger.add_machine(replace(kit.MACHINE, serial="$\\frac{1$ \u8f6c"), "ana")
    stand.mount(serial="$\\frac{1$ \u8f6c")
    stand.run(Label.O)
    assert plot(stand, "-o", str(tmp_path / "n.png")) == 0
    assert "not in the font" in capsys.readouterr().err


# --- files and refusals --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "starts"), [("job.svg", b"<?xml"), ("job.PDF", b"%PDF-"), ("job.png", b"\x89PNG\r\n")]
)
def test_the_ending_says_how(stand: Any, tmp_path: Path, name: str, starts: bytes) -> None:
    two_plane_job(stand)
    assert plot(stand, "-o", str(tmp_path / name)) == 0
    data = (tmp_path / name).read_bytes()
    assert data.startswith(starts)
    assert len(data) > 10_000


def test_json_has_the_vectors(stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    two_plane_job(stand)
    capsys.readouterr()
    assert plot(stand, "-o", str(tmp_path / "j.png"), "--json", "--channel", "probe 2") == 0
    told = json.loads(capsys.readouterr().out)
    assert (told["angles_grow"], told["seen_from"]) == ("clockwise", "drive")
    (channel,) = told["channels"]
    first = channel["vectors"][0]
    assert (first["role"], first["run"], first["unit"]) == ("O", "0142/1", "um")
    assert (first["amplitude_pk"], first["lag_deg"]) == pytest.approx((4.0, 90.0))


@pytest.mark.parametrize(
    ("arguments", "code", "said"),
    [
        (["-o", "job.jpeg"], 2, "end it in .png, .svg or .pdf"),
        (["-o", "job"], 2, "end it in .png, .svg or .pdf"),
        ([], 2, "Missing option '-o'"),
        (["-o", "job.png"], 1, "has no O run at 1500 r/min"),
        (["-o", "job.png", "--rpm", "900"], 1, "has no O run at 900 r/min"),
        (["-o", "no-such/job.png"], 1, "There is no folder no-such."),
    ],
)
def test_what_is_refused_makes_no_file(
    stand: Any,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    arguments: list[str],
    code: int,
    said: str,
) -> None:
    monkeypatch.chdir(tmp_path)
    stand.mount()
    stand.run(None)
    before = sorted(tmp_path.iterdir())
    assert plot(stand, *arguments) == code
    assert said in " ".join(capsys.readouterr().err.split())
    assert sorted(tmp_path.iterdir()) == before


def test_a_channel_or_job_that_is_not_there(
    stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    two_plane_job(stand)
    file = tmp_path / "job.png"
    assert plot(stand, "-o", str(file), "--channel", "probe 9") == 1
    assert "'probe 9' at 1500 r/min. Its channels: probe 1, probe 2." in capsys.readouterr().err
    assert plot(stand, "-o", str(file), job="0999") == 1
    assert not file.exists()


def test_a_file_that_exists_is_kept_unless_forced(
    stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    two_plane_job(stand)
    file = tmp_path / "job.png"
    file.write_bytes(b"an older picture")
    assert plot(stand, "-o", str(file)) == 1
    assert "--force" in capsys.readouterr().err
    assert file.read_bytes() == b"an older picture"
    assert plot(stand, "-o", str(file), "--force") == 0
    assert file.read_bytes().startswith(b"\x89PNG")


def test_a_full_disk_leaves_the_older_picture(
    stand: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    two_plane_job(stand)
    file = tmp_path / "job.svg"
    file.write_bytes(b"an older picture")
    before = sorted(tmp_path.iterdir())

    def full(self: Path, target: Path) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "replace", full)
    assert plot(stand, "-o", str(file), "--force") == 1
    assert "No space left on device" in capsys.readouterr().err
    assert file.read_bytes() == b"an older picture"
    assert sorted(tmp_path.iterdir()) == before


def test_help_draws_nothing() -> None:
    code = (
        "import sys; from cli.main import main\n"
        "try: main(['plot', 'polar', '--help'])\n"
        "except SystemExit: pass\n"
        "print([m for m in ('matplotlib', 'numpy', 'sqlalchemy', 'pydantic') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"
