"""The whole chain: cuts, gaps, fades, lock that can be false, slips, empty and odd input."""

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from dsp.block import Block
from dsp.chain import HOLD_S, LockGuard, SlipCounter
from dsp.eye import RUN, EyeSums
from dsp.figures import Figures
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse, root_raised_cosine
from dsp.tracking import Track
from tests.dsp.streams import BAUD, blocks_of, chain_for, link_of, run, send

# -- block invariance ---------------------------------------------------------------------------------------------------


def everything(sums):
    """All that a run's sums hold, as bytes and numbers."""
    if sums is None:
        return None
    result = {}
    for name, value in vars(sums).items():
        if isinstance(value, np.ndarray):
            result[name] = value.tobytes()
        elif name in ("clock", "carrier"):
            result[name] = {segment: row.tobytes() for segment, row in value.sums.items()}
        elif isinstance(value, int | float):
            result[name] = value
    return result


def outcome(chain):
    counts = ("samples", "samples_lost", "gaps", "locked_samples", "slips", "acquired_at")
    return everything(chain.total), chain.events, {name: getattr(chain, name) for name in counts}


def same(one, other):
    return outcome(one) == outcome(other)


CASES = {
    "real": ("pam4", 4.3, "rrc:0.35", {"snr_db": 25.0}, {}),
    "square": ("pam2", 11.0, "rect", {"snr_db": 25.0}, {}),
    "carrier": ("qpsk", 3.1, "rrc:0.35", {"snr_db": 18.0, "carrier_hz": 130.0}, {}),
    "fsk": (
        "fsk2",
        12.0,
        "rect",
        {"snr_db": 20.0, "carrier_hz": 20_000.0},
        {"centre_hz": 20_000.0, "half_band_hz": 12_000.0},
    ),
}
GAPS = {5000: 333, 5001: 20}
_whole = {}


def case(name, gaps):
    """Link, samples, options and the uncut run, made once."""
    if (name, gaps) not in _whole:
        scheme, sps, pulse, spec, options = CASES[name]
        samples = send(scheme, sps, pulse, symbols=int(24_000 / sps), **spec).samples
        link = link_of(scheme, sps, pulse)
        whole = run(link, samples, gaps=GAPS if gaps else None, window=700, **options)
        _whole[name, gaps] = link, samples, options, whole
    return _whole[name, gaps]


@pytest.mark.parametrize("gaps", [False, True], ids=["whole", "gaps"])
@pytest.mark.parametrize("name", CASES)
def test_blocks_of_one_sample_change_not_one_bit(name, gaps):
    link, samples, options, whole = case(name, gaps)
    assert whole.total is not None
    assert whole.total.symbols > 900
    cuts = range(1, samples.size)
    pieces = run(link, samples, cuts, GAPS if gaps else None, window=700, **options)
    assert same(pieces, whole)
    assert Figures(pieces.total, pieces.context()).reading() == Figures(whole.total, whole.context()).reading()


@pytest.mark.parametrize("gaps", [False, True], ids=["whole", "gaps"])
@pytest.mark.parametrize("name", CASES)
@settings(max_examples=5, deadline=None)
@given(cuts=st.lists(st.integers(0, 24_000), max_size=12), single=st.integers(0, 20_000))
def test_cuts_change_not_one_bit(name, gaps, cuts, single):
    link, samples, options, whole = case(name, gaps)
    more = run(link, samples, [*cuts, *range(single, single + 40)], GAPS if gaps else None, window=700, **options)
    assert same(more, whole)


def test_windows_are_the_same_however_the_stream_is_cut():
    link, samples, options, _ = case("carrier", True)
    kept = []
    for cuts in ((), range(17, 24_000, 401)):
        windows = []
        run_windows = chain_for(
            link, samples, window=700, on_window=lambda s, to=windows: to.append(everything(s)), **options
        )
        for block in blocks_of(samples, cuts, GAPS):
            run_windows.push(block)
        run_windows.finish()
        kept.append(windows)
    assert len(kept[0]) >= 3
    assert kept[0] == kept[1]


