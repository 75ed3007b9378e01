"""The report: one page that needs nothing beside itself, says what is known and nothing else, and lets no name speak HTML."""

import itertools
import re
from dataclasses import replace
from datetime import UTC, datetime
from html.parser import HTMLParser

import pytest

from dsp.block import Block
from dsp.chain import ChainOptions
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from dsp.reading import Budget, Reading
from monitor.definitions import DEFINITIONS, definition_of
from monitor.engine import Engine, EngineOptions
from monitor.errors import InputError
from monitor.report import ReportFacts, facts_of_run, facts_of_watch, render, save_report
from monitor.session import run
from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, Mark
from monitor.views.painter import ensure_application
from monitor.views.wording import figure_groups
from tests.monitor.recordings import RATE, SYMBOL_RATE, InMemory, qpsk
from tests.monitor.views.diagnoses import diagnosed
from tests.monitor.views.live_states import make_states
from tests.monitor.views.synthetic_eyes import full_reading, make_eye

QPSK = Wanted(find_scheme("qpsk"), SYMBOL_RATE, Pulse("rrc", 0.35), name="Skerry tide gauge")
HOSTILE = "<script>alert(1)</script>\"'><img src=http://evil.example/x>&amp;\x1b[31m\u202e"


class Page(HTMLParser):
    """What a browser would see: tags with attributes, and the text."""

    def __init__(self, html):
        super().__init__()
        self.tags, self.words, self.open = [], [], []
        self.feed(html)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in ("meta", "img", "br", "rect"):
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag

    def handle_data(self, data):
        if not self.open or self.open[-1] != "style":
            self.words.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())

    def named(self, tag):
        return [attrs for name, attrs in self.tags if name == tag]


@pytest.fixture(scope="module", autouse=True)
def _application():
    ensure_application()


@pytest.fixture(scope="module")
def measured():
    """A replay with the engine beside it, as the command runs them."""
    samples = qpsk(6000)
    engine = Engine(
        QPSK,
        sample_rate_hz=RATE,
        complex_in=True,
        options=EngineOptions(display=False, history=True),
        line=lambda *_: None,
    )
    outcome = run(InMemory(Block(samples, 0)), QPSK, ChainOptions(window=1000), observe=engine.feed)
    engine.finish()
    return outcome, engine.state(ended=True)


@pytest.fixture(scope="module")
def busy():
    state = make_states()["busy"]
    return replace(state, snapshot=diagnosed(state.snapshot))


def watched(state, **more):
    return replace(facts_of_watch(state, None, ChainOptions()), **more)


def test_a_page_is_well_formed_and_needs_nothing_beside_itself(busy):
    html = render(watched(busy))
    page = Page(html)
    assert page.open == []
    assert html.startswith("<!DOCTYPE html>")
    for attrs in page.named("img"):
        assert attrs["src"].startswith("data:image/png;base64,")
        assert attrs["alt"]
    assert not {tag for tag, _ in page.tags} & {"script", "link", "iframe", "object", "base", "a", "form"}
    assert not [key for _, attrs in page.tags for key in attrs if key.startswith("on")]
    assert "url(" not in html
    assert "@import" not in html
    assert "http" not in re.sub(r'http-equiv|data:image/png;base64,[^"]*', "", html)


def test_every_part_is_there(busy):
    page = Page(render(watched(busy)))
    names = " ".join(attrs["alt"] for attrs in page.named("img"))
    for words in ("The eye", "Response", "Constellation", "sampling instant", "threshold", "Taps", "over the stream"):
        assert words in names
    for words in (
        "What closes the eye",
        "What would open it",
        "Alarms",
        "Lock, losses and marks",
        "All figures, and what each of them means",
        "What was taken to be so",
        "How it was reckoned",
    ):
        assert words in page.text


def test_numbers_are_those_of_the_reading(busy):
    page = Page(render(watched(busy)))
    reading = busy.snapshot.reading
    assert f"{reading.opening_pct:.1f} % open" in page.text
    assert "95 % interval 69.2 to 71.9 %" in page.text
    assert reading.verdict in page.text
    for remark in busy.snapshot.diagnosis.remarks:
        assert remark in page.text
    for group in figure_groups(reading):
        for figure in group.figures:
            if not figure.label.startswith("… 95 %"):
                assert figure.label in page.text
                assert figure.value in page.text
    assert "1.2 × 10⁻⁷ to 8.4 × 10⁻⁷" in page.text
    assert "41.2 % 88.3 %" in page.text


