"""The opening means the same however long the window is: its mean moves by 2 points at most from 500 symbols on."""

import numpy as np
import pytest

from dsp.block import Block
from dsp.chain import Chain, ChainOptions
from dsp.figures import Figures, window_opening
from dsp.transmitter import transmit
from tests.measuring import link_for, spec_for

LINKS = {
    "noise": ("qpsk", "rrc:0.35", 2.6, {"snr_db": 16.0}, None),
    "four levels": ("pam4", "rrc:0.35", 2.6, {"snr_db": 24.0}, None),
    "an echo": ("qpsk", "rrc:0.35", 2.6, {"snr_db": 22.0, "echoes": ((1.0, 0.25),)}, None),
    "one pole": ("pam2", "rect", 20.3, {"snr_db": 45.0, "t_over_tau": 2.0}, "none"),
}


def window_openings(name, symbols, window, seed):
    """Openings of each full window of a transmission, as the figures and as the quick look have it."""
    scheme, sent, sps, defects, received = LINKS[name]
    spec = spec_for(scheme, sent, sps, symbols, seed=seed, **defects)
    samples = transmit(spec).samples
    found = []

    def take(sums):
        found.append((Figures(sums, chain.context()).opening_pct(), window_opening(sums, chain.context())))

    chain = Chain(
        link_for(spec, received),
        complex_in=bool(np.iscomplexobj(samples)),
        options=ChainOptions(window=window),
        on_window=take,
    )
    chain.push(Block(samples, 0))
    chain.finish()
    return np.asarray(found)


@pytest.mark.parametrize("name", LINKS)
def test_the_mean_opening_does_not_move_with_the_window(name):
    means = {}
    for window, count in ((500, 14), (2_000, 6), (22_000, 2)):
        found = window_openings(name, count * window + 600, window, seed=42)
        assert len(found) >= count
        means[window] = found.mean(axis=0)
    spread = np.ptp(np.asarray(list(means.values())), axis=0)
    assert np.all(spread <= 2.0), means
    # the quick look at a window tells what its figures tell
    for pair in means.values():
        assert pair[0] == pytest.approx(pair[1], abs=1.0)
