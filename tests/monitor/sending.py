"""Senders for the tests of the watch: framed QPSK over a socket in this process, or from a process that can be killed.

As a program, ``python sending.py ADDRESS STREAM FILE`` binds a PUSH socket and sends the file's samples again and again in real time.
"""

import sys
import time
from pathlib import Path

import numpy as np

from monitor.sources.wire import FrameHeader

RATE = 48000.0


def frame(samples, sample, *, stream="west", rate=RATE):
    name = "cf32_le" if np.iscomplexobj(samples) else "rf32_le"
    return [FrameHeader(stream, sample, rate, name).to_bytes(), samples.tobytes()]


def send_all(socket, samples, *, start=0, step=2400, pace_s=0.0, **more):
    for at in range(0, samples.size, step):
        time.sleep(pace_s)
        socket.send_multipart(frame(samples[at : at + step], start + at, **more))


def main(address, stream, file):
    import zmq

    samples = np.fromfile(file, np.complex64)
    with zmq.Context() as context, context.socket(zmq.PUSH) as push:
        push.linger = 0
        push.bind(address)
        print("bound", flush=True)  # noqa: T201
        began, step = time.monotonic(), 2400
        for number in range(10_000):
            at = number * step % (samples.size - step)
            push.send_multipart(frame(samples[at : at + step], number * step, stream=stream))
            time.sleep(max(0.0, began + (number + 1) * step / RATE - time.monotonic()))


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[2]))
    main(*sys.argv[1:])
