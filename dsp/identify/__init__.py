"""What a link is, from its samples alone: band, symbol rate, scheme, pulse, carrier; and whether there is one."""

from dsp.acquisition import NotFound
from dsp.identify.findings import Band, Findings, FoundLink, Guess, Identified, Wanted
from dsp.identify.search import identify, placement
from dsp.identify.spectrum import band_about, occupied_band
from dsp.identify.survey import survey_links

__all__ = [
    "Band",
    "Findings",
    "FoundLink",
    "Guess",
    "Identified",
    "NotFound",
    "Wanted",
    "band_about",
    "identify",
    "occupied_band",
    "placement",
    "survey_links",
]