def test_a_comparison_of_runs_sees_a_single_trace_moved():
    """The check on the check: one count more in one cell is told."""
    link, samples, options, whole = case("real", False)
    other = run(link, samples, window=700, **options)
    assert same(other, whole)
    other.total.left[0, 3, 1, 500] += 1
    assert not same(other, whole)


# -- lock that can be false ---------------------------------------------------------------------------------------------

RATE = 4 * BAUD
N = 40_000


def noise(seed, *, complex_samples):
    rng = np.random.default_rng(seed)
    x = rng.standard_normal(N)
    return (x + 1j * rng.standard_normal(N)).astype(np.complex64) if complex_samples else x.astype(np.float32)


def coloured(seed, *, complex_samples):
    """Noise through a resonance at a quarter of the symbol rate, as sharp as a symbol's band."""
    b, a = signal.iirpeak(0.125, 3.0)
    return signal.lfilter(b, a, noise(seed, complex_samples=complex_samples)).astype(
        np.complex64 if complex_samples else np.float32
    )


def shaped(seed, *, complex_samples):
    """Noise with the spectrum of an RRC signal."""
    taps = root_raised_cosine(np.arange(-40, 41) / 4, 0.35)
    return np.convolve(noise(seed, complex_samples=complex_samples), taps, mode="same").astype(
        np.complex64 if complex_samples else np.float32
    )


def tone(frequency, *, complex_samples):
    x = np.exp(2j * np.pi * frequency * np.arange(N) + 0.3j)
    return x.astype(np.complex64) if complex_samples else x.real.astype(np.float32).copy()


NOT_A_LINK = {
    "white": lambda c: noise(1, complex_samples=c),
    "coloured": lambda c: coloured(2, complex_samples=c),
    "shaped": lambda c: shaped(3, complex_samples=c),
    "silence": lambda c: np.zeros(N, np.complex64 if c else np.float32),
    "constant": lambda c: np.full(N, 0.3, np.complex64 if c else np.float32),
    "tone at 0.1 of the symbol rate": lambda c: tone(0.025, complex_samples=c),
    "tone at half the symbol rate": lambda c: tone(0.125, complex_samples=c),
    "tone at a quarter of the symbol rate": lambda c: tone(0.0625, complex_samples=c),
    "tone at the symbol rate": lambda c: tone(0.25, complex_samples=c),
    "two tones a symbol rate apart": lambda c: tone(0.1251, complex_samples=c) + tone(-0.1249, complex_samples=c),
    "tone in noise": lambda c: tone(0.11, complex_samples=c) + 0.3 * noise(4, complex_samples=c),
    "another rate": lambda c: send("qpsk" if c else "pam2", 5.13, symbols=8000, snr_db=20.0).samples[:N],
    "half the rate": lambda c: send("qpsk" if c else "pam2", 8.0, symbols=5000, snr_db=20.0).samples[:N],
    "twice the rate": lambda c: send("qpsk" if c else "pam2", 2.0, symbols=20_000, snr_db=20.0).samples[:N],
}


@pytest.mark.parametrize("scheme", ["pam2", "pam4", "qpsk", "16qam"])
@pytest.mark.parametrize("what", NOT_A_LINK)
def test_what_is_no_such_link_gives_no_lock(what, scheme):
    samples = NOT_A_LINK[what](find_scheme(scheme).kind == "carrier")
    chain = run(link_of(scheme), samples)
    assert chain.total is None
    assert chain.events == []
    assert not chain.locked
    assert chain.acquired_at is None
    assert chain.last_reason


@pytest.mark.parametrize("scheme", ["fsk2", "gmsk"])
@pytest.mark.parametrize("seed", [1, 2])
def test_noise_through_the_discriminator_gives_no_lock(scheme, seed):
    pulse = "gauss:0.5" if scheme == "gmsk" else "rect"
    chain = run(link_of(scheme, 8.0, pulse), noise(seed, complex_samples=True), half_band_hz=1.2 * BAUD)
    assert chain.total is None
    assert chain.events == []


