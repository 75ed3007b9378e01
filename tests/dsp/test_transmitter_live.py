"""The transmitter that can be adjusted while it runs: the same stream without a change, and no jump at one."""

import math

import numpy as np
import pytest

from dsp.errors import DspError
from dsp.pulses import Pulse
from dsp.transmitter import LiveTransmitter, TransmitSpec, live, transmit

SIZES = (1, 700, 33, 4096, 1, 2048)


def spec_of(**changes):
    spec = {
        "scheme": "qpsk",
        "symbol_rate_hz": 1.0,
        "sample_rate_hz": 2.7,
        "pulse": Pulse("rrc", 0.35),
        "symbols": 4000,
    }
    return TransmitSpec(**{**spec, **changes})


def made(transmitter, count, sizes=SIZES):
    parts = []
    left, turn = count, 0
    while left:
        size = min(left, sizes[turn % len(sizes)])
        parts.append(transmitter.block(size))
        left -= size
        turn += 1
    return np.concatenate(parts)


SPECS = {
    "plain": spec_of(bits="prbs23", clock_ppm=200.0, clock_drift_ppm_s=0.02, delay_ui=0.3),
    "everything": spec_of(
        scheme="oqpsk",
        snr_db=15.0,
        carrier_hz=0.01,
        carrier_phase_deg=30.0,
        clock_ppm=30.0,
        clock_drift_ppm_s=0.001,
        jitter_rms_ui=0.01,
        jitter_sine_ui=0.1,
        jitter_sine_hz=0.001,
        echoes=((1.3, 0.2 + 0.1j),),
        t_over_tau=3.0,
        iq_gain_db=0.5,
        dc=0.1 - 0.2j,
        clipping="soft",
        clip_at=0.7,
        dropouts=((100.0, 20.0),),
        pulse=Pulse("rc", 0.5),
    ),
    "held": spec_of(scheme="pam4", pulse=Pulse("rect"), t_over_tau=1.0, jitter_rms_ui=0.02, snr_db=20.0, dc=0.1),
    "held, sharp": spec_of(scheme="pam3", pulse=Pulse("rect"), jitter_rms_ui=0.02, clipping="hard", clip_at=0.4),
    "gauss": spec_of(scheme="16qam", pulse=Pulse("gauss", 0.3)),
    "gauss, moved": spec_of(scheme="16qam", pulse=Pulse("gauss", 0.3), jitter_rms_ui=0.02),
    "bpsk": spec_of(scheme="bpsk", carrier_hz=-0.02),
    "gmsk": spec_of(scheme="gmsk", pulse=Pulse("gauss", 0.3), snr_db=20.0, echoes=((2.0, 0.1j),)),
    "fsk2": spec_of(scheme="fsk2", pulse=Pulse("rect"), jitter_rms_ui=0.02, t_over_tau=2.0),
    "fsk4, rrc": spec_of(scheme="fsk4", pulse=Pulse("rrc", 0.5)),
    "passband": spec_of(carrier_hz=0.6, passband=True, snr_db=20.0),
}


@pytest.mark.parametrize("spec", SPECS.values(), ids=SPECS.keys())
@pytest.mark.parametrize("rename_after", [1 << 20, 512])
def test_without_changes_it_is_the_stream_of_the_specification(monkeypatch, spec, rename_after):
    monkeypatch.setattr(live, "_RENAME_AFTER", rename_after)
    transmitter = LiveTransmitter(spec)
    want = transmit(spec)
    got = made(transmitter, spec.samples)
    assert got.dtype == want.samples.dtype
    assert transmitter.position == spec.samples
    assert (transmitter.gain, transmitter.noise_rms) == (want.gain, want.noise_rms)
    np.testing.assert_allclose(got, want.samples, atol=2e-6)


@pytest.mark.parametrize("changes", [{"phase_noise_deg": 1.0}, {"scheme": "pi4dqpsk"}], ids=str)
@pytest.mark.parametrize("rename_after", [1 << 20, 512])
def test_what_adds_up_from_before_the_start_is_the_same_but_for_a_turn(monkeypatch, changes, rename_after):
    monkeypatch.setattr(live, "_RENAME_AFTER", rename_after)
    spec = spec_of(symbols=1500, **changes)
    got, want = made(LiveTransmitter(spec), spec.samples), transmit(spec).samples
    turn = np.vdot(want, got)
    np.testing.assert_allclose(got, want * (turn / abs(turn)), atol=2e-6)


