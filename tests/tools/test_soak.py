"""The soak: what it sends, what it judges, and a short run of it."""

import json
import sys

import numpy as np
import pytest

from dsp.block import Block
from tests.monitor.watched import QPSK_LINK, Watched
from tools import soak


def test_the_loop_that_is_sent_has_no_seam_and_the_snr_it_says():
    samples = soak.loop(symbols=4096, snr_db=20.0)
    watched = Watched(QPSK_LINK)
    for number in range(9):
        watched.engine.feed(Block(samples, number * samples.size))
    assert [line[3]["state"] for line in watched.of("lock")] == ["gained"]
    # one symbol energy over the noise behind the matched filter, as tools/transmit.py has it
    assert watched.of("reading")[-1][3]["snr_db"] == pytest.approx(20.0, abs=0.3)


def lines(readings, **stop):
    made = [{"kind": "reading", "sample": round(s * 1000), "seconds": s} for s in readings]
    lost = {"kind": "lock", "state": "lost", "sample": 0, "seconds": 0.0}
    return [*made, lost, {"kind": "stop", "samples": 10_000, "samples_lost": 0, **stop}]


SENT = {"sent": 10_000, "late_s": 0.0, "took_s": 40.0}


def test_a_run_without_loss_and_with_flat_memory_has_no_fault():
    found = soak.judged(lines(np.arange(1, 10) + 0.02), SENT, [150.0] * 10 + [200.0] * 30, 1000.0, "")
    assert soak.faults(found) == []
    assert found["readings_missing"] == found["locks_lost"] == 0


@pytest.mark.parametrize(
    ("readings", "stop", "memory", "fault"),
    [
        ([1, 2, 3, 5, 6, 7, 8, 9], {}, [200.0] * 40, "1 readings missing"),
        (range(1, 10), {"samples": 9900, "samples_lost": 100}, [200.0] * 40, "100 samples lost"),
        (range(1, 10), {"samples": 9999}, [200.0] * 40, "9999 of 10000 measured"),
        (range(1, 10), {}, np.linspace(200, 230, 40), "memory grew"),
    ],
)
def test_what_did_not_hold_is_told(readings, stop, memory, fault):
    found = soak.judged(lines(readings, **stop), SENT, list(memory), 1000.0, "")
    assert [fault in text for text in soak.faults(found)] == [True]


def test_a_journal_without_its_end_measures_nothing():
    with pytest.raises(soak.Unmeasured, match="no stop line"):
        soak.judged(lines([1.0])[:-1], SENT, [], 1000.0, "")


@pytest.mark.skipif(sys.platform != "linux", reason="memory is read from /proc")
def test_a_short_soak_holds(capsys):
    assert soak.main(["--seconds", "4", "--speed", "1", "--rate", "16000", "--json"]) == 0
    found = json.loads(capsys.readouterr().out.splitlines()[-1])
    assert found["samples_measured"] == found["samples_sent"] == 64_000
    assert found["readings"] >= 3
    assert found["faults"] == []