def test_the_link_itself_does_lock():
    """The check on the checks above: same helper, same length, a link."""
    for scheme in ("pam2", "pam4", "qpsk", "16qam"):
        chain = run(link_of(scheme), send(scheme, symbols=N // 4, snr_db=20.0).samples)
        assert chain.total is not None
        assert [event.state for event in chain.events] == ["gained", "lost"]
        assert chain.total.symbols > 9500


# -- gaps, fades, loss --------------------------------------------------------------------------------------------------


def test_a_lock_is_held_over_a_gap_behind_which_the_link_is_found_again():
    sent = send("qpsk", symbols=12_000, snr_db=18.0, carrier_hz=80.0)
    gap = {20_000: 12_345}
    chain = run(link_of("qpsk"), sent.samples, cuts=[1000, 19_000], gaps=gap)
    assert chain.gaps == 1
    assert chain.samples_lost == 12_345
    states = [event.state for event in chain.events]
    assert states == ["gained", "lost"]
    assert chain.events[1].reason == "end of stream"
    assert chain.total.symbols > 11_000
    reading = Figures(chain.total, chain.context()).reading()
    assert reading.clock_ppm == pytest.approx(0.0, abs=2.0)
    assert reading.carrier_hz == pytest.approx(80.0, abs=1.0)
    assert reading.snr_db == pytest.approx(18.0, abs=0.3)
    assert chain.slips == 0  # a gap is no slip


def test_many_gaps_in_a_row_are_one_lock():
    samples = send("qpsk", symbols=30_000, snr_db=18.0).samples
    gaps = dict.fromkeys(range(9000, samples.size - 9000, 9000), 40_000)
    chain = run(link_of("qpsk"), samples, gaps=gaps)
    assert chain.gaps == len(gaps) >= 5
    assert [event.state for event in chain.events] == ["gained", "lost"]
    assert chain.locked_samples > 0.97 * samples.size


@pytest.mark.parametrize("lost", [4000, 3 * int(RATE)], ids=["short gap", "long gap"])
def test_a_lock_ends_at_a_gap_that_only_noise_follows(lost):
    samples = np.concatenate((send("qpsk", symbols=6000, snr_db=18.0).samples, noise(3, complex_samples=True)[:24_000]))
    size = samples.size - 24_000
    chain = chain_for(link_of("qpsk"), samples)
    told = []
    for start in range(0, samples.size, 1000):
        gap = lost if start == size else 0
        chain.push(Block(samples[start : start + 1000], start + (lost if start >= size else 0), gap))
        if not told and len(chain.events) == 2:
            told.append((start + 1000 - size) / RATE)
    assert [(event.state, event.sample) for event in chain.events[1:]] == [("lost", size)]
    assert not chain.locked
    # behind a long gap at once
    assert told[0] <= (0.0 if lost > 2 * RATE else HOLD_S + 0.1) + 1000 / RATE


FADE = (0.9, 0.35)  # seconds


def faded(scheme, floor):
    return send(scheme, symbols=22_000, snr_db=floor or 60.0, dropouts=(FADE,)).samples


@pytest.mark.parametrize("scheme", ["pam2", "qpsk"])
@pytest.mark.parametrize("floor", [None, 12.0], ids=["into silence", "into noise"])
def test_a_fade_is_declared_within_200_symbols_or_50_ms_whichever_is_longer(scheme, floor):
    samples = faded(scheme, floor)
    chain = chain_for(link_of(scheme), samples)
    step = 100
    for start in range(0, samples.size, step):
        chain.push(Block(samples[start : start + step], start))
        if any(event.state == "lost" for event in chain.events):
            break
    declared = (start + step) / RATE
    # what has not yet arrived as a whole chunk (1024 samples here) cannot have been judged
    assert 0.0 < declared - FADE[0] < 0.05 + 1024 / RATE
    assert (
        FADE[0] - 0.055 < chain.events[1].sample / RATE < FADE[0] + 0.001
    )  # nothing measured after the light went out


@pytest.mark.parametrize("scheme", ["pam2", "qpsk"])
@pytest.mark.parametrize("floor", [None, 12.0], ids=["into silence", "into noise"])
def test_after_a_fade_the_link_is_found_again_without_restart(scheme, floor):
    chain = run(link_of(scheme), faded(scheme, floor))
    assert [event.state for event in chain.events] == ["gained", "lost", "gained", "lost"]
    assert chain.events[2].sample / RATE == pytest.approx(sum(FADE), abs=0.15)
    reading = Figures(chain.total, chain.context()).reading()
    assert reading.mer_db > 33.0 if floor is None else abs(reading.mer_db - floor) < 0.6


def test_a_fade_of_some_symbols_does_not_end_the_run():
    sent = send("qpsk", symbols=12_000, snr_db=20.0, dropouts=((0.6, 0.0008),))
    chain = run(link_of("qpsk"), sent.samples)
    assert [event.state for event in chain.events] == ["gained", "lost"]
    assert chain.slips == 0


def test_slow_links_are_judged_over_200_symbols():
    """100 symbols a second: 50 ms would be five symbols."""
    link = Link(find_scheme("pam2"), 800.0, 100.0, Pulse.parse("rrc:0.35"))
    sent = send("pam2", 8.0, symbols=2500, snr_db=20.0)
    samples = sent.samples.copy()
    samples[12_000:] = 0.0
    chain = chain_for(link, samples)
    for start in range(0, samples.size, 64):
        chain.push(Block(samples[start : start + 64], start))
        if chain.events and chain.events[-1].state == "lost":
            break
    assert chain.events[-1].state == "lost"
    assert 0 < start + 64 - 12_000 < 200 * 8 + 512


def test_the_tail_of_the_stream_is_used_and_the_counts_add_up():
    sent = send("pam2", symbols=3000, snr_db=20.0)
    samples = sent.samples
    chain = chain_for(link_of("pam2"), samples)
    chain.push(Block(samples, 0, clipped=3, nonfinite=2))
    chain.finish()
    assert (chain.samples, chain.clipped, chain.nonfinite, chain.gaps) == (samples.size, 3, 2, 0)
    assert chain.total.symbols > 3000 - 2 * 16 - 40  # both rims of neighbours, the filters' length
    assert chain.locked_samples == samples.size - chain.acquired_at


# -- the guard and the counter by themselves ----------------------------------------------------------------------------


def track_of(values, decided, instants=None):
    n = values.shape[1]
    zeros = np.zeros((2, n), np.float32)
    if instants is None:
        instants = np.arange(n + 1.0)
    return Track(
        instants, np.zeros(n + 1), values, decided, zeros, zeros.astype(np.int8), np.ones(2), np.zeros(2),
        (np.zeros(1, np.float32),), 0,
    )  # fmt: skip


def symbols(rng, n, noise_rms):
    decided = rng.choice([-1.0, 1.0], (2, n)).astype(np.float32)
    return (decided + noise_rms * rng.standard_normal((2, n))).astype(np.float32), decided


def test_the_guard_holds_above_its_floor_and_lets_go_below():
    rng = np.random.default_rng(1)
    for mer_db, holds in ((6.0, True), (4.0, False)):
        guard = LockGuard(200, 5.0, find_scheme("pam2"))
        noise_rms = 10 ** (-mer_db / 20)
        assert guard.holds(track_of(*symbols(rng, 199, noise_rms)))  # not a whole window yet
        assert guard.holds(track_of(*symbols(rng, 1000, noise_rms))) is holds


@pytest.mark.parametrize("cut", [1, 7, 50, 1000])
def test_the_guard_lets_go_within_a_window_of_the_loss_however_cut(cut):
    rng = np.random.default_rng(2)
    good, lost = symbols(rng, 1000, 0.1), symbols(rng, 400, 1.0)
    values, decided = (np.concatenate(pair, axis=1) for pair in zip(good, lost, strict=True))
    guard = LockGuard(200, 5.0, find_scheme("pam2"))
    for start in range(0, 1400, cut):
        if not guard.holds(track_of(values[:, start : start + cut], decided[:, start : start + cut])):
            break
    assert start + cut >= 1000
    assert start < 1200


# Es/N0 of a bit error rate of about 1e-2: Proakis and Salehi, Digital Communications, 5th ed., sec. 4.3
@pytest.mark.parametrize(
    ("scheme", "snr_db"), [("bpsk", 4.3), ("qpsk", 7.3), ("8psk", 11.5), ("16qam", 13.9), ("64qam", 19.6)]
)
def test_the_guard_tells_a_constellation_that_turns_from_one_with_many_errors(scheme, snr_db):
    kind, rng, n = find_scheme(scheme), np.random.default_rng(6), 200_000
    sent = rng.choice(kind.points(), n)
    noise_rms = np.sqrt(kind.symbol_energy() * 10 ** (-snr_db / 10) / 2)
    noise = noise_rms * (rng.standard_normal(n) + 1j * rng.standard_normal(n))

    def decided(z):
        points = kind.points()
        index = np.concatenate([np.argmin(np.abs(part[:, None] - points), axis=1) for part in np.array_split(z, 100)])
        return points[index]

    for turn, holds in ((0.0, True), (0.003, False), (0.1, False)):
        z = sent * np.exp(2j * np.pi * turn * np.arange(n)) + noise
        values, levels = (np.stack((x.real, x.imag)).astype(np.float32) for x in (z, decided(z)))
        guard = LockGuard(200, -50.0, kind)  # by its phase alone
        at = next(
            (k for k in range(0, n, 100) if not guard.holds(track_of(values[:, k : k + 100], levels[:, k : k + 100]))),
            n,
        )
        assert (at == n) is holds
        assert holds or at < (5000 if scheme == "64qam" else 2500)


def test_the_guard_is_not_fooled_by_nan():
    values, decided = symbols(np.random.default_rng(3), 400, 0.1)
    values[0, 300] = np.nan
    assert not LockGuard(200, 5.0, find_scheme("pam2")).holds(track_of(values, decided))


@pytest.mark.parametrize("cut", [1, 5, 16, 1000])
@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "pam4"])
def test_the_guard_tells_where_silence_began(cut, scheme):
    rng = np.random.default_rng(4)
    levels = np.asarray(find_scheme(scheme).rail_levels, np.float32)
    decided = rng.choice(levels, (2, 600))
    values = decided + 0.1 * rng.standard_normal((2, 600)).astype(np.float32)
    values[:, 200:204] = 0.0  # too short to be one
    values[:, 405:] = 0.01
    guard, told = LockGuard(200, 5.0, find_scheme(scheme)), None
    for start in range(0, 600, cut):
        at = guard.silent_from(track_of(values[:, start : start + cut], decided[:, start : start + cut]))
        if at is not None:
            told = start + at
            break
    # found by runs of 16; it is traced back as far as the run in hand
    assert told is not None
    assert 405 <= told < 405 + 16


