import itertools
import os
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from dsp.reading import Reading
from monitor.errors import InputError
from monitor.snapshot import Snapshot
from monitor.views.layout import Box
from monitor.views.painter import ensure_application, paint_picture, png_bytes, save_picture
from monitor.views.theme import THEME_NAMES, contrast_ratio, find_theme
from tests.monitor.views.synthetic_eyes import full_reading

ROOT = Path(__file__).parents[3]
SIZES = [(1280, 800), (2560, 1600), (1920, 1080), (800, 1100)]
STATES = ["pam2", "qpsk", "pam4", "64qam", "closed", "no reading", "no lock", "nothing"]


def drawn(snapshot, width=1280, height=800, theme="light"):
    ensure_application()
    from monitor.views.drawing import draw_image

    return draw_image(snapshot, width, height, theme)


def as_array(image):
    """RGB of a QImage, shape (height, width, 3), copied."""
    raw = np.frombuffer(image.constBits(), dtype=np.uint8).reshape(image.height(), image.bytesPerLine())
    return raw[:, : 4 * image.width()].reshape(image.height(), image.width(), 4)[:, :, 2::-1].copy()


def rgb(colour):
    return np.array([colour.red, colour.green, colour.blue])


def crop(pixels, box):
    return pixels[box.y : box.bottom, box.x : box.right]


