"""Many recordings in one table: rows and totals, as text, JSON and CSV."""

import csv
import io
import json
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Final

from dsp.reading import READING_KEYS
from monitor.document import Json
from monitor.errors import printable
from monitor.version import version
from monitor.views.live_wording import clock
from monitor.views.terminal_cells import cells, shorten
from monitor.views.wording import plain, power_of_ten

_LONGEST_NAME, _LONGEST_REMARK = 36, 60
CSV_COLUMNS: Final = (
    "name",
    "error",
    "uri",
    "seconds",
    "samples_lost",
    "clipped_pct",
    "scheme",
    "symbol_rate_hz",
    "pulse",
    "locked_pct",
    "slips",
    "worst_window_opening_pct",
    "alarms",
    *READING_KEYS,
)


@dataclass(frozen=True, slots=True)
class Row:
    """One link of one recording: its document, or why there is none.

    ``document`` is what `monitor.document.document` makes of it, None where it could not be read; ``error`` why not.
    """

    name: str
    document: dict[str, Any] | None = None
    error: str = ""

    @property
    def opening_pct(self) -> float | None:
        """Its opening; None where there is none."""
        reading = self.document["reading"] if self.document is not None else None
        opening: float | None = reading["opening_pct"] if reading is not None else None
        return opening

    @property
    def alarms(self) -> int:
        """How often a limit was broken."""
        return len(self.document["alarms"]) if self.document is not None else 0


@dataclass(frozen=True, slots=True)
class Totals:
    """All rows together.

    ``openings_pct``: least, median and greatest of those measured, None where none was; ``worst`` names the least.
    """

    links: int
    measured: int
    without_link: int
    failed: int
    with_alarms: int
    seconds: float
    symbols: int
    openings_pct: tuple[float, float, float] | None
    worst: str | None


def totals_of(rows: Sequence[Row]) -> Totals:
    """Count the rows up."""
    import statistics

    known = [(row.opening_pct, row.name) for row in rows if row.opening_pct is not None]
    openings = [opening for opening, _ in known]
    documents = [row.document for row in rows if row.document is not None]
    return Totals(
        len(rows),
        len(known),
        len(documents) - len(known),
        len(rows) - len(documents),
        sum(row.alarms > 0 for row in rows),
        sum(found["source"]["seconds"] for found in documents),
        sum(found["reading"]["symbols"] for found in documents if found["reading"] is not None),
        (min(openings), statistics.median(openings), max(openings)) if openings else None,
        min(known)[1] if known else None,
    )


def text(rows: Sequence[Row]) -> Iterator[str]:
    """A line a row under a line of titles, then the totals."""
    titles = ("", "length", "link", "locked", "opening", "worst", "SNR", "bit errors", "")
    table = [titles, *(_cells_of(row) for row in rows)]
    widths = [max(cells(line[column]) for line in table) for column in range(len(titles))]
    for line in table:
        parts = [
            word + " " * (width - cells(word))
            if column in (0, 2, len(titles) - 1)
            else " " * (width - cells(word)) + word
            for column, (word, width) in enumerate(zip(line, widths, strict=True))
        ]
        yield "  ".join(parts).rstrip()
    yield ""
    yield from _total_lines(totals_of(rows))