# --- continuity: no sample beside a change bends more than the stream does elsewhere

SMOOTH = {"sample_rate_hz": 40.0, "symbols": 1, "gain": 0.25}
CHANGES = {
    "carrier": {"carrier_hz": 0.05},
    "clock": {"clock_ppm": 3000.0},
    "drift": {"clock_drift_ppm_s": 100.0},
    "sine": {"jitter_sine_ui": 0.2, "jitter_sine_hz": 0.02},
    "echo": {"echoes": ((1.4, 0.5j), (0.0, -0.2))},
    "low-pass": {"t_over_tau": 1.0},
    "imbalance": {"iq_gain_db": 2.0, "iq_skew_deg": 15.0},
    "dc": {"dc": 0.7 - 0.5j},
    "clipping": {"clipping": "soft", "clip_at": 0.25},
    "walk": {"phase_noise_deg": 0.3},
}


@pytest.mark.parametrize("scheme", ["qpsk", "oqpsk", "gmsk"])
@pytest.mark.parametrize("name", CHANGES)
def test_a_change_and_its_end_leave_no_jump(scheme, name):
    pulse = Pulse("gauss", 0.3) if scheme == "gmsk" else Pulse("rrc", 0.35)
    spec = spec_of(scheme=scheme, pulse=pulse, carrier_hz=0.02, **SMOOTH)
    transmitter = LiveTransmitter(spec)
    before = {key: getattr(spec, key) for key in CHANGES[name]}
    parts = [transmitter.block(4000 + 7)]
    for change in (CHANGES[name], before, CHANGES[name]):
        transmitter.change(**change)
        parts.extend(transmitter.block(size) for size in (1, 300, 4000))
    ends = np.cumsum([part.size for part in parts])[:-1]
    bend = np.abs(np.diff(np.concatenate(parts).astype(complex), n=2))
    beside = np.concatenate([bend[end - 3 : end + 3] for end in ends])
    # a jump of a hundredth of a level unit would bend by 0.0025
    assert beside.max() < 1.3 * bend.max()
    assert bend.max() < 0.012


def test_white_jitter_starts_and_ends_without_a_jump():
    transmitter = LiveTransmitter(spec_of(**SMOOTH))
    still = LiveTransmitter(spec_of(**SMOOTH))
    parts = [transmitter.block(4000)]
    transmitter.change(jitter_rms_ui=0.01)
    parts += [transmitter.block(8000), transmitter.block(1)]
    transmitter.change(jitter_rms_ui=0.0)
    parts += [transmitter.block(20000) for _ in range(6)]
    got = np.concatenate(parts)
    want = still.block(got.size)
    assert np.abs(got[:4200] - want[:4200]).max() < 0.01
    assert np.abs(got[4000:12000] - want[4000:12000]).max() > 0.01
    # the pulses of symbols that were moved die away, and then the streams are one again
    np.testing.assert_allclose(got[-40000:], want[-40000:], atol=1e-6)
    assert transmitter._path.shape.way == "regular"


# --- what a change comes to

STEADY = {
    "echo": {"echoes": ((1.4, 0.5j),)},
    "low-pass": {"t_over_tau": 1.0},
    "imbalance": {"iq_gain_db": 2.0, "iq_skew_deg": 15.0},
    "dc": {"dc": 0.7 - 0.5j},
    "clipping": {"clipping": "hard", "clip_at": 0.2},
}


@pytest.mark.parametrize("name", STEADY)
def test_after_the_fade_the_stream_is_that_of_the_new_specification(name):
    base = {"gain": 0.25, "symbols": 3000, "carrier_hz": 0.02}
    transmitter = LiveTransmitter(spec_of(**base))
    made(transmitter, 1000)
    transmitter.change(**STEADY[name])
    made(transmitter, 44)
    got = made(transmitter, 3000)
    want = transmit(spec_of(**base, **STEADY[name])).samples[1044:4044]
    np.testing.assert_allclose(got, want, atol=2e-6)
    assert np.abs(got - transmit(spec_of(**base)).samples[1044:4044]).max() > 0.05


