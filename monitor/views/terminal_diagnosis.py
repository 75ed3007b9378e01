"""What stands behind the figures, in character cells: the side's pages in brief."""

import math
from collections.abc import Sequence

import numpy as np

from dsp.diagnosis import Constellation, Diagnosis, ErrorCurve
from dsp.reading import Reading
from monitor.snapshot import Snapshot
from monitor.views.diagnosis_wording import (
    LEAST_BER,
    NO_NEIGHBOUR,
    PAGE_TITLES,
    PageName,
    cause_figures,
    decades,
    error_figures,
    remedies,
    strongest,
)
from monitor.views.terminal_cells import Ink, Sheet, cells, wrap
from monitor.views.terminal_colours import Palette
from monitor.views.terminal_plots import draw_bars, draw_counts
from monitor.views.wording import Figure, budget_rows, figure_groups, plain, sentence, signed, ten_to, unknown_causes


def draw_side_page(
    sheet: Sheet, inks: Palette, page: PageName, snapshot: Snapshot, x: int, y: int, width: int, height: int
) -> None:
    """One page within ``width`` x ``height`` cells; says so where it is not known."""
    reading, diagnosis = snapshot.reading, snapshot.diagnosis or Diagnosis()
    if reading is None or height < 2:
        return
    sheet.write(x, y, PAGE_TITLES[page], inks.accent, width)
    y, height = y + 1, height - 1
    if page == "causes":
        _draw_causes(sheet, inks, reading, diagnosis, x, y, width, height)
    elif page == "response":
        figures = strongest(diagnosis.response, height - 1) if diagnosis.response is not None else []
        none = NO_NEIGHBOUR if diagnosis.response is not None else "The response is not known."
        heading = [Figure("Strength against the symbol", "")] if figures else [Figure(none, "")]
        draw_figures(sheet, inks, [*heading, *figures], x, y, width, height)
    elif page == "errors":
        _draw_errors(sheet, inks, reading, diagnosis, x, y, width, height)
    elif page == "decisions":
        _draw_constellation(sheet, inks, diagnosis.constellation, x, y, width, height)
    elif page == "remedies":
        _draw_remedies(sheet, inks, reading, diagnosis, x, y, width, height)
    else:
        figures = [figure for group in figure_groups(reading) for figure in group.figures]
        draw_figures(sheet, inks, figures, x, y, width, height)


def draw_budget(
    sheet: Sheet, inks: Palette, rows: Sequence[tuple[str, float]], x: int, y: int, width: int, room: int
) -> int:
    """What each cause takes, a bar a row, in ``room`` rows with the heading; returns the row after it."""
    if not rows or room < 2:
        return y
    sheet.write(x, y, "What closes the eye, in points", inks.strong, width)
    return _draw_bars(sheet, inks, rows, x, y + 1, width, room - 1)


def _draw_bars(
    sheet: Sheet, inks: Palette, rows: Sequence[tuple[str, float]], x: int, y: int, width: int, room: int
) -> int:
    label_width = max(cells(label) for label, _ in rows) + 1
    bars = width - label_width - 6
    most = max(max(abs(value) for _, value in rows), 1e-9)
    for label, value in rows[: max(room, 0)]:
        sheet.write(x, y, label, inks.dim)
        bar = round(bars * max(value, 0.0) / most)
        sheet.write(x + label_width, y, ("▬" if sheet.unicode else "=") * bar, Ink(inks.curve.fore, inks.text.back))
        sheet.write(x + width - 6, y, plain(value, 1), inks.text, 6, align="right")
        y += 1
    return y


def draw_figures(
    sheet: Sheet, inks: Palette, figures: Sequence[Figure], x: int, y: int, width: int, height: int
) -> int:
    """Label and value a row, as many as there are rows; returns the row after them."""
    for figure in figures[: max(height, 0)]:
        value = sheet.spell(figure.value)
        sheet.write(x, y, sheet.spell(figure.label), inks.dim, max(width - cells(value) - 1, 0))
        sheet.write(x, y, value, inks.text, width, align="right")
        y += 1
    return y


def _draw_words(sheet: Sheet, ink: Ink, text: str, x: int, y: int, width: int, height: int) -> int:
    for line in wrap(sheet.spell(text), width, height, sheet.ellipsis):
        sheet.write(x, y, line, ink)
        y += 1
    return y


