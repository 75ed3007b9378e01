"""What a view is told of a run."""

from dsp.block import Block
from dsp.chain import ChainOptions
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from monitor.session import run
from monitor.snapshots import snapshot_of
from tests.monitor.recordings import SYMBOL_RATE, InMemory, qpsk

GIVEN = Wanted(find_scheme("qpsk"), SYMBOL_RATE, Pulse("rrc", 0.35), name="Skerry\ntide gauge")


def test_a_measured_run_shows_its_eye_figures_and_defects():
    source = InMemory(Block(qpsk(), 0, clipped=2), notes=("seen at opening",), later=("met\nwhile reading",))
    outcome = run(source, GIVEN, ChainOptions())
    shown = snapshot_of(outcome)
    assert shown.image is outcome.image is not None
    assert shown.reading is outcome.reading is not None
    assert shown.source_text == "memory · cf32_le · 48000 Hz"
    assert shown.link_text == "Skerry tide gauge: qpsk at 12000 Bd, pulse rrc:0.35"
    assert shown.lock_text == f"locked {outcome.locked_pct:.1f} % of the time, 0 slips"
    assert shown.notes == (
        "seen at opening",
        "met while reading",
        f"2 samples at the end stops of the format ({200 / 12000:.2g} %)",
    )
    assert (shown.seconds, shown.coverage_pct) == (0.25, 100.0)


def test_a_run_without_lock_shows_no_figures_but_the_reason():
    outcome = run(InMemory(Block(0 * qpsk(), 0)), Wanted(), ChainOptions())
    shown = snapshot_of(outcome)
    assert (shown.image, shown.reading, shown.link_text, shown.lock_text) == (None, None, "", "no lock")
    assert shown.notes == (f"nothing to measure: {outcome.reason}",)