def test_a_low_pass_ahead_of_a_frequency_modulator_keeps_the_phase():
    base = {"scheme": "fsk2", "pulse": Pulse("rect"), "sample_rate_hz": 20.0, "symbols": 400}
    transmitter = LiveTransmitter(spec_of(**base))
    first = transmitter.block(2000)
    transmitter.change(t_over_tau=2.0)
    rest = transmitter.block(6000)
    got, gain = np.concatenate([first, rest]), transmitter.gain
    np.testing.assert_allclose(np.abs(got), gain, rtol=1e-5)
    steps = np.angle(got[1:] * np.conj(got[:-1]))
    assert np.abs(steps).max() < math.pi / 20 * 1.3  # the tones turn by pi/20 a sample; the fade may add a little
    want = transmit(spec_of(**base, t_over_tau=2.0)).samples[3000:8000]
    turn = np.vdot(want, got[3000:8000])
    np.testing.assert_allclose(got[3000:8000], want * (turn / abs(turn)), atol=1e-5)


def test_the_carrier_goes_on_from_the_phase_it_has_reached():
    plain, turned = LiveTransmitter(spec_of(**SMOOTH)), LiveTransmitter(spec_of(**SMOOTH))
    phases = []
    for hz in (0.03, -0.5, 0.0, 0.1):
        turned.change(carrier_hz=hz)
        phases.append(np.full(777, hz / 40.0))
        a, b = plain.block(777), turned.block(777)
        reached = np.concatenate(([0.0], np.cumsum(np.concatenate(phases))))[-778:-1]
        np.testing.assert_allclose(b, a * np.exp(2j * np.pi * reached), atol=1e-6)


def edges_of(samples):
    """Where a rectangular stream crosses zero, in samples."""
    signs = np.sign(samples)
    return np.flatnonzero(signs[1:] * signs[:-1] < 0) + 0.5


def test_the_clock_goes_on_from_where_it_is_at_another_pace():
    spec = spec_of(scheme="pam2", pulse=Pulse("rect"), sample_rate_hz=200.0, symbols=1)
    transmitter = LiveTransmitter(spec)
    parts, clock = [], [np.zeros(1)]
    for ppm in (0.0, 5000.0, -8000.0):
        transmitter.change(clock_ppm=ppm)
        parts.append(transmitter.block(20_001))
        clock.append(clock[-1][-1] + np.arange(1, 20_002) * (1 + 1e-6 * ppm) / 200.0)
    got = edges_of(np.concatenate(parts))
    u = np.interp(got, np.arange(60_004), np.concatenate(clock))
    off = (u - u[0] + 0.5) % 1.0 - 0.5
    assert got.size > 100
    assert np.abs(off).max() < 1.1 / 200.0  # an edge is known to a sample


def test_drift_adds_to_the_clock_and_stops_at_its_limit():
    spec = spec_of(scheme="pam2", pulse=Pulse("rect"), sample_rate_hz=10.0, clock_drift_ppm_s=100.0, symbols=1)
    transmitter = LiveTransmitter(spec)
    transmitter.block(500)
    assert transmitter.clock_ppm == pytest.approx(5000.0)
    transmitter.change(clock_drift_ppm_s=0.0)
    transmitter.block(500)
    assert transmitter.clock_ppm == pytest.approx(5000.0)
    transmitter.change(clock_drift_ppm_s=1000.0)
    transmitter.block(500)
    transmitter.block(500)
    assert transmitter.clock_ppm == 10_000.0
    transmitter.change(clock_ppm=-3.0, clock_drift_ppm_s=0.0)
    transmitter.block(1)
    assert transmitter.clock_ppm == -3.0


def test_the_noise_follows_and_the_level_does_not():
    transmitter, quiet = LiveTransmitter(spec_of(snr_db=20.0, gain=0.1)), LiveTransmitter(spec_of(gain=0.1))
    measured = []
    for snr_db in (20.0, 10.0, None, 3.0):
        transmitter.change(snr_db=snr_db)
        noise = transmitter.block(20_000) - quiet.block(20_000)
        measured.append(float(np.mean(np.abs(noise) ** 2)))
        assert transmitter.gain == 0.1
    # E|a|^2 = 2 and 2.7 samples a symbol for a pulse of unit energy: see TransmitSpec.snr_db
    wanted = [0.01 * 2 * 2.7 * 10 ** (-snr / 10) for snr in (20.0, 10.0, 3.0)]
    np.testing.assert_allclose(np.delete(measured, 2), wanted, rtol=4 / math.sqrt(20_000))
    assert measured[2] < 1e-12


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_the_sine_of_the_jitter_goes_on_in_phase_when_its_frequency_changes(seed):
    spec = spec_of(
        scheme="pam2",
        pulse=Pulse("rect"),
        sample_rate_hz=400.0,
        symbols=1,
        seed=seed,
        jitter_sine_ui=0.2,
        jitter_sine_hz=0.02,
    )
    transmitter = LiveTransmitter(spec)
    parts = [transmitter.block(40_123)]
    transmitter.change(jitter_sine_hz=0.08)
    parts.append(transmitter.block(60_000))
    moves, steps = moves_of(np.concatenate(parts))
    assert np.ptp(moves) == pytest.approx(0.4, abs=0.02)
    # the steepest slope of a sine of 0.2 UI at 0.08 Hz, and what a sample's width adds
    assert steps.max() < 2 * math.pi * 0.08 * 0.2 + 2 / 400.0