def _draw_causes(
    sheet: Sheet, inks: Palette, reading: Reading, diagnosis: Diagnosis, x: int, y: int, width: int, height: int
) -> None:
    end, budget = y + height, reading.budget
    rows = budget_rows(budget) if budget is not None else []
    if budget is None or not rows:
        _draw_words(sheet, inks.dim, "What closes the eye is not known.", x, y, width, height)
        return
    opening = reading.opening_at_ber_pct
    if opening is not None and math.isfinite(opening):
        y = draw_figures(
            sheet, inks, [Figure("Left open at the target", f"{plain(opening, 1)} %")], x, y, width, end - y
        )
    y = _draw_bars(sheet, inks, rows, x, y, width, end - y)
    y = draw_figures(sheet, inks, cause_figures(diagnosis), x, y, width, end - y)
    for remark in diagnosis.remarks:
        y = _draw_words(sheet, inks.text, sentence(remark), x, y, width, end - y)
    missing = unknown_causes(budget)
    if missing:
        _draw_words(sheet, inks.dim, "Not known here: " + ", ".join(missing), x, y, width, end - y)


def _draw_errors(
    sheet: Sheet, inks: Palette, reading: Reading, diagnosis: Diagnosis, x: int, y: int, width: int, height: int
) -> None:
    figures = error_figures(reading, diagnosis)
    rows = height - len(figures) - 2
    if diagnosis.over_time is not None and diagnosis.over_time.at.size > 1 and rows >= 3:
        target = diagnosis.jitter.at_ber if diagnosis.jitter is not None else None
        _draw_curve(sheet, inks, diagnosis.over_time, decades([diagnosis.over_time], target), x, y, width, rows)
        y += rows + 2
    draw_figures(sheet, inks, figures, x, y, width, height)


def _draw_curve(
    sheet: Sheet, inks: Palette, curve: ErrorCurve, axis: tuple[int, int], x: int, y: int, width: int, rows: int
) -> None:
    """The error rate over the instant as bars from the axis' foot, and the instants under them."""
    low, high = axis
    gutter = 6
    plot = width - gutter
    at = np.linspace(float(curve.at[0]), float(curve.at[-1]), plot)
    level = np.interp(at, curve.at, np.log10(np.maximum(curve.ber, LEAST_BER)))
    sheet.fill(x + gutter, y, plot, rows, inks.curve)
    draw_bars(sheet, inks.curve, (level - low) / (high - low), x + gutter, y, rows)
    sheet.write(x, y, "1", inks.dim, gutter - 1, align="right")
    sheet.write(x, y + rows - 1, sheet.spell(ten_to(low)), inks.dim, gutter - 1, align="right")
    ends = [f"{signed(float(value), 1)}" for value in (curve.at[0], curve.at[-1])]
    sheet.write(x + gutter, y + rows, ends[0], inks.dim)
    sheet.write(x + gutter, y + rows, "UI from the best", inks.dim, plot, align="centre")
    sheet.write(x + gutter, y + rows, ends[1], inks.dim, plot, align="right")


def _draw_constellation(
    sheet: Sheet, inks: Palette, constellation: Constellation | None, x: int, y: int, width: int, height: int
) -> None:
    if constellation is None:
        _draw_words(sheet, inks.dim, "This link has one rail, or it is not known yet.", x, y, width, height)
        return
    rows = min(height, width // 2)
    draw_counts(sheet, inks, constellation.counts, x + (width - 2 * rows) // 2, y, 2 * rows, rows)


def _draw_remedies(
    sheet: Sheet, inks: Palette, reading: Reading, diagnosis: Diagnosis, x: int, y: int, width: int, height: int
) -> None:
    end = y + height
    if not diagnosis.equalisers:
        y = _draw_words(sheet, inks.dim, "No equaliser was tried yet.", x, y, width, height)
    for row in remedies(reading, diagnosis):
        if row.after_pct is None:
            y = _draw_words(sheet, inks.dim, row.words, x, y, width, end - y)
            continue
        before = "" if row.before_pct is None else f"{plain(row.before_pct, 1)} → "
        value = sheet.spell(f"{before}{plain(row.after_pct, 1)} %")
        y = _draw_words(sheet, inks.dim, row.words, x, y, width, end - y)
        if y < end:
            sheet.write(x, y, value, inks.text, width, align="right")
            y += 1
