from dataclasses import replace

import numpy as np
import pytest

from monitor.state import AlarmLine, HistoryPoint, LiveState, Mark
from monitor.views.history import AlarmSpan
from monitor.views.terminal_colours import Look
from monitor.views.terminal_page import Shown, compose, figures_line
from tests.monitor.views.live_states import make_states

DEPTHS = (0, 16, 256, 1 << 24)
SIZES = ((1, 1), (7, 3), (40, 12), (64, 20), (80, 24), (132, 43))


@pytest.fixture(scope="module")
def states():
    return make_states()


def text_of(state, columns=80, rows=24, look=Look(), **shown):  # noqa: B008
    return "\n".join(compose(state, columns, rows, look, Shown(**shown)).lines())


@pytest.mark.parametrize("size", SIZES, ids=str)
@pytest.mark.parametrize("depth", [0, 1 << 24])
@pytest.mark.parametrize("unicode", [False, True], ids=["ascii", "unicode"])
def test_every_state_fits_every_screen(states, size, depth, unicode):
    for state in states.values():
        for shown in (Shown(), Shown(helping=True), Shown(rail=1, held=True), Shown(entry="a b 漢" * 30)):
            screen = compose(state, *size, Look(depth, unicode), shown)
            assert (screen.columns, screen.rows) == size
            characters = "".join(screen.lines())
            assert characters.isprintable()
            assert unicode or characters.isascii()
            if depth == 0:
                assert (screen.fore == -1).all()
                assert (screen.back == -1).all()


def test_the_page_at_eighty_by_twenty_four_has_all_that_is_asked_of_it(states):
    text = text_of(states["busy"])
    for words in (
        "Opening",
        "95 %: 69.2 to 71.9 %",
        "better",
        "+4.2 points",
        "“feed turned east”",
        "+2.9 to +5.5",
        "Best so far",
        "84.1 %",
        "SNR",
        "24.6 dB",
        "What closes the eye, in points",
        "17.8",
        "high: opening_pct < 70",
        "and 2 more",
        "I rail",
        "Q rail",
        "the whole watch",
        "▲ mark",
        "× lost",
        "Neighbouring symbols close the eye most",
        "samples lost: 1,024",
        "1,024 samples lost",
        "37 % of traces drawn",
        "Space mark",
        "Ctrl+Q end",
    ):
        assert words in text, words


def test_a_large_screen_has_every_alarm(states):
    text = text_of(states["busy"], 132, 43)
    assert "high: opening_pct < 70" in text
    assert "medium: clipping" in text
    assert "low: samples lost" in text


def test_a_very_large_screen_has_every_figure_and_the_budget(states):
    text = text_of(states["busy"], 240, 95)
    for words in ("What closes the eye, in points", "17.8", "Crossings", "Duty-cycle distortion", "I/Q skew"):
        assert words in text, words


@pytest.mark.parametrize("size", [(63, 24), (80, 19), (40, 12)], ids=str)
def test_too_small_a_screen_says_so_with_the_figure_and_the_alarm(states, size):
    text = text_of(states["busy"], *size)
    flat = " ".join(text.split())
    assert "Too small for the eye" in flat
    assert f"{size[0]} × {size[1]} characters, 64 × 20 are needed" in flat
    assert "Opening 70.6 %" in flat
    assert "better, +4.2 points" in flat
    assert "opening_pct < 70" in flat


def test_without_lock_words_stand_in_the_eyes_place(states):
    text = text_of(states["no lock"])
    assert "Lock lost at 6:45" in text
    assert "qpsk: no line at the symbol rate in the" in text
    assert "not known" in text
    assert "no lock" in text.splitlines()[1]


def test_before_anything_came_the_page_says_what_is_awaited():
    text = text_of(LiveState(make_states()["waiting"].snapshot, searching="waiting for samples"))
    assert "Searching" in text
    assert "waiting for samples" in text
    assert "No alarms" in text


