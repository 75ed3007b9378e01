"""One run over one source."""

import threading
from itertools import pairwise

import numpy as np
import pytest

from dsp.acquisition import NotFound
from dsp.block import Block
from dsp.chain import ChainOptions
from dsp.errors import DspError
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, transmit
from monitor.document import document
from monitor.errors import InputError
from monitor.session import run, settle_link
from tests.monitor.recordings import RATE, SYMBOL_RATE, InMemory, pam2, qpsk

GIVEN = Wanted(find_scheme("qpsk"), SYMBOL_RATE, Pulse("rrc", 0.35))
GIVEN_REAL = Wanted(find_scheme("pam2"), SYMBOL_RATE, Pulse("rrc", 0.35))


def blocks_of(samples, cuts=(), start=0):
    edges = [0, *cuts, samples.size]
    return [Block(samples[a:b], start + a) for a, b in pairwise(edges)]


def test_a_given_link_is_measured_with_the_noise_it_was_sent_with():
    outcome = run(InMemory(*blocks_of(qpsk(snr_db=25.0))), GIVEN, ChainOptions())
    assert outcome.measured
    assert outcome.reason == ""
    assert outcome.identified == ("carrier_hz",)
    assert outcome.reading.snr_db == pytest.approx(25.0, abs=0.5)
    assert outcome.reading.symbols > 2800
    assert outcome.samples == qpsk().size
    assert outcome.seconds == qpsk().size / RATE
    assert outcome.elapsed_s > 0
    assert outcome.coverage_pct == 100.0
    assert outcome.locked_pct > 95


def test_what_is_not_given_is_found_and_named():
    outcome = run(InMemory(*blocks_of(pam2(6000))), Wanted(), ChainOptions())
    assert outcome.link.scheme.name == "pam2"
    assert outcome.link.symbol_rate_hz == pytest.approx(SYMBOL_RATE, rel=1e-5)
    assert set(outcome.identified) == {"scheme", "symbol_rate_hz", "pulse"}


@pytest.mark.parametrize("threads", [1, 2])
def test_cuts_and_threads_change_no_figure(threads, monkeypatch):
    monkeypatch.setattr("monitor.session.BESIDE_FROM_BD", 0.0)
    whole = run(InMemory(*blocks_of(qpsk())), GIVEN, ChainOptions(window=500), threads=1)
    cut = run(InMemory(*blocks_of(qpsk(), (1, 1, 700, 6001, 9999))), GIVEN, ChainOptions(window=500), threads=threads)
    left, right = document(whole), document(cut)
    del left["speed"], right["speed"]
    assert left == right
    assert whole.windows.count >= 4


def test_the_worst_window_is_the_one_with_the_echo():
    samples = qpsk(9000).copy()
    late = samples[12000:24000]
    late[4:] += 0.35 * late[:-4]
    outcome = run(InMemory(*blocks_of(samples)), GIVEN, ChainOptions(window=1000))
    assert outcome.windows.symbols_each == 1000
    assert outcome.windows.count >= 6
    clean = run(InMemory(*blocks_of(qpsk(9000))), GIVEN, ChainOptions(window=1000))
    assert outcome.windows.worst.symbols == 1000
    assert outcome.windows.worst.opening_pct < clean.windows.worst.opening_pct - 25


def test_without_full_windows_there_is_no_worst():
    outcome = run(InMemory(*blocks_of(qpsk())), GIVEN, ChainOptions(window=100_000))
    assert (outcome.windows.count, outcome.windows.worst) == (0, None)


def test_losses_and_defects_are_counted_whether_or_not_there_is_a_link():
    samples = qpsk()
    for wanted, data in ((GIVEN, samples), (GIVEN, np.zeros_like(samples)), (Wanted(), np.zeros_like(samples))):
        first, second = data[:6000], data[7000:]
        source = InMemory(Block(first, 0, clipped=3), Block(second, 7000, lost=1000, nonfinite=2))
        outcome = run(source, wanted, ChainOptions())
        assert (outcome.samples, outcome.samples_lost, outcome.gaps) == (samples.size - 1000, 1000, 1)
        assert (outcome.clipped, outcome.nonfinite) == (3, 2)
        assert outcome.seconds == samples.size / RATE
        assert outcome.measured == data.any()


def test_notes_of_opening_and_of_reading_stand_together_before_the_counts():
    source = InMemory(
        Block(qpsk()[:4000], 0, clipped=1, nonfinite=2),
        Block(qpsk()[5000:], 5000, lost=1000),
        notes=("seen at opening",),
        later=("met while reading",),
    )
    outcome = run(source, GIVEN, ChainOptions())
    outcome.interrupted = True
    assert outcome.source_notes == ("seen at opening", "met while reading")
    assert outcome.notes == (
        "seen at opening",
        "met while reading",
        "2 samples not finite, taken as 0",
        f"1 sample at the end stops of the format ({100 / 11000:.2g} %)",
        "1000 samples lost in 1 gap",
        "interrupted after 0.250 s",
    )


@pytest.mark.parametrize("wanted", [GIVEN, Wanted()])
def test_no_samples_are_a_reason_not_an_error(wanted):
    outcome = run(InMemory(), wanted, ChainOptions())
    assert not outcome.measured
    assert outcome.reason == "there are no samples"
    assert outcome.locked_pct == 0.0


@pytest.mark.parametrize("wanted", [GIVEN, Wanted()])
@pytest.mark.parametrize("n", [1, 2, 3, 50])
def test_too_few_samples_are_a_reason(wanted, n):
    outcome = run(InMemory(*blocks_of(qpsk()[:n])), wanted, ChainOptions())
    assert not outcome.measured
    assert outcome.reason
    assert outcome.samples == n