def test_figures_have_the_intervals_that_are_known(busy):
    diagnosis = replace(busy.snapshot.diagnosis, intervals={"snr_db": (24.2, 25.0), "clock_ppm": (-12.6, -12.2)})
    page = Page(render(watched(replace(busy, snapshot=replace(busy.snapshot, diagnosis=diagnosis)))))
    assert "SNR 24.6 dB 24.2 to 25.0 dB" in page.text
    assert "Clock offset −12.4 ppm −12.6 to −12.2 ppm" in page.text


def test_the_balance_adds_up_on_the_page(busy):
    html = render(watched(busy))
    body = html[html.index("<h2>What closes the eye</h2>") : html.index("<h2>What would open it</h2>")]
    body = body[: body.index("</tbody>")]
    rows = re.findall(r'<tr[^>]*><td>([^<]*)</td>.*?<td class="n">([^<]*)</td></tr>', body)
    points = {label: float(value.replace("−", "-")) for label, value in rows}
    whole = points.pop("Together")
    parts = points.values()
    assert sum(parts) == pytest.approx(whole, abs=0.06)
    assert whole == pytest.approx(100.0, abs=0.2)
    rects = [(float(a), float(b)) for a, b in re.findall(r'<rect x="([\d.]+)" y="1" width="([\d.]+)"', body)]
    for (start, width), (following, _) in itertools.pairwise(rects):
        assert following == pytest.approx(start + width, abs=0.35)


def test_a_closed_eye_is_said_to_be_closed(busy):
    reading = replace(busy.snapshot.reading, opening_pct=-12.0, opening_at_ber_pct=-60.0, budget=Budget(isi_pct=160.0))
    page = Page(render(watched(replace(busy, snapshot=replace(busy.snapshot, reading=reading)))))
    assert "−12.0 % open" in page.text
    assert "The eye is closed." in page.text


def test_what_is_not_known_is_said_to_be_so_and_never_nought():
    image, eyes = make_eye(2, symbols=300)
    bare = Snapshot(image, Reading(300, 60.0, eyes=eyes), "harbour.wav", "pam2 at 1200 Bd", "locked")
    page = Page(render(ReportFacts(bare)))
    assert "95 % interval not known" in page.text
    assert "What closes the eye most is not known." in page.text
    assert page.text.count("ot known") >= 4
    assert not re.search(r"(?<![\d.,])0(\.0+)? %", page.text.partition("What was taken")[0])


def test_without_a_lock_the_page_says_why():
    outcome = run(InMemory(Block(0 * qpsk(), 0)), Wanted(), ChainOptions())
    page = Page(render(facts_of_run(outcome, ChainOptions())))
    assert "Nothing could be measured." in page.text
    assert outcome.reason in page.text
    assert "All figures" not in page.text
    assert page.named("img") == []


def test_a_replay_tells_its_windows_and_what_was_given(measured):
    outcome, state = measured
    page = Page(render(facts_of_run(outcome, ChainOptions(), ("opening_pct < 40",), state)))
    assert f"{outcome.windows.count} windows of 1,000 symbols" in page.text
    assert f"Least opening of them {outcome.windows.worst.opening_pct:.1f} %" in page.text
    assert "Scheme qpsk: 2 levels on 2 rails given" in page.text
    assert "Carrier, from the recording's centre found by the carrier loop found by itself" in page.text
    assert "opening_pct < 40" in page.text
    assert "lock gained" in page.text
    assert "lock lost" not in page.text  # the end of the recording is no loss
    assert len(state.history) > 1
    assert any("over the stream" in attrs["alt"] for attrs in page.named("img"))