def test_zero_levels_are_no_silence():
    """pam3 rests at 0 for a third of its symbols."""
    zeros = np.zeros((2, 300), np.float32)
    assert LockGuard(200, 5.0, find_scheme("pam3")).silent_from(track_of(zeros, zeros)) is None


def drift(n, *, slip_at=(), ppm=0.0, jitter=0.0, sps=4.0):
    k = np.arange(n + 1)
    ui = k * (1 + ppm * 1e-6) + jitter * np.random.default_rng(4).standard_normal(n + 1)
    for at, size, lasting in slip_at:
        ui = ui + size * np.clip((k - at) / lasting, 0, 1)
    return ui * sps


def count(instants, cut, sps=4.0):
    counter = SlipCounter()
    total, n = 0, instants.size - 1
    for start in range(0, n, cut):
        stop = min(start + cut, n)
        blank = np.zeros((2, stop - start), np.float32)
        total += counter.push(track_of(blank, blank, instants[start : stop + 1]), sps)
    return total


@pytest.mark.parametrize("cut", [1, 100, 256, 9999])
@pytest.mark.parametrize(
    ("slips", "expected"),
    [
        ((), 0),
        (((5000, 1, 1),), 1),
        (((5000, -1, 1),), 1),
        (((5000, 1, 150),), 1),
        (((4000, 1, 50), (7000, -1, 50)), 2),
        (((5000, 3, 100),), 3),
    ],
)
def test_whole_symbols_lost_against_the_straight_line_are_counted(slips, expected, cut):
    assert count(drift(10_000, slip_at=slips, ppm=150.0, jitter=0.03), cut) == expected


