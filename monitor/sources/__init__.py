"""Where samples come from: files of every kind and standard input, all as blocks."""

from monitor.sources.base import SampleOptions, Source, SourceInfo
from monitor.sources.opening import open_source

__all__ = ["SampleOptions", "Source", "SourceInfo", "open_source"]