def test_alarms_and_events_are_told_with_their_times(busy):
    alarms = (
        {
            "rule": "opening_pct < 70",
            "severity": "high",
            "raised_at_s": 388.2,
            "cleared_at_s": None,
            "worst": 61.25,
            "limit": 70.0,
            "unit": "%",
        },
        {
            "rule": "clipping",
            "severity": "medium",
            "raised_at_s": 300.0,
            "cleared_at_s": 312.0,
            "worst": None,
            "limit": None,
            "unit": "",
        },
    )
    page = Page(render(watched(busy, alarms=alarms, limits=("opening_pct < 70",))))
    assert "opening_pct < 70 high 6:28 stood at the end 61.25 % 70 %" in page.text
    assert "clipping medium 5:00 5:12" in page.text
    assert "3:30 “stub trimmed”, opening 64.0 %" in page.text
    assert "1:40 lock lost" in page.text
    assert "better: +4.2 points (95 %: +2.9 to +5.5)" in page.text


def test_hostile_names_stay_words(busy):
    mark = Mark(10.0, HOSTILE, 60.0, 59.0, 61.0)
    snapshot = replace(
        busy.snapshot,
        source_text=HOSTILE,
        link_text=HOSTILE,
        lock_text=HOSTILE,
        notes=(HOSTILE,),
        reading=replace(busy.snapshot.reading, verdict=HOSTILE),
        diagnosis=replace(busy.snapshot.diagnosis, remarks=(HOSTILE,)),
    )
    state = replace(
        busy, snapshot=snapshot, marks=(mark,), alarms=(AlarmLine(HOSTILE, "high", "raised", 1.0, HOSTILE),)
    )
    alarm = {
        "rule": HOSTILE,
        "severity": "high",
        "raised_at_s": 1.0,
        "cleared_at_s": 2.0,
        "worst": 1.0,
        "limit": 1.0,
        "unit": HOSTILE,
    }
    html = render(watched(state, alarms=(alarm,), limits=(HOSTILE,)))
    harmless = Page(
        render(
            watched(
                replace(busy, marks=(replace(mark, name="x"),)),
                alarms=({**alarm, "rule": "x", "unit": "x"},),
                limits=("x",),
            )
        )
    )
    page = Page(html)
    notes = 3  # the section of the one note: section, h2 and ul with its li
    assert len(page.tags) - len(harmless.tags) <= notes + 1
    assert not page.named("script")
    assert all(attrs["src"].startswith("data:") for attrs in page.named("img"))
    assert "\x1b" not in html
    assert "alert(1)" in page.text


def test_a_name_with_undecodable_bytes_can_be_written(tmp_path, busy):
    odd = "gauge-\udcff.wav"  # as Python shows a byte that is no UTF-8
    path = tmp_path / "report.html"
    save_report(watched(replace(busy, snapshot=replace(busy.snapshot, source_text=odd))), path)
    assert "gauge-\\udcff.wav" in path.read_text(encoding="utf-8")


def test_a_report_that_cannot_be_written_says_so(tmp_path, busy):
    with pytest.raises(InputError, match="cannot be written"):
        save_report(watched(busy), tmp_path / "no folder" / "x.html")


def test_every_figure_has_a_definition_and_none_is_left_over(busy):
    labels = [figure.label for group in figure_groups(busy.snapshot.reading) for figure in group.figures]
    plain_labels = {label.partition(",")[0] for label in labels if not label.startswith("…")}
    assert plain_labels == set(DEFINITIONS)
    assert all(definition_of(label) for label in labels if not label.startswith("…"))


def test_the_time_is_told_in_utc(busy):
    made = datetime(2031, 5, 4, 3, 2, 1, tzinfo=UTC)
    assert "2031-05-04 03:02:01 UTC" in Page(render(watched(busy, made=made))).text


def test_the_same_facts_give_the_same_page(busy):
    facts = watched(busy)
    assert render(facts) == render(facts)


def test_full_readings_of_every_kind_render():
    for levels, rails in ((2, ("",)), (4, ("",)), (2, ("I", "Q")), (8, ("I", "Q"))):
        image, eyes = make_eye(levels, rails, symbols=300)
        snapshot = diagnosed(Snapshot(image, full_reading(image, eyes), "x", "y", "locked"))
        assert Page(render(ReportFacts(snapshot))).named("img")