def test_a_clock_that_is_merely_off_or_wanders_slowly_slips_nothing():
    assert count(drift(30_000, ppm=-900.0, jitter=0.05), 333) == 0
    slow = 4 * (np.arange(30_001) + 2.0 * np.sin(2 * np.pi * np.arange(30_001) / 20_000))
    assert count(slow, 333) == 0


def test_whole_symbols_that_vanish_unannounced_claim_no_slip_and_no_clock_error():
    sent = send("pam2", 4.0, symbols=24_000, snr_db=25.0)
    at = 40_000
    samples = np.concatenate((sent.samples[:at], sent.samples[at + 4 * 3 :]))  # three symbols vanish
    chain = run(link_of("pam2"), samples)
    reading = Figures(chain.total, chain.context()).reading()
    # they leave the clock's grid as it was: nothing is to be seen
    assert chain.slips == 0
    assert reading.clock_ppm == pytest.approx(0.0, abs=1.0)


# -- odd input ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "fsk2"])
def test_nothing_and_too_little_end_quietly(scheme):
    link = link_of(scheme, 8.0, "rect" if scheme == "fsk2" else "rrc:0.35")
    dtype = np.float32 if scheme == "pam2" else np.complex64
    for size in (0, 1, 7, 300):
        chain = run(link, np.ones(size, dtype), cuts=[0, 0, 3])
        assert chain.total is None
        assert chain.samples == size


