"""Signals from transmitters that nobody here wrote, through the whole program: each locks, with the true rate, carrier
and an open eye. What is true of each signal is checked in test_third_party.py.
"""

import numpy as np
import pytest

from dsp.chain import ChainOptions
from monitor.linkfile import LinkOptions
from monitor.session import run
from monitor.sources import SampleOptions, open_source
from tests.third_party import (
    codec2_fsk,
    direwolf_9600,
    keep,
    komm_stream,
    liquid_gmsk,
    liquid_stream,
    minimodem_afsk,
)

RATE_PPM = 3.0
RATE_UI = 0.01  # from end to end: what a short stream's edges allow


def replay(sent, folder, *, given=True):
    """The outcome of a run over what was sent, the link given or to be found."""
    if sent.format == "wav":
        options = SampleOptions()
    elif sent.path is not None:
        options = SampleOptions(rate_hz=sent.sample_rate_hz, format=sent.format)
    else:
        name = "cf32_le" if np.iscomplexobj(sent.samples) else "rf32_le"
        options = SampleOptions(rate_hz=sent.sample_rate_hz, format=name)
    link = LinkOptions(sent.symbol_rate_hz, sent.scheme, sent.pulse) if given else LinkOptions()
    path = sent.path or keep(sent, folder / "sent.iq")
    with open_source(str(path), options) as source:
        return run(source, link.wanted(), ChainOptions())


def check(outcome, sent, *, opening, carrier=True, locked_pct=98, rate_ui=RATE_UI):
    """Locked from near the start to the end, at the true rate and carrier, with the eye open at least so far."""
    assert outcome.measured, outcome.reason
    assert outcome.link.scheme.name == sent.scheme
    reading = outcome.reading
    found_hz = outcome.link.symbol_rate_hz * (1 + reading.clock_ppm * 1e-6)
    assert found_hz == pytest.approx(sent.symbol_rate_hz, rel=max(RATE_PPM * 1e-6, rate_ui / reading.symbols))
    assert outcome.slips == 0
    assert outcome.locked_pct > locked_pct
    assert reading.opening_pct > opening
    if carrier and reading.carrier_hz is not None:
        assert reading.carrier_hz == pytest.approx(sent.carrier_hz, abs=1e-4 * sent.symbol_rate_hz)


PLACES = [(4.0, 0.0), (2.3, 0.013), (37.3, -0.02)]  # samples a symbol, carrier in cycles a symbol
LIQUID_OPENING = {"bpsk": 95, "qpsk": 95, "8psk": 88, "16qam": 95, "64qam": 95}


@pytest.mark.parametrize(("sps", "carrier"), PLACES)
@pytest.mark.parametrize("scheme", LIQUID_OPENING)
def test_liquid_dsp_streams_of_any_rate_are_open(tmp_path, scheme, sps, carrier):
    sent = liquid_stream(scheme, sps, carrier=carrier, symbols=12000 if sps < 10 else 5000)
    check(replay(sent, tmp_path), sent, opening=LIQUID_OPENING[scheme])


@pytest.mark.parametrize(("sps", "carrier"), PLACES)
@pytest.mark.parametrize("scheme", LIQUID_OPENING)
def test_liquid_dsp_streams_are_identified(tmp_path, scheme, sps, carrier):
    sent = liquid_stream(scheme, sps, carrier=carrier, symbols=12000 if sps < 10 else 5000)
    outcome = replay(sent, tmp_path, given=False)
    assert {"scheme", "symbol_rate_hz", "pulse", "carrier_hz"} <= set(outcome.identified)
    check(outcome, sent, opening=90)


KOMM_OPENING = {"pam2": 95, "pam4": 95, "pam8": 90, "bpsk": 95, "qpsk": 95, "8psk": 88, "16qam": 95, "64qam": 95}