def _cells_of(row: Row) -> tuple[str, ...]:
    name = _short(row.name)
    if row.document is None:
        return (name, *[""] * 7, f"failed: {printable(row.error)}")
    source, link, lock = row.document["source"], row.document["link"], row.document["lock"]
    reading, worst = row.document["reading"], row.document["windows"]["worst"]
    what = "" if link["scheme"] is None else f"{link['scheme']} {link['symbol_rate_hz']:.6g} Bd"
    length = f"{source['seconds']:.1f} s" if source["seconds"] < 60 else clock(source["seconds"])
    if reading is None or reading["opening_pct"] is None:
        remark = shorten(printable(f"no eye: {lock['reason']}"), _LONGEST_REMARK)
        return name, length, what, "", "", "", "", "", remark
    remarks = [f"{len(row.document['alarms'])} alarms: {row.document['alarms'][0]['rule']}"] if row.alarms > 1 else []
    if row.alarms == 1:
        remarks.append(f"alarm: {row.document['alarms'][0]['rule']}")
    if lock["slips"]:
        remarks.append(f"{lock['slips']} slip{'s' * (lock['slips'] != 1)}")
    if source["samples_lost"]:
        remarks.append(f"{source['samples_lost']} samples lost")
    return (
        name,
        length,
        what,
        f"{plain(lock['locked_pct'], 1)} %",
        f"{plain(reading['opening_pct'], 1)} %",
        "" if worst is None or worst["opening_pct"] is None else f"{plain(worst['opening_pct'], 1)} %",
        "" if reading["snr_db"] is None else f"{plain(reading['snr_db'], 1)} dB",
        "" if reading["ber"] is None else power_of_ten(reading["ber"]),
        shorten(printable(", ".join(remarks)), _LONGEST_REMARK),
    )


def _short(name: str) -> str:
    return shorten(printable(name), _LONGEST_NAME, middle=True)


def _total_lines(totals: Totals) -> Iterator[str]:
    parts = [f"{totals.links} link{'s' * (totals.links != 1)}, {clock(totals.seconds)} of samples"]
    parts.append(f"{totals.measured} measured")
    for count, words in (
        (totals.without_link, "without an eye"),
        (totals.failed, "failed"),
        (totals.with_alarms, "with a limit broken"),
    ):
        if count:
            parts.append(f"{count} {words}")
    yield "; ".join(parts)
    if totals.openings_pct is not None:
        least, median, most = (plain(value, 1) for value in totals.openings_pct)
        yield printable(f"opening {least} to {most} %, median {median} %; worst: {_short(totals.worst or '')}")


def document(rows: Sequence[Row]) -> dict[str, Json]:
    """The JSON document: ``links`` as that of a replay of several, and ``totals``."""
    totals = totals_of(rows)
    links: list[Json] = []
    for row in rows:
        own = {key: value for key, value in (row.document or {}).items() if key != "lidwatch"}
        links.append({"name": row.name, "error": row.error or None, **own})
    openings = totals.openings_pct or (None, None, None)
    return {
        "lidwatch": version(),
        "links": links,
        "totals": {
            "links": totals.links,
            "measured": totals.measured,
            "without_link": totals.without_link,
            "failed": totals.failed,
            "with_alarms": totals.with_alarms,
            "seconds": totals.seconds,
            "symbols": totals.symbols,
            "opening_least_pct": openings[0],
            "opening_median_pct": openings[1],
            "opening_greatest_pct": openings[2],
            "worst": totals.worst,
        },
    }


def table(rows: Sequence[Row]) -> str:
    """All rows as CSV (RFC 4180) with the columns `CSV_COLUMNS`; what is no single number or text as JSON in its cell."""
    out = io.StringIO(newline="")
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow(CSV_COLUMNS)
    for row in rows:
        writer.writerow([_cell(value) for value in _values(row)])
    return out.getvalue()


def _values(row: Row) -> Iterator[Any]:
    found = row.document
    yield row.name
    yield row.error or None
    if found is None:
        yield from [None] * (len(CSV_COLUMNS) - 2)
        return
    worst, reading = found["windows"]["worst"], found["reading"]
    yield from (found["source"][key] for key in ("uri", "seconds", "samples_lost", "clipped_pct"))
    yield from (found["link"][key] for key in ("scheme", "symbol_rate_hz", "pulse"))
    yield from (found["lock"][key] for key in ("locked_pct", "slips"))
    yield None if worst is None else worst["opening_pct"]
    yield len(found["alarms"])
    yield from (None if reading is None else reading[key] for key in READING_KEYS)


def _cell(value: Any) -> str:  # noqa: ANN401
    if value is None:
        return ""
    return " ".join(value.splitlines()) if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