def words(picture):
    return [placed.shown for placed in picture.texts]


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("state", STATES)
def test_no_text_is_cut_overlaps_another_or_leaves_its_place(snapshots, state, size):
    picture = drawn(snapshots[state], *size)
    page = Box(0, 0, *size)
    for placed in picture.texts:
        assert page.contains(placed.extent), placed
        assert placed.box.x - 2 <= placed.extent.x, placed
        assert placed.extent.right <= placed.box.right + 2, placed
        assert "…" not in placed.shown.removeprefix("…"), placed
    for one, other in itertools.combinations(picture.texts, 2):
        # the boxes are ascent and descent high; letters themselves are less
        slim = [
            Box(p.extent.x, p.extent.y + p.extent.height // 8, p.extent.width, p.extent.height * 3 // 4)
            for p in (one, other)
        ]
        assert not slim[0].overlaps(slim[1]), (one, other)


@pytest.mark.parametrize("theme", THEME_NAMES)
@pytest.mark.parametrize("state", STATES)
def test_text_is_readable_on_what_is_really_behind_it(snapshots, state, theme):
    picture = drawn(snapshots[state], theme=theme)
    pixels = as_array(picture.image)
    colours = find_theme(theme)
    for placed in picture.texts:
        area = crop(pixels, placed.extent).reshape(-1, 3)
        values, counts = np.unique(area, axis=0, return_counts=True)
        ground = values[np.argmax(counts)]
        grounds = {tuple(rgb(colours.page)): colours.page, tuple(rgb(colours.panel)): colours.panel}
        assert tuple(ground) in grounds, placed
        assert contrast_ratio(placed.colour, grounds[tuple(ground)]) >= 4.5
        # the letters are there, in their colour
        assert (np.abs(area.astype(int) - rgb(placed.colour)).sum(axis=1) < 60).any(), placed


@pytest.mark.parametrize("size", SIZES[:2])
@pytest.mark.parametrize("theme", THEME_NAMES)
def test_traces_are_drawn_where_they_run_and_the_open_eye_stays_empty(snapshots, theme, size):
    snapshot = snapshots["pam2"]
    picture = drawn(snapshot, *size, theme)
    colours = find_theme(theme)
    eye = picture.page.rails[0].eye
    area = crop(as_array(picture.image), eye)
    ink = (np.abs(area.astype(int) - rgb(colours.panel)).sum(axis=2) > 40).mean(axis=0)
    assert ink.max() > 0.2

    def at(ui, level):
        # the axis of this state runs from -2 to 2 level units
        y, x = int(eye.height * (2.0 - level) / 4.0), int(eye.width * (ui + 1.0) / 2.0)
        return np.median(area[y - 1 : y + 2, x - 1 : x + 2].reshape(-1, 3), axis=0)

    for level in (-1.0, 1.0):
        assert np.abs(at(0.08, level) - rgb(colours.panel)).sum() > 150
    for ui in (-0.08, 0.08):
        assert np.abs(at(ui, 0.0) - rgb(colours.panel)).sum() == 0
    assert np.abs(at(0.5, 0.0) - rgb(colours.panel)).sum() > 100


@pytest.mark.parametrize("best_ui", [-0.4, 0.0, 0.25])
@pytest.mark.parametrize("state", ["pam2", "qpsk"])
def test_the_best_instant_is_marked_at_its_time_in_every_plot(snapshots, state, best_ui):
    snapshot = snapshots[state]
    image = replace(snapshot.image, best_ui=best_ui, density=np.zeros_like(snapshot.image.density))
    picture = drawn(replace(snapshot, image=image))
    pixels = as_array(picture.image).astype(int)
    accent = rgb(find_theme("light").accent)
    for box in [rail.eye for rail in picture.page.rails]:
        copper = (np.abs(crop(pixels, box) - accent).sum(axis=2) < 90).sum(axis=0)
        marked = np.flatnonzero(copper > box.height / 4)
        assert marked.size > 0
        assert marked.mean() + 0.5 == pytest.approx(box.width * (best_ui + 1) / 2, abs=1.0)


def test_the_width_is_marked_on_the_zero_line_where_the_curve_crosses_it(snapshots):
    snapshot = snapshots["pam2"]
    ui = snapshot.image.column_ui
    image = replace(snapshot.image, opening_pct=80.0 - 200.0 * np.abs(ui), best_ui=0.0)
    picture = drawn(replace(snapshot, image=image))
    curve = picture.page.curve
    area = crop(as_array(picture.image).astype(int), curve)
    zero = round(curve.height * 110 / 160)
    ink = np.abs(area[zero] - rgb(find_theme("light").ink)).sum(axis=1) < 60
    held = np.flatnonzero(ink)
    assert held[0] == pytest.approx(curve.width * 0.3, abs=2)
    assert held[-1] == pytest.approx(curve.width * 0.7, abs=2)


def test_the_opening_curve_breaks_at_unknown_columns(snapshots):
    snapshot = snapshots["pam2"]
    opening = np.full(snapshot.image.opening_pct.shape, 60.0)
    ui = snapshot.image.column_ui
    opening[(ui > -0.6) & (ui < -0.4)] = np.nan
    picture = drawn(replace(snapshot, image=replace(snapshot.image, opening_pct=opening)))
    curve = picture.page.curve
    area = crop(as_array(picture.image).astype(int), curve)
    y = round(curve.height * 50 / 160)
    copper = (np.abs(area[y - 2 : y + 3] - rgb(find_theme("light").accent)).sum(axis=2) < 60).any(axis=0)
    assert copper[round(curve.width * 0.1)]
    assert not copper[round(curve.width * 0.22) : round(curve.width * 0.28)].any()


def test_a_curve_without_a_known_column_still_gives_a_picture(snapshots):
    image = snapshots["pam2"].image
    blank = replace(image, opening_pct=np.full_like(image.opening_pct, np.nan), best_ui=None)
    picture = drawn(replace(snapshots["pam2"], image=blank))
    assert "best instant" not in words(picture)
    assert "width" not in words(picture)


def test_distributions_are_drawn_beside_their_levels(snapshots):
    snapshot = snapshots["pam4"]
    picture = drawn(snapshot)
    box = picture.page.rails[0].levels
    area = crop(as_array(picture.image).astype(int), box)[:, 2:6]
    filled = (np.abs(area - rgb(find_theme("light").panel)).sum(axis=2) > 60).all(axis=1)
    from monitor.views.pixels import visible_levels

    low, high = visible_levels(snapshot.image)
    for level in snapshot.image.levels:
        assert filled[round(box.height * (high - level) / (high - low))]
    assert not filled[: box.height // 20].any()


def test_every_eye_has_its_own_opening_at_its_threshold(snapshots):
    snapshot = snapshots["64qam"]
    picture = drawn(snapshot)
    for number, rail in enumerate(picture.page.rails):
        shown = [placed.shown for placed in picture.texts if rail.levels.contains(placed.extent)]
        eyes = snapshot.reading.eyes[number * 7 : number * 7 + 7]
        assert shown == [f"{eye.opening_pct:.1f} %" for eye in eyes]


def test_the_large_figure_and_its_interval_are_the_readings(snapshots):
    reading = replace(snapshots["pam2"].reading, opening_pct=71.26, opening_low_pct=69.94, opening_high_pct=72.5)
    shown = words(drawn(replace(snapshots["pam2"], reading=reading)))
    assert "71.3" in shown
    assert "69.9 to 72.5 %" in shown


def test_missing_figures_leave_no_label(snapshots):
    shown = words(drawn(replace(snapshots["pam2"], reading=Reading(symbols=40, snr_db=12.0))))
    assert "not known" in shown
    assert "SNR" in shown
    for label in ("Width", "MER", "What closes it", "95 % interval", "Crossings", "Clock", "Carrier"):
        assert label not in shown
    assert not any("None" in text or "nan" in text for text in shown)


def test_a_closed_eye_is_said_to_be_closed_and_its_figure_is_not_clipped(snapshots):
    shown = words(drawn(snapshots["closed"]))
    assert "eye closed" in shown
    assert f"−{-snapshots['closed'].reading.opening_pct:.1f}" in shown
    assert "width" not in shown


def test_without_lock_the_picture_says_so_and_what_was_tried(snapshots):
    picture = drawn(snapshots["no lock"])
    shown = words(picture)
    assert "No timing lock" in shown
    for note in snapshots["no lock"].notes:
        assert note in shown
    assert picture.page.rails == ()
    assert not any("%" in text and text[0].isdigit() and "clipped" not in text for text in shown)


def test_figures_without_an_eye_are_still_shown(snapshots):
    shown = words(drawn(replace(snapshots["pam2"], image=None)))
    assert "SNR" in shown
    assert f"{snapshots['pam2'].reading.opening_pct:.1f}" in shown


def test_a_long_source_name_is_shortened_in_the_middle(snapshots):
    name = "/archive/skerry/" + "gauge-" * 60 + "end.sigmf-meta"
    placed = drawn(replace(snapshots["pam2"], source_text=name)).texts
    (title,) = [text for text in placed if text.text == name]
    assert title.shown.startswith("/archive/skerry/")
    assert title.shown.endswith(".sigmf-meta")
    assert "…" in title.shown
    assert title.extent.right <= title.box.right + 1


def test_names_of_any_script_and_control_characters_are_drawn_on_one_line(snapshots):
    name = "Skjærgård Pegelstånd 験潮儀 Σκόπελος\n\x07\udcff.wav"
    placed = drawn(replace(snapshots["pam2"], source_text=name, notes=(name,), link_text=name)).texts
    title = next(text for text in placed if text.text == name)
    assert title.shown.isprintable()
    assert title.shown.startswith("Skjærgård Pegelstånd 験潮儀 Σκόπελος")


def test_many_notes_end_with_how_many_are_left_out(snapshots):
    notes = tuple(f"Note number {number}." for number in range(9))
    shown = words(drawn(replace(snapshots["pam2"], notes=notes)))
    assert "Note number 2." in shown
    assert "and 6 more notes" in shown
    many = words(drawn(Snapshot(lock_text="No lock", notes=tuple(f"Tried rate {n}." for n in range(80)))))
    assert any(text.endswith("…") for text in many)


def test_figures_without_room_are_counted(snapshots):
    snapshot = snapshots["qpsk"]
    shown = words(drawn(replace(snapshot, reading=full_reading(snapshot.image, snapshot.reading.eyes)), 1280, 800))
    assert not any("more figures" in text for text in shown)
    from PySide6.QtGui import QImage, QPainter

    from monitor.views.canvas import Canvas
    from monitor.views.drawing import draw_table
    from monitor.views.wording import figure_groups

    groups = figure_groups(snapshot.reading)
    image = QImage(440, 120, QImage.Format.Format_RGB32)
    painter = QPainter(image)
    canvas = Canvas(painter, find_theme("light"), 1.0)
    draw_table(canvas, Box(0, 0, 440, 120), groups)
    painter.end()
    told = next(text.shown for text in canvas.texts if "more figures" in text.shown)
    values = {figure.value for group in groups for figure in group.figures}
    labels = {figure.label for group in groups for figure in group.figures}
    lines = sum(text.shown in labels for text in canvas.texts)
    assert int(told.split()[0]) + lines == sum(len(group.figures) for group in groups)
    assert any(text.shown in values for text in canvas.texts)


def test_light_and_dark_differ_and_each_is_the_same_twice(snapshots):
    light = as_array(paint_picture(snapshots["qpsk"]))
    dark = as_array(paint_picture(snapshots["qpsk"], theme="dark"))
    assert light.mean() > 180
    assert dark.mean() < 80
    np.testing.assert_array_equal(light, as_array(paint_picture(snapshots["qpsk"])))


@pytest.mark.parametrize("size", [(1, 1), (3, 700), (64, 40), (3000, 200), (200, 3000)])
@pytest.mark.parametrize("state", STATES)
def test_any_size_gives_a_picture_of_that_size(snapshots, state, size):
    image = paint_picture(snapshots[state], *size)
    assert (image.width(), image.height()) == size


@pytest.mark.parametrize("size", [(0, 800), (1280, -1), (1280, 16385)])
def test_impossible_sizes_are_refused(snapshots, size):
    with pytest.raises(InputError, match="cannot be drawn"):
        paint_picture(snapshots["pam2"], *size)


def test_an_unknown_theme_is_refused(snapshots):
    with pytest.raises(ValueError, match="light, dark, paper"):
        paint_picture(snapshots["pam2"], theme="sepia")


def test_a_saved_picture_is_a_png_of_the_painted_one(snapshots, tmp_path):
    from PySide6.QtGui import QImage

    path = tmp_path / "øye.picture"
    save_picture(snapshots["pam2"], path, 640, 400, "dark")
    data = path.read_bytes()
    assert data.startswith(b"\x89PNG\r\n\x1a\n")
    loaded = QImage.fromData(data).convertToFormat(QImage.Format.Format_RGB32)
    painted = paint_picture(snapshots["pam2"], 640, 400, "dark")
    np.testing.assert_array_equal(as_array(loaded), as_array(painted))
    assert png_bytes(painted) == data


@pytest.mark.parametrize("name", ["missing/eye.png", ".", "zero\0byte.png"])
def test_a_picture_that_cannot_be_written_is_one_clear_error(snapshots, tmp_path, name):
    with pytest.raises(InputError, match=r"cannot be written: .*; give another path") as caught:
        save_picture(snapshots["nothing"], f"{tmp_path}/{name}", 64, 40)
    assert "\n" not in str(caught.value)


def run_python(code, **environment):
    kept = {key: value for key, value in os.environ.items() if not key.startswith(("QT_", "DISPLAY", "WAYLAND"))}
    command = [sys.executable, "-c", code]
    return subprocess.run(
        command, cwd=ROOT, env={**kept, **environment}, capture_output=True, text=True, timeout=60, check=False
    )


def test_the_painter_loads_qt_only_for_a_picture_and_needs_no_display(tmp_path):
    code = (
        "import sys\n"
        "from monitor.snapshot import Snapshot\n"
        "from monitor.views.painter import save_picture\n"
        "import monitor.views.wording, monitor.views.pixels\n"
        "assert not any(name.startswith('PySide6') for name in sys.modules)\n"
        f"save_picture(Snapshot(lock_text='No lock'), {str(tmp_path / 'a.png')!r}, 320, 200)\n"
        "from PySide6.QtGui import QGuiApplication\n"
        "print(QGuiApplication.platformName())\n"
    )
    done = run_python(code)
    assert (done.returncode, done.stdout, done.stderr) == (0, "offscreen\n", "")
    assert (tmp_path / "a.png").stat().st_size > 500


def test_a_platform_that_is_already_chosen_is_kept():
    code = (
        "from monitor.errors import InputError\n"
        "from monitor.views.painter import ensure_application\n"
        "try:\n    ensure_application()\n"
        "except InputError:\n    pass\n"  # this platform knows no fonts
        "from PySide6.QtGui import QGuiApplication\n"
        "print(QGuiApplication.platformName())\n"
    )
    assert run_python(code, QT_QPA_PLATFORM="minimal").stdout == "minimal\n"


def test_a_machine_without_fonts_is_told_what_to_install(tmp_path):
    (tmp_path / "fonts.conf").write_text('<?xml version="1.0"?><fontconfig></fontconfig>')
    code = (
        "from monitor.errors import InputError\n"
        "from monitor.views.painter import paint_picture\n"
        "from monitor.snapshot import Snapshot\n"
        "try:\n    paint_picture(Snapshot(), 64, 40)\n"
        "except InputError as error:\n    print(error)\n"
    )
    done = run_python(code, FONTCONFIG_FILE=str(tmp_path / "fonts.conf"))
    assert "apt install fonts-dejavu-core" in done.stdout


def test_pictures_outlive_the_arrays_they_were_made_from(snapshots):
    import gc

    snapshot = snapshots["pam2"]
    own = replace(snapshot, image=replace(snapshot.image, density=snapshot.image.density.copy()))
    image = paint_picture(own)
    before = as_array(image)
    own.image.density[:] = 0
    del own
    gc.collect()
    np.testing.assert_array_equal(as_array(image), before)


def test_only_the_views_import_qt():
    for path in (ROOT / "monitor").rglob("*.py"):
        if "views" not in path.relative_to(ROOT / "monitor").parts:
            assert "PySide6" not in path.read_text(encoding="utf-8"), path