@pytest.mark.parametrize("pulse", ["rrc:0.35", "rc:0.35"])
@pytest.mark.parametrize("scheme", KOMM_OPENING)
def test_komm_s_cosine_pulses_are_open(tmp_path, scheme, pulse):
    sent = komm_stream(scheme, 4, pulse)
    check(replay(sent, tmp_path), sent, opening=KOMM_OPENING[scheme])


@pytest.mark.parametrize("scheme", ["pam2", "pam4", "qpsk", "16qam", "64qam"])
def test_komm_s_rectangles_are_open(tmp_path, scheme):
    sent = komm_stream(scheme, 8, "rect")
    check(replay(sent, tmp_path), sent, opening=60)


@pytest.mark.parametrize("pulse", ["rrc:0.35", "rc:0.35", "rect"])
@pytest.mark.parametrize("scheme", KOMM_OPENING)
def test_komm_streams_are_identified(tmp_path, scheme, pulse):
    sent = komm_stream(scheme, 8 if pulse == "rect" else 4, pulse)
    check(replay(sent, tmp_path, given=False), sent, opening=60)


@pytest.mark.parametrize("rate", [48000, 44100])
@pytest.mark.parametrize("baud", [300, 1200])
@pytest.mark.parametrize("given", [True, False], ids=["given", "found"])
def test_minimodem_s_tones_are_open(tmp_path, baud, rate, given):
    sent = minimodem_afsk(tmp_path, baud, rate)
    outcome = replay(sent, tmp_path, given=given)
    check(outcome, sent, opening=75, carrier=False)
    assert outcome.reading.carrier_hz == pytest.approx(np.mean(sent.tones_hz), abs=0.02 * sent.symbol_rate_hz)


@pytest.mark.parametrize("given", [True, False], ids=["given", "found"])
@pytest.mark.parametrize("is_complex", [True, False], ids=["iq", "real"])
@pytest.mark.parametrize("levels", [2, 4])
def test_codec2_s_tones_are_open(tmp_path, levels, is_complex, given):
    sent = codec2_fsk(tmp_path, levels, is_complex)
    outcome = replay(sent, tmp_path, given=given)
    check(outcome, sent, opening=60, carrier=False)
    assert outcome.reading.carrier_hz == pytest.approx(sent.carrier_hz, abs=0.02 * sent.symbol_rate_hz)


@pytest.mark.parametrize("given", [True, False], ids=["given", "found"])
def test_liquid_dsp_s_gmsk_is_open(tmp_path, given):
    sent = liquid_gmsk(8, 0.5)
    check(replay(sent, tmp_path, given=given), sent, opening=45, carrier=False)


@pytest.mark.parametrize("given", [True, False], ids=["given", "found"])
@pytest.mark.parametrize("rate", [48000, 44100])
def test_direwolf_s_packets_are_measured_burst_by_burst(tmp_path, rate, given):
    sent = direwolf_9600(tmp_path, rate, packets=8)
    outcome = replay(sent, tmp_path, given=given)
    assert outcome.measured, outcome.reason
    assert outcome.link.scheme.name == "pam2"
    gained = [event.sample for event in outcome.events if event.state == "gained"]
    lost = [event.sample for event in outcome.events if event.state == "lost"]
    assert len(gained) == len(lost) == len(sent.bursts)
    sps = rate / sent.symbol_rate_hz
    for (start, stop), begin, end in zip(sent.bursts, gained, lost, strict=True):
        assert start - 2 * sps <= begin <= start + 200 * sps
        assert stop - 60 * sps <= end <= stop + 5 * sps
    found_hz = outcome.link.symbol_rate_hz * (1 + outcome.reading.clock_ppm * 1e-6)
    assert found_hz == pytest.approx(sent.symbol_rate_hz, rel=1e-5)
    symbols = sum(stop - start for start, stop in sent.bursts) / sps
    assert 0.9 * symbols < outcome.reading.symbols < symbols
    # edges stand on whole samples: at 44100 Hz they alone spread by 0.22 UI peak to peak
    assert outcome.reading.opening_pct > (90 if rate == 48000 else 60)
