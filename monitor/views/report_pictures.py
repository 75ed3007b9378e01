"""The pictures of a report: drawn as the window draws them, black on white, fine enough for paper."""

from collections.abc import Callable, Sequence

from PySide6.QtGui import QImage, QPainter

from monitor.snapshot import Snapshot
from monitor.state import LiveState
from monitor.views.canvas import Canvas
from monitor.views.diagnosis_drawing import (
    draw_constellation,
    draw_equaliser_taps,
    draw_error_curve,
    draw_response,
    draw_tap_counts,
)
from monitor.views.diagnosis_wording import chosen_trials, decades, linear_trials
from monitor.views.history import AlarmSpan
from monitor.views.layout import Box
from monitor.views.live_drawing import draw_eye_axes, draw_traces
from monitor.views.live_history import draw_history
from monitor.views.live_layout import arrange_eye
from monitor.views.painter import png_bytes
from monitor.views.theme import find_theme

_SCALE = 2.5  # pixels a design unit: some 300 to the inch on A4


def picture(width: int, height: int, draw: Callable[[Canvas, Box], object]) -> bytes:
    """A PNG of ``width`` x ``height`` design units. Needs Qt's application object."""
    image = QImage(round(width * _SCALE), round(height * _SCALE), QImage.Format.Format_RGB32)
    painter = QPainter(image)
    try:
        canvas = Canvas(painter, find_theme("paper"), _SCALE)
        box = Box(0, 0, image.width(), image.height())
        canvas.fill(box, canvas.theme.page)
        draw(canvas, box)
    finally:
        painter.end()
    return png_bytes(image)


def draw_pictures(snapshot: Snapshot, state: LiveState | None, alarms: Sequence[AlarmSpan]) -> dict[str, bytes]:
    """Every picture that there is something for, by name: eye, response, instant, threshold, constellation, counts, taps, history."""
    image, reading, diagnosis = snapshot.image, snapshot.reading, snapshot.diagnosis
    made: dict[str, bytes] = {}
    if image is not None:
        rails = len(image.rails)

        def draw_eye(canvas: Canvas, box: Box) -> None:
            inside = Box(0, 0, box.width - canvas.px(4), box.height)
            page = arrange_eye(box.width, box.height, _SCALE, inside, inside, rails)
            draw_eye_axes(canvas, page, image, reading)
            for rail, places in enumerate(page.rails):
                draw_traces(canvas, places.eye, image, rail)

        made["eye"] = picture(720, 400 if rails == 1 else 540, draw_eye)
    if diagnosis is not None and reading is not None:
        if diagnosis.response is not None:
            response, names = diagnosis.response, image.rails if image is not None else ()
            made["response"] = picture(350, 300, lambda canvas, box: draw_response(canvas, box, response, names))
        target = diagnosis.jitter.at_ber if diagnosis.jitter is not None else None
        curves = {
            "instant": (diagnosis.over_time, "Over the sampling instant", "UI from the best instant"),
            "threshold": (diagnosis.over_threshold, "Over the threshold", "threshold, level units"),
        }
        axis = decades([curve for curve, _, _ in curves.values() if curve is not None], target)
        for key, (curve, title, name) in curves.items():
            if curve is not None:
                made[key] = picture(
                    350,
                    230,
                    lambda canvas, box, curve=curve, title=title, name=name: draw_error_curve(  # type: ignore[misc]
                        canvas, box, curve, axis, title=title, name=name, target=target
                    ),
                )
        if diagnosis.constellation is not None:
            constellation, levels = diagnosis.constellation, image.levels if image is not None else None
            made["constellation"] = picture(
                350, 330, lambda canvas, box: draw_constellation(canvas, box, constellation, reading, levels)
            )
        linear, chosen = linear_trials(diagnosis), chosen_trials(reading, diagnosis)[:1]
        if chosen and len(linear) > 1:
            made["counts"] = picture(350, 200, lambda canvas, box: draw_tap_counts(canvas, box, linear, chosen[0]))
        if chosen:
            made["taps"] = picture(350, 200, lambda canvas, box: draw_equaliser_taps(canvas, box, chosen[0]))
    if state is not None and state.history:

        def draw_course(canvas: Canvas, box: Box) -> None:
            plot = Box(
                canvas.px(54), canvas.px(40), box.width - canvas.px(54) - canvas.px(14), box.height - canvas.px(68)
            )
            draw_history(canvas, box, plot, state, alarms, None)

        made["history"] = picture(720, 210, draw_course)
    return made
