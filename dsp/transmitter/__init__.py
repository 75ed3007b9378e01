"""The test transmitter: streams whose symbols, instants and defects are known exactly."""

from dsp.transmitter.bits import prbs
from dsp.transmitter.live import CHANGEABLE, LiveTransmitter
from dsp.transmitter.spec import TransmitSpec
from dsp.transmitter.stream import Transmission, transmit, transmit_blocks

__all__ = ["CHANGEABLE", "LiveTransmitter", "Transmission", "TransmitSpec", "prbs", "transmit", "transmit_blocks"]