def test_an_ended_stream_says_so(states):
    text = text_of(states["ended"])
    assert "The stream has ended" in text
    assert "ended" in text.splitlines()[1]


def test_a_closed_eye_says_so_with_its_negative_opening(states):
    calm = states["calm"]
    reading = replace(
        calm.snapshot.reading, opening_pct=-12.3, opening_low_pct=-14.0, opening_high_pct=-10.0, closure_db=None
    )
    closed = replace(calm, snapshot=replace(calm.snapshot, reading=reading), change=None, marks=())
    text = text_of(closed)
    assert "closed" in text
    assert "95 %: −14.0 to −10.0 %" in text
    # the minus, and the digits in rows of half blocks
    assert "▀▀▀" in text


def test_a_worse_change_is_told_by_word_and_sign_not_by_colour_alone(states):
    for depth in DEPTHS:
        text = text_of(states["worse"], look=Look(depth))
        assert "worse" in text
        assert "−7.2 points" in text


def test_long_names_give_way_and_hide_nothing_else(states):
    busy = states["busy"]
    long = "north mast, lower feed, " * 12
    state = replace(
        busy,
        snapshot=replace(busy.snapshot, source_text="tcp://" + "a" * 300, link_text=long),
        marks=(Mark(1.0, long, 60.0, 59.0, 61.0),),
        alarms=(AlarmLine(long, "high", "unacknowledged", 2.0, long),),
        notices=(long,),
    )
    lines = compose(state, 80, 24, Look()).lines()
    assert "…" in lines[0]
    assert "1,024 samples lost" in lines[0]
    assert lines[1].endswith("traces fade in 2 s")
    text = "\n".join(lines)
    assert "+2.9 to +5.5" in text
    assert "SNR" in text


def test_wide_characters_take_two_cells_and_move_nothing(states):
    busy = states["busy"]
    name = "漁港の潮位計" * 20
    state = replace(
        busy,
        snapshot=replace(busy.snapshot, link_text=name),
        marks=(Mark(1.0, name, 60.0, 59.0, 61.0),),
        alarms=(AlarmLine(name, "high", "unacknowledged", 2.0, ""),),
    )
    screen = compose(state, 80, 24, Look())
    wide = np.flatnonzero(screen.chars[1] == ord("漁"))
    assert wide.size > 0
    assert (screen.chars[1, wide + 1] == 0).all()
    assert screen.lines()[1].endswith("traces fade in 2 s")
    assert "????" in text_of(state, look=Look(0, False))


def test_control_characters_of_a_name_never_reach_the_screen(states):
    state = replace(states["busy"], notices=("\x1b]0;x\x07 \x9b31m \u202e end\r\n",))
    line = compose(state, 80, 24, Look()).lines()[-2]
    assert line.isprintable()
    assert "end" in line


def rows_of(screen, character):
    return [line for line in screen.lines() if character in line]


def test_the_history_breaks_where_there_was_no_lock():
    history = tuple(HistoryPoint(float(t), 80.0, 79.0, 81.0) for t in range(1, 61) if not 20 < t < 40)
    state = LiveState(
        make_states()["waiting"].snapshot,
        seconds=60.0,
        locked=True,
        history=history,
        locks=((0.0, True), (20.0, False), (40.0, True)),
    )
    lines = compose(state, 84, 24, Look()).lines()
    bars, events = lines[20], lines[21]
    # 80 columns for 60 s: from 20 s to 40 s are columns 26 to 53
    assert bars[4 + 28 : 4 + 52].strip() == ""
    assert bars[4 + 2 : 4 + 26].strip("█") == ""
    assert events[4 + 28 : 4 + 52] == "░" * 24


