"""Bits and their mapping."""

import komm
import numpy as np
import pytest

from dsp.errors import DspError
from dsp.link import SCHEMES
from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, prbs, transmit
from dsp.transmitter.bits import from_gray, map_bits


@pytest.mark.parametrize(
    ("order", "bits"),
    # first bits of x^7 + x^6 + 1 and x^9 + x^5 + 1 from a register of ones (ITU-T O.150; polynomials from memory, bits
    # recomputed)
    [(7, "11111110000001000001"), (9, "11111111100000111101")],
)
def test_prbs_starts_with_the_published_polynomials_first_bits(order, bits):
    assert "".join(map(str, prbs(order, 20))) == bits


@pytest.mark.parametrize(("order", "tap", "inverted"), [(7, 6, 0), (9, 5, 0), (15, 14, 1), (23, 18, 1)])
def test_prbs_obeys_its_recurrence_and_has_its_period_and_balance(order, tap, inverted):
    bits = prbs(order, 2**order - 1) ^ inverted
    assert bits.sum() == 2 ** (order - 1)
    np.testing.assert_array_equal(bits[order:], bits[:-order] ^ bits[order - tap : -tap])
    np.testing.assert_array_equal(prbs(order, 40, 2**order - 1), prbs(order, 40))
    np.testing.assert_array_equal(prbs(order, 40, -20)[20:], prbs(order, 20))


@pytest.mark.parametrize(("order", "polynomial"), [(7, (1 << 7) | (1 << 6) | 1), (9, (1 << 9) | (1 << 5) | 1)])
def test_prbs_is_a_maximum_length_sequence_of_komm_somewhere_in_its_period(order, polynomial):
    period = 2**order - 1
    reference = np.asarray(komm.LFSRSequence(feedback_polynomial=polynomial).bit_sequence).astype(np.uint8)
    ours = prbs(order, period)
    turned = [
        np.array_equal(np.roll(ours, k), reference) or np.array_equal(np.roll(ours, k)[::-1], reference)
        for k in range(period)
    ]
    assert any(turned)


def test_an_unknown_order_is_refused():
    with pytest.raises(DspError, match="order must be one of"):
        prbs(8, 10)


@pytest.mark.parametrize("name", sorted(set(SCHEMES) - {"pam3", "pi4dqpsk"}))
def test_nearest_points_differ_in_one_bit(name):
    scheme = SCHEMES[name]
    words = np.arange(2**scheme.bits)
    bits = ((words[:, None] >> np.arange(scheme.bits - 1, -1, -1)) & 1).astype(np.uint8)
    points = scheme.points()[map_bits(bits.ravel(), scheme)]
    assert np.unique(points).size == 2**scheme.bits
    distance = np.abs(points[:, None] - points[None, :])
    near = (distance > 0) & (distance < distance[distance > 1e-9].min() * 1.001)
    differing = (bits[:, None, :] != bits[None, :, :]).sum(axis=2)
    assert (differing[near] == 1).all()


@pytest.mark.parametrize(("name", "order"), [("16qam", 4), ("64qam", 8)])
def test_qam_points_and_labels_are_those_of_komm(name, order):
    scheme = SCHEMES[name]
    bits_a_rail = scheme.bits // 2
    reference = komm.QAMConstellation((order, order))
    labels = np.asarray(komm.ReflectedRectangularLabeling((bits_a_rail, bits_a_rail)).matrix).astype(np.uint8)
    points = scheme.points()[map_bits(labels.ravel(), scheme)]
    np.testing.assert_array_equal(points, np.asarray(reference.matrix).ravel())
    assert scheme.symbol_energy() == pytest.approx(float(reference.mean_energy()))


def test_8psk_labels_are_reflected_gray_round_the_circle_as_in_komm():
    labels = np.asarray(komm.ReflectedLabeling(3).matrix).astype(np.uint8)
    scheme = SCHEMES["8psk"]
    points = scheme.points()[map_bits(labels.ravel(), scheme)]
    reference = np.asarray(komm.PSKConstellation(8, phase_offset=1 / 16).matrix).ravel()
    np.testing.assert_allclose(points / np.abs(points), reference, atol=1e-12)


@pytest.mark.parametrize(("name", "order"), [("pam4", 4), ("pam8", 8)])
def test_pam_energy_is_that_of_komm(name, order):
    assert SCHEMES[name].symbol_energy() == pytest.approx(float(komm.PAMConstellation(order).mean_energy()))


def test_gray_words_count_up_by_one_bit():
    np.testing.assert_array_equal(from_gray(np.array([0, 1, 3, 2, 6, 7, 5, 4])), np.arange(8))


def test_the_stream_carries_the_prbs_from_its_first_bit():
    spec = TransmitSpec(
        scheme="pam2", symbol_rate_hz=1.0, sample_rate_hz=4.0, pulse=Pulse("rect"), symbols=300, bits="prbs7", gain=1.0
    )
    sent = transmit(spec)
    np.testing.assert_array_equal(sent.bits, prbs(7, 300))
    # read back from the waveform itself, at the middle of each symbol
    np.testing.assert_array_equal(sent.samples[1::4] > 0, prbs(7, 300) == 1)


def test_pi4dqpsk_bits_are_the_change_of_phase():
    spec = TransmitSpec(
        scheme="pi4dqpsk", symbol_rate_hz=1.0, sample_rate_hz=5.0, pulse=Pulse("rc", 0.5), symbols=500, gain=1.0
    )
    sent = transmit(spec)
    at_instants = sent.samples[2::5].astype(np.complex128)
    np.testing.assert_allclose(np.abs(at_instants), np.sqrt(2), rtol=2e-3)
    steps = np.angle(at_instants[1:] / at_instants[:-1]) / (np.pi / 4)
    pairs = sent.bits.reshape(-1, 2)[1:]
    # ETSI EN 300 392-2, sec. 5 (from memory): 00 +pi/4, 01 +3pi/4, 11 -3pi/4, 10 -pi/4
    wanted = np.array([[1.0, 3.0], [-1.0, -3.0]])[pairs[:, 0], pairs[:, 1]]
    np.testing.assert_allclose(steps, wanted, atol=0.01)


def test_pam3_sends_its_three_levels_equally_often_and_holds_no_bits():
    spec = TransmitSpec(scheme="pam3", symbol_rate_hz=1.0, sample_rate_hz=2.0, pulse=Pulse("rect"), symbols=30000)
    sent = transmit(spec)
    assert sent.bits.size == 0
    values, counts = np.unique(sent.symbols, return_counts=True)
    np.testing.assert_array_equal(values, [-2.0, 0.0, 2.0])
    assert np.abs(counts - 10000).max() < 5 * np.sqrt(30000 * 2 / 9)