def test_progress_is_told_every_block_with_and_without_a_link():
    for samples in (qpsk(), np.zeros_like(qpsk())):
        told = []
        run(InMemory(*blocks_of(samples, (5000, 10000))), Wanted(), ChainOptions(), progress=told.append)
        assert told == [5000, 10000, samples.size]


def test_a_real_scheme_for_iq_samples_is_refused():
    with pytest.raises(InputError, match="scheme pam2 is a real baseband, but the samples are I/Q"):
        run(InMemory(*blocks_of(qpsk())), GIVEN_REAL, ChainOptions())
    with pytest.raises(InputError, match="scheme pam2 is a real baseband"):
        run(InMemory(*blocks_of(qpsk())), Wanted(find_scheme("pam2")), ChainOptions())


@pytest.mark.parametrize("rate", [30000.0, 1.0])
def test_a_symbol_rate_that_the_samples_cannot_carry_is_refused(rate):
    for wanted in (Wanted(find_scheme("qpsk"), rate, Pulse("rrc", 0.35)), Wanted(None, rate)):
        with pytest.raises(InputError, match="2 to 2000 can be measured"):
            run(InMemory(*blocks_of(qpsk())), wanted, ChainOptions())


def test_an_error_leaves_no_thread_behind(monkeypatch):
    monkeypatch.setattr("monitor.session.BESIDE_FROM_BD", 0.0)

    class Broken(InMemory):
        def blocks(self):
            yield from super().blocks()
            raise DspError("torn")

    before = threading.active_count()
    with pytest.raises(InputError, match="torn"):
        run(Broken(*blocks_of(np.tile(qpsk(), 20))), GIVEN, ChainOptions(), threads=2)
    assert threading.active_count() == before


def test_a_link_given_whole_is_taken_at_its_word():
    settled = settle_link(blocks_of(qpsk()), RATE, Wanted(*(GIVEN.scheme, SYMBOL_RATE, GIVEN.pulse, 100.0)))
    assert settled.link.carrier_hz == 100.0
    assert settled.found == ()
    assert isinstance(settle_link([], RATE, GIVEN), NotFound)


def noise(count, seed=3):
    rng = np.random.default_rng(seed)
    return (0.05 * rng.normal(size=(count, 2))).astype(np.float32).view(np.complex64).ravel()


def stream_of(*parts, step=48_000):
    whole = np.concatenate(parts)
    return [Block(whole[at : at + step], at) for at in range(0, whole.size, step)]


def test_a_link_that_begins_late_in_a_recording_is_found_and_all_samples_are_counted():
    before = noise(480_000)
    blocks = stream_of(before, qpsk(24_000))
    seen = []
    outcome = run(InMemory(*blocks), Wanted(), ChainOptions(), observe=lambda block: seen.append(block.start))
    assert outcome.measured
    assert outcome.link.scheme.name == "qpsk"
    assert outcome.samples == before.size + 96_000
    assert seen == [block.start for block in blocks]
    assert outcome.acquired_at == pytest.approx(before.size, abs=0.1 * RATE)
    assert 0 < outcome.locked_pct < 25


def test_a_long_recording_of_nothing_is_looked_at_ever_less_and_said_to_be_so(monkeypatch):
    looked = []

    def none(head, rate, wanted):
        looked.append(head[0].start / rate)
        return NotFound("no clock line")

    monkeypatch.setattr("monitor.session.settle_link", none)
    silent = np.zeros(48_000, np.complex64)
    blocks = [Block(silent, at * silent.size) for at in range(160)]
    outcome = run(InMemory(*blocks), Wanted(), ChainOptions())
    assert looked == [0.0, 4.0, 8.0, 16.0, 32.0, 64.0, 128.0]
    assert outcome.samples == 160 * silent.size
    assert outcome.reason == "no clock line; nor is there a link in 6 later stretches"


def test_what_is_looked_at_has_no_gap_in_it(monkeypatch):
    given = []
    monkeypatch.setattr("monitor.session.identify", lambda samples, rate, wanted: given.append(samples.size))
    samples = qpsk()[:1000]
    settle_link(
        [Block(samples, 0), Block(samples, 2000, lost=1000), Block(samples, 3000), Block(samples, 4500, lost=500)],
        RATE,
        Wanted(),
    )
    assert given == [2000]


def test_a_frequency_link_with_a_given_carrier_is_measured_beside_a_stronger_neighbour():
    def sent(scheme, pulse, seed, symbols):
        spec = TransmitSpec(
            scheme=scheme,
            symbol_rate_hz=4000.0,
            sample_rate_hz=RATE,
            pulse=pulse,
            symbols=symbols,
            seed=seed,
            snr_db=25.0,
        )
        return transmit(spec).samples

    gmsk, neighbour = sent("gmsk", Pulse("gauss", 0.5), 2, 8000), sent("qpsk", Pulse("rrc", 0.35), 3, 8100)
    at = np.arange(gmsk.size) / RATE
    both = gmsk * np.exp(2j * np.pi * 9000 * at) + 3.0 * neighbour[: gmsk.size] * np.exp(-2j * np.pi * 5000 * at)
    wanted = Wanted(find_scheme("gmsk"), 4000.0, Pulse("gauss", 0.5), 9000.0)
    outcome = run(InMemory(*blocks_of(both.astype(np.complex64))), wanted, ChainOptions())
    assert outcome.measured, outcome.reason
    assert outcome.locked_pct > 98
    assert outcome.reading.opening_pct > 0