@pytest.mark.parametrize("gain", [1e-12, 1e-3, 3e4, 1e12])
def test_the_unit_of_the_samples_changes_nothing(gain):
    sent = send("qpsk", symbols=4000, snr_db=20.0)
    reading = [
        Figures(chain.total, chain.context()).reading()
        for chain in (run(link_of("qpsk"), (sent.samples * np.float32(g)).astype(np.complex64)) for g in (1.0, gain))
    ]
    assert reading[1].symbols == pytest.approx(reading[0].symbols, abs=2)
    assert reading[1].mer_db == pytest.approx(reading[0].mer_db, abs=0.02)
    assert reading[1].clock_ppm == pytest.approx(reading[0].clock_ppm, abs=0.3)
    assert reading[1].opening_pct == pytest.approx(reading[0].opening_pct, abs=0.5)


def test_every_nth_trace_is_drawn_and_every_symbol_summed():
    sent = send("qpsk", symbols=6000, snr_db=20.0)
    full, some = (run(link_of("qpsk"), sent.samples, every=every, window=1500) for every in (1, 4))
    assert full.total.symbols == some.total.symbols
    assert full.total.drawn == full.total.symbols
    assert some.total.drawn == pytest.approx(full.total.symbols / 4, abs=RUN)
    np.testing.assert_array_equal(some.total.gram, full.total.gram)
    assert full.total.left.sum() == 64 * 2 * full.total.drawn
    assert some.total.left.sum() == 64 * 2 * some.total.drawn


def test_the_total_is_the_sum_of_the_windows():
    sent = send("pam4", symbols=6000, snr_db=25.0)
    windows = []
    chain = chain_for(link_of("pam4"), sent.samples, window=1000, on_window=windows.append)
    chain.push(Block(sent.samples, 0))
    chain.finish()
    assert [sums.symbols for sums in windows] == [1000] * 5
    rest = chain.total.symbols - 5000
    assert 0 < rest < 1000
    merged = EyeSums(find_scheme("pam4"), chain.total.phases)
    for sums in windows:
        merged.merge(sums)
    assert merged.symbols == 5000
    assert np.all(chain.total.left >= merged.left)
    assert int(chain.total.left.sum() - merged.left.sum()) == 64 * rest


def test_links_and_events_are_values():
    chain = run(link_of("pam2"), send("pam2", symbols=2000, snr_db=20.0).samples)
    with pytest.raises(dataclasses.FrozenInstanceError):
        chain.events[0].sample = 3