def moves_of(samples):
    """Of a rectangular stream of 400 samples a symbol: how far each edge is off its grid, and the slope of that."""
    edges = edges_of(samples) / 400.0
    moves = (edges - edges[0] + 0.5) % 1.0 - 0.5
    return moves, np.abs(np.diff(moves)) / np.round(np.diff(edges))


def test_sinusoidal_jitter_swells_to_a_new_peak():
    spec = spec_of(scheme="pam2", pulse=Pulse("rect"), sample_rate_hz=400.0, symbols=1, jitter_sine_hz=0.02)
    transmitter = LiveTransmitter(spec)
    parts = [transmitter.block(round(400 * 106.0))]  # the sine is at its crest, a quarter of 50 symbols, soon after
    transmitter.change(jitter_sine_ui=0.4)
    parts.append(transmitter.block(80_000))
    moves, steps = moves_of(np.concatenate(parts))
    assert np.ptp(moves) == pytest.approx(0.8, abs=0.02)
    assert steps.max() < 2 * math.pi * 0.02 * 0.4 + 0.4 / 64 + 2 / 400.0


def test_phase_noise_that_ends_leaves_the_carrier_where_it_is():
    plain, walking = LiveTransmitter(spec_of(**SMOOTH)), LiveTransmitter(spec_of(**SMOOTH))
    walking.change(phase_noise_deg=5.0)
    pairs = [(walking.block(3000), plain.block(3000))]
    walking.change(phase_noise_deg=0.0)
    pairs += [(walking.block(9000), plain.block(9000))]
    turns = [float(np.angle(np.vdot(b[-50:], a[-50:]))) for a, b in pairs]
    # the steps of the symbols ahead, 123 of 40 samples for this pulse, were taken before the change
    ratio = np.concatenate([a * np.conj(b) for a, b in pairs])[8200:]
    assert np.ptp(np.angle(ratio[np.abs(ratio) > 0.01] * np.exp(-1j * turns[1]))) < 1e-3
    assert abs(turns[1]) > 0.02


def test_silence_leaves_the_noise_and_the_clock_running():
    transmitter, whole = LiveTransmitter(spec_of()), LiveTransmitter(spec_of())
    transmitter.silent = True
    assert not transmitter.block(500).any()
    transmitter.silent = False
    whole.block(500)
    np.testing.assert_array_equal(transmitter.block(500), whole.block(500))
    noisy = LiveTransmitter(spec_of(snr_db=10.0))
    noisy.silent = True
    assert np.std(noisy.block(5000)) == pytest.approx(noisy.noise_rms, rel=0.05)


def test_a_change_during_a_fade_waits_for_its_end():
    transmitter = LiveTransmitter(spec_of(sample_rate_hz=10.0, gain=0.2))
    transmitter.block(100)
    transmitter.change(dc=1.0)
    transmitter.block(10)
    transmitter.change(dc=0.0)
    assert transmitter.spec.dc == 1.0
    transmitter.block(10)
    assert transmitter.spec.dc == 1.0
    transmitter.block(140)
    transmitter.block(1)
    assert transmitter.spec.dc == 0.0


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"scheme": "bpsk"}, "scheme cannot change"),
        ({"gain": 1.0}, "gain cannot change"),
        ({"loudness": 1.0}, "loudness cannot change"),
        ({"snr_db": 1000.0}, "snr_db must be"),
        ({"snr_db": 10.0, "jitter_rms_ui": -1.0}, "jitter_rms_ui must be"),
    ],
)
def test_a_change_of_no_use_is_refused_and_nothing_changes(changes, message):
    transmitter = LiveTransmitter(spec_of())
    with pytest.raises(DspError, match=message):
        transmitter.change(**changes)
    transmitter.block(10)
    assert transmitter.spec.snr_db is None


def test_blocks_below_one_sample_are_refused():
    with pytest.raises(DspError, match="count must be"):
        LiveTransmitter(spec_of()).block(0)
