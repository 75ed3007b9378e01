import pytest

from monitor.snapshot import Snapshot
from tests.monitor.views.live_states import make_states
from tests.monitor.views.synthetic_eyes import baseband_reading, full_reading, make_eye

NOTES = ("3 gaps in the stream: 1,024 samples lost in all.", "0.02 % of the samples were clipped.")
SOURCE = "tcp://skerry-7.harbour.example:5555"


@pytest.fixture(scope="session")
def snapshots():
    """Realistic states, by name."""
    pam2 = make_eye(2, noise=0.06, rolloff=0.5, symbols=1000)
    qpsk = make_eye(2, ("I", "Q"), noise=0.09, echo=0.06, symbols=1000)
    pam4 = make_eye(4, noise=0.1, symbols=2000)
    qam64 = make_eye(8, ("I", "Q"), noise=0.12, symbols=3000)
    closed = make_eye(2, noise=0.35, echo=0.55, symbols=1000)
    locked = "timing and carrier locked since 0.21 s"
    return {
        "pam2": Snapshot(pam2[0], baseband_reading(*pam2), SOURCE, "pam2 · 1,200 symbols/s", locked, (), 12.5, 100.0),
        "qpsk": Snapshot(qpsk[0], full_reading(*qpsk), SOURCE, "qpsk · 9,600 symbols/s", locked, NOTES, 12.5, 100.0),
        "pam4": Snapshot(pam4[0], full_reading(*pam4), SOURCE, "pam4 · 2,400 symbols/s", locked, (), 7212.5, 37.0),
        "64qam": Snapshot(qam64[0], full_reading(*qam64), SOURCE, "64qam", locked, NOTES * 4, 125.0, 100.0),
        "closed": Snapshot(closed[0], full_reading(*closed), SOURCE, "pam2", locked, (), 3.0, 100.0),
        "no reading": Snapshot(pam2[0], None, SOURCE, "pam2", locked, ("too few symbols: 210 of 500",), 0.2, 100.0),
        "no lock": Snapshot(None, None, SOURCE, "rate to be found", "No timing lock", NOTES, 4.0, None),
        "nothing": Snapshot(),
    }


@pytest.fixture(scope="session")
def live_states():
    """Realistic states of a live watch, by name."""
    return make_states()