def test_marks_gaps_and_alarms_stand_at_their_times():
    history = tuple(HistoryPoint(float(t), 80.0, 79.0, 81.0) for t in range(1, 81))
    state = LiveState(
        make_states()["waiting"].snapshot,
        seconds=80.0,
        locked=True,
        history=history,
        locks=((0.0, True),),
        marks=(Mark(10.5, "", 80.0, 79.0, 81.0),),
        gaps_s=(30.5,),
    )
    # 80 columns for 80 s
    events = text_of(state, 84, alarm_spans=(AlarmSpan("x", "high", 50.0, 60.0),)).splitlines()[21][4:]
    assert events[10] == "▲"
    assert events[30] == "×"
    assert events[50:60] == "!" * 10
    assert events.replace("▲", "").replace("×", "").replace("!", "").strip() == ""


def test_a_long_watch_shows_its_whole_and_its_last_minutes():
    history = tuple(HistoryPoint(10.0 * t, 80.0, 79.0, 81.0) for t in range(1, 8640))
    state = LiveState(make_states()["waiting"].snapshot, seconds=86400.0, locked=True, history=history)
    text = text_of(state)
    assert "Opening, the whole watch" in text
    assert "Opening, the last 10 minutes" in text


def test_the_eye_is_darkest_where_no_trace_runs_and_brightest_at_the_levels(states):
    calm = states["calm"]
    image = calm.snapshot.image
    density = np.zeros_like(image.density)
    row = int(np.argmin(np.abs(image.row_level - 1.0)))
    density[:, :, row - 2 : row + 3] = 200
    state = replace(
        calm,
        snapshot=replace(
            calm.snapshot, image=replace(image, density=density, best_ui=None, levels=np.array([-1.0, 1.0]))
        ),
    )
    screen = compose(state, 80, 24, Look())
    ticks = [y for y, line in enumerate(screen.lines()) if line.startswith("+1")]
    assert len(ticks) == 1
    eye_rows = screen.chars[3:15, 3:40]
    drawn = np.flatnonzero((eye_rows == ord("▀")).any(axis=1)) + 3
    assert set(drawn) <= {ticks[0] - 1, ticks[0], ticks[0] + 1}
    assert drawn.size > 0


def test_the_best_instant_is_marked_on_the_axis(states):
    calm = states["calm"]
    for ui, column in ((-0.5, 0.25), (0.5, 0.75)):
        image = replace(calm.snapshot.image, best_ui=ui)
        text = text_of(replace(calm, marks=(), snapshot=replace(calm.snapshot, image=image)))
        line = next(line for line in text.splitlines() if "▲" in line)
        assert line.index("▲") == pytest.approx(3 + column * 41, abs=1)


def test_the_cursor_stands_behind_the_name_being_typed(states):
    screen = compose(states["busy"], 80, 24, Look(), Shown(entry="a 漢 "))
    line = screen.lines()[-2]
    assert line.startswith("Name of mark 3: a 漢 ")
    assert screen.cursor == (len("Name of mark 3: a ") + 3, 22)


def test_keys_are_listed_in_full_at_eighty_columns(states):
    text = text_of(states["calm"], helping=True)
    for words in ("Space", "Mark now", "Escape or H", "older traces fade more slowly, at last never", "Ctrl+Q"):
        assert words in text
    assert "…" not in text.replace("Name the mark…", "")


def test_a_line_of_figures_names_the_opening_the_change_and_the_alarms(states):
    line = figures_line(states["busy"])
    assert line.startswith(
        "6:52; opening 70.6 % (95 %: 69.2 to 71.9 %); better since the mark, +4.2 points; SNR 24.6 dB"
    )
    assert "alarm, high: opening_pct < 70" in line
    assert "\n" not in line
    assert "Lock lost at 6:45: qpsk" in figures_line(states["no lock"])


@pytest.mark.parametrize("size", [(80, 24), (140, 40)])
def test_trouble_with_the_journal_stands_at_the_foot_whatever_the_size(states, size):
    trouble = "journal not written: No space left on device; 12 lines lost"
    state = replace(states["busy"], journal_text=trouble)
    assert trouble in compose(state, *size, Look()).lines()[-2]
    assert trouble in figures_line(state)
